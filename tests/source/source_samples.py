"""What tests of sources share: matrices of every type, and reading them whole or in pieces."""

from __future__ import annotations

import numpy as np

from bigsvd.source import Source

TYPES = ("?", "i1", "u1", "i2", "u2", "i4", "u4", "i8", "u8", "f2", "f4", "f8", "c8", "c16")


def matrix(code: str, shape: tuple[int, int] = (37, 23), seed: int = 1) -> np.ndarray:
    """Random entries over much of the range of a type, in the byte order of its code."""
    dtype = np.dtype(code)
    rng = np.random.default_rng(seed)
    if dtype.kind == "b":
        return rng.random(shape) < 0.5
    if dtype.kind in "iu":
        limits = np.iinfo(dtype)
        values = rng.integers(limits.min, limits.max, shape, dtype=dtype.newbyteorder("="), endpoint=True)
        return values.astype(dtype)
    values = rng.standard_normal(shape)
    if dtype.kind == "c":
        values = values + 1j * rng.standard_normal(shape)
    return values.astype(dtype)


def read_whole(source: Source, order: str = "C") -> np.ndarray:
    """Read all entries into a buffer that holds other values before."""
    rows, columns = source.spec.shape
    out = np.full((rows, columns), 7, source.spec.dtype, order=order)
    source.read((0, rows), (0, columns), out)
    return out


def read_panels(source: Source, rows_a_panel: int, columns_a_panel: int) -> np.ndarray:
    """Read rectangle by rectangle into one buffer, whose parts are not contiguous."""
    rows, columns = source.spec.shape
    out = np.full((rows, columns), 7, source.spec.dtype)
    for r in range(0, rows, rows_a_panel):
        for c in range(0, columns, columns_a_panel):
            r_end, c_end = min(r + rows_a_panel, rows), min(c + columns_a_panel, columns)
            source.read((r, r_end), (c, c_end), out[r:r_end, c:c_end])
    return out


def same(found: np.ndarray, wanted: np.ndarray) -> bool:
    """Whether two arrays hold the same values bit by bit, apart from byte order."""
    native = np.ascontiguousarray(wanted.astype(wanted.dtype.newbyteorder("=")))
    return found.dtype == native.dtype and np.ascontiguousarray(found).tobytes() == native.tobytes()

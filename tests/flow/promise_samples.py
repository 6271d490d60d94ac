"""Sources that count what is read below `read`, change under a run, and files written fast for memory tests."""

from __future__ import annotations

import threading
import zlib
from pathlib import Path
from typing import Any

import numpy as np

from bigsvd.source import MatrixSpec
from bigsvd.sweep import Progress


class CountingSource:
    """A matrix in memory that pretends to be a chunked file, and counts the bytes of the chunks that each read touches.

    Parameters
    ----------
    matrix : ndarray
    chunks : (int, int)
    storage : str
        Storage class that the planner is told.
    """

    def __init__(self, matrix: np.ndarray, chunks: tuple[int, int] = (1, 1), storage: str = "compressed") -> None:
        self.matrix = matrix
        self.spec = MatrixSpec("counted.h5/signal", matrix.shape, matrix.dtype, chunks, storage)
        self.bytes = 0
        self.stage = "before"
        self.by_stage: dict[str, int] = {}
        self.reads = 0
        self._lock = threading.Lock()

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        size = self.matrix.dtype.itemsize
        for unit, (start, stop), length in zip(self.spec.chunks, (rows, columns), self.spec.shape, strict=True):
            size *= min(-(-stop // unit) * unit, length) - start // unit * unit
        with self._lock:
            self.bytes += size
            self.reads += 1
            self.by_stage[self.stage] = self.by_stage.get(self.stage, 0) + size
        out[...] = self.matrix[rows[0] : rows[1], columns[0] : columns[1]]

    def listen(self, event: Progress) -> None:
        """Progress listener: reads are booked under the stage that was announced last."""
        self.stage = event.stage

    def close(self) -> None:
        """Nothing is open."""


class ChangingSource(CountingSource):
    """The same, but one value is another one from the given read of its panel on."""

    def __init__(self, matrix: np.ndarray, place: tuple[int, int], after: int, change: float, **parts: Any) -> None:
        super().__init__(matrix, **parts)
        self.place, self.after, self.change = place, after, change
        self.seen = 0

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        super().read(rows, columns, out)
        row, column = self.place
        # A panel spans the whole width; slices of the exact check do not count.
        if rows[0] <= row < rows[1] and columns[0] <= column < columns[1]:
            with self._lock:
                self.seen += 1
                late = self.seen > self.after
            if late:
                out[row - rows[0], column - columns[0]] += self.change


def stored_bits(factors: Any) -> dict[str, bytes]:
    """Every array of a result, as bytes."""
    certificate = factors.certificate
    parts = {
        "left": factors.left_vectors[:],
        "right": factors.right_vectors[:],
        "values": factors.singular_values[:],
        "mean": factors.column_mean[:],
        "scale": factors.column_scale[:],
        "missed": np.float64(certificate.missed_bound),
        **{f"spectrum {name}": part for name, part in vars(factors.spectrum).items()},
        **certificate.arrays(),
    }
    return {name: np.ascontiguousarray(part).tobytes() for name, part in parts.items()}


def low_rank(rows: int, columns: int, seed: int = 5, kept: int = 12) -> tuple[np.ndarray, np.ndarray]:
    """Two factors whose product decays by 0.7 a component."""
    random = np.random.default_rng(seed)
    return random.standard_normal((rows, kept)) * 0.7 ** np.arange(kept), random.standard_normal((kept, columns))


def write_gzip_counts(path: Path, shape: tuple[int, int], chunks: tuple[int, int], patterns: int = 4) -> None:
    """uint16 in HDF5 with shuffle and gzip: a few chunks compressed once and stored many times over."""
    import h5py

    with h5py.File(path, "w") as file:
        options = {"chunks": chunks, "compression": "gzip", "compression_opts": 1, "shuffle": True}
        dataset = file.create_dataset("signal", shape, "u2", **options)
        for column in range(0, shape[1], chunks[1]):
            packed = []
            for pattern in range(patterns):
                left, right = low_rank(*chunks, seed=pattern + column)
                counts = np.clip(left @ right * 300 + 8000, 0, 65535).astype("u2")
                shuffled = counts.reshape(-1).view(np.uint8).reshape(-1, 2).T.tobytes()
                packed.append(zlib.compress(shuffled, 1))
            for index, row in enumerate(range(0, shape[0], chunks[0])):
                dataset.id.write_direct_chunk((row, column), packed[(index * 3 + index // 5) % patterns])


def write_npy(path: Path, shape: tuple[int, int], dtype: str, *, every: int = 1) -> None:
    """A .npy whose blocks of 256 rows repeat; with `every` above one the others are holes, which read as zeros."""
    left, right = low_rank(256, shape[1])
    block = (left @ right).astype(dtype)
    with path.open("wb") as file:
        header = {"descr": np.dtype(dtype).str, "fortran_order": False, "shape": shape}
        np.lib.format.write_array_header_2_0(file, header)
        start = file.tell()
        for index, row in enumerate(range(0, shape[0], 256)):
            if index % every == 0:
                file.seek(start + row * block.strides[0])
                file.write((block[: shape[0] - row] * (1 + row / shape[0])).astype(dtype).tobytes())
        file.truncate(start + shape[0] * block.strides[0])


def write_zarr(path: Path, shape: tuple[int, int], chunks: tuple[int, int]) -> None:
    """float32 in Zarr with its default compressor."""
    import zarr

    array = zarr.create_array(str(path), shape=shape, chunks=chunks, dtype="f4")
    left, right = low_rank(shape[0], shape[1])
    array[:] = (left @ right).astype("f4")

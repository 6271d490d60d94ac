"""One record of the journal: arrays and a few facts in one file, written whole or not at all, every part checksummed.

8 bytes  "bigsvdJ1"
8 bytes  length of the header, 4 bytes its CRC-32 (both little-endian)
header   JSON: facts, and for every array its name, type, shape, order and CRC-32
arrays   one after the other, as they lie in memory
"""

from __future__ import annotations

import json
import math
import os
import struct
import zlib
from collections.abc import Mapping
from pathlib import Path
from typing import Any, BinaryIO, Literal, NamedTuple

import numpy as np

MAGIC = b"bigsvdJ1"
_LENGTH = struct.Struct("<QI")
_MOST_HEADER = 2**24
_KINDS = "biufc"


class _Described(NamedTuple):
    """What the header says of an array."""

    name: str
    dtype: str
    shape: list[int]
    order: Literal["C", "F"]
    checksum: int


class DamagedRecordError(Exception):
    """The file is not a whole record; its message says what is wrong."""


def write_record(path: Path, facts: Mapping[str, Any], arrays: Mapping[str, np.ndarray]) -> int:
    """Write a record beside `path`, flush it to the device and give it its name.

    Parameters
    ----------
    path : Path
    facts : mapping
        What JSON can hold.
    arrays : mapping of str to ndarray
        Of numbers, any shape; contiguous ones are not copied.

    Returns
    -------
    int
        Bytes written.

    Raises
    ------
    OSError
        If the device refuses; `path` is then as it was before.
    """
    laid = {name: _laid_out(array) for name, array in arrays.items()}
    described = [
        [name, array.dtype.str, list(array.shape), order, zlib.crc32(_bytes_of(array, order))]
        for name, (array, order) in laid.items()
    ]
    header = json.dumps({"facts": dict(facts), "arrays": described}).encode()
    partial = path.with_name(path.name + ".new")
    try:
        with open(partial, "wb") as file:
            file.write(MAGIC + _LENGTH.pack(len(header), zlib.crc32(header)) + header)
            for array, order in laid.values():
                file.write(_bytes_of(array, order))
            size = file.tell()
            file.flush()
            os.fsync(file.fileno())
        os.replace(partial, path)
    except OSError as error:
        partial.unlink(missing_ok=True)
        raise OSError(error.errno, error.strerror, str(path)) from error
    except BaseException:
        partial.unlink(missing_ok=True)
        raise
    return size


def read_record(path: Path) -> tuple[dict[str, Any], dict[str, np.ndarray]]:
    """Read a record and check every part of it.

    Returns
    -------
    facts : dict
    arrays : dict of str to ndarray

    Raises
    ------
    DamagedRecordError
        If any byte is not as it was written.
    OSError
        If the file cannot be read.
    """
    with open(path, "rb") as file:
        facts, described = _begin(file, path)
        arrays = {}
        for name, dtype, shape, order, expected in described:
            array = np.empty(shape, dtype, order=order)
            view = _bytes_of(array, order)
            if file.readinto(view) != len(view) or zlib.crc32(view) != expected:
                raise DamagedRecordError(f"{name} in {path.name} does not match its checksum")
            arrays[name] = array
    return facts, arrays


def read_facts(path: Path) -> dict[str, Any]:
    """Read the facts of a record, and check its header and size but not its arrays.

    Raises
    ------
    DamagedRecordError, OSError
        As `read_record`.
    """
    with open(path, "rb") as file:
        return _begin(file, path)[0]


def _begin(file: BinaryIO, path: Path) -> tuple[dict[str, Any], list[_Described]]:
    """Read and check all that comes before the arrays, and that these have room in the file."""
    size = os.fstat(file.fileno()).st_size
    start = file.read(len(MAGIC) + _LENGTH.size)
    if len(start) < len(MAGIC) + _LENGTH.size or start[: len(MAGIC)] != MAGIC:
        raise DamagedRecordError(f"{path.name} does not begin like a record")
    length, checksum = _LENGTH.unpack(start[len(MAGIC) :])
    if length > min(_MOST_HEADER, size):
        raise DamagedRecordError(f"{path.name} says that its header has {length:,} bytes")
    header = file.read(length)
    if len(header) < length or zlib.crc32(header) != checksum:
        raise DamagedRecordError(f"the header of {path.name} does not match its checksum")
    try:
        facts, described = _understand(header)
    except (ValueError, TypeError, KeyError, RecursionError) as error:
        raise DamagedRecordError(f"the header of {path.name} is none of ours: {error}") from error
    needed = len(start) + length + sum(_size(dtype, shape) for _, dtype, shape, _, _ in described)
    if needed != size:
        raise DamagedRecordError(f"{path.name} has {size:,} bytes and should have {needed:,}")
    return facts, described


def _understand(header: bytes) -> tuple[dict[str, Any], list[_Described]]:
    """Facts, and what is said of every array; refuses what no record of ours says."""
    said = json.loads(header)
    facts, described = dict(said["facts"]), [_Described(*part) for part in said["arrays"]]
    for part in described:
        sides_fit = all(isinstance(side, int) and side >= 0 for side in part.shape)
        if np.dtype(part.dtype).kind not in _KINDS or not sides_fit or part.order not in ("C", "F"):
            raise ValueError(f"array {part.name} of type {part.dtype}, shape {part.shape}, order {part.order}")
    return facts, described


def _laid_out(array: np.ndarray) -> tuple[np.ndarray, str]:
    """The array in one piece, and the order it lies in."""
    if array.dtype.kind not in _KINDS:
        raise TypeError(f"records hold numbers, not {array.dtype}")
    if array.flags.f_contiguous and not array.flags.c_contiguous:
        return array, "F"
    return np.asarray(array, order="C"), "C"


def _bytes_of(array: np.ndarray, order: str) -> memoryview:
    """The bytes of a contiguous array, not copied."""
    flat = (array.T if order == "F" else array).reshape(-1)
    return flat.view(np.uint8).data


def _size(dtype: str, shape: list[int]) -> int:
    """Bytes of an array."""
    return math.prod(shape) * np.dtype(dtype).itemsize

"""The shape of a result store: names, dimensions, chunks and files, and what they cost. Opens nothing."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

FORMAT = 1
VECTORS = {"left_vectors": ("row", "component"), "right_vectors": ("column", "component")}
VALUES = {"singular_values": ("component",), "column_mean": ("column",), "column_scale": ("column",)}
SPECTRUM = ("value", "lower", "upper", "variance", "variance_share", "cumulative_share")
GROUPS = ("spectrum", "certificate")
NAMES = {"row_name": ("row",), "column_name": ("column",)}
MEMBERS = frozenset({"zarr.json", *VECTORS, *VALUES, *GROUPS, *NAMES})

_CHUNK_BYTES = 32 * 2**20
_LARGEST_CHUNK_BYTES = 64 * 2**20
# 2 × 400 files of vectors, 2 × 20 of column_mean and column_scale, as many of names, about 60 others: under 1,000.
_VECTOR_FILES = 400
_VALUE_FILES = 20
_OTHER_FILES = 64


# Names of a chunk, and the text that they may have together: 256 bytes each, or 4 MiB for few. The text is held as
# single strings, packed, encoded and compressed.
_CHUNK_NAMES, _NAME_BYTES, _LEAST_TEXT, _TEXT_COPIES = 16_384, 256, 4 * 2**20, 4
_NAME_DISK = 64


@dataclass(frozen=True)
class VectorGrid:
    """How the vectors of one side are cut: chunks of whole rows, one or more of them to a file.

    Attributes
    ----------
    rows, rank : int
        Shape of the array.
    chunk_rows : int
        Rows of one chunk.
    chunks_per_file : int
        1, or the number of chunks of a shard where single chunks would make too many files.
    """

    rows: int
    rank: int
    chunk_rows: int
    chunks_per_file: int

    @property
    def chunks(self) -> int:
        """Number of chunks."""
        return -(-self.rows // self.chunk_rows)

    @property
    def files(self) -> int:
        """Number of files."""
        return -(-self.chunks // self.chunks_per_file)


@dataclass(frozen=True)
class StoreCost:
    """What writing a result takes.

    Attributes
    ----------
    disk_bytes : int
        Upper bound of the bytes on disk.
    memory_bytes : int
        Upper bound of the bytes that `FactorsWriter` holds at any time, beside what is handed to it.
    files : int
        Upper bound of the number of files.
    """

    disk_bytes: int
    memory_bytes: int
    files: int


def plan_grid(rows: int, rank: int, itemsize: int) -> VectorGrid:
    """Cut an array of `rows` × `rank` entries into chunks of 16–64 MiB (or one smaller one) in at most 400 files.

    Examples
    --------
    >>> plan_grid(100_000, 20, 8)
    VectorGrid(rows=100000, rank=20, chunk_rows=100000, chunks_per_file=1)
    >>> grid = plan_grid(100_000_000, 50, 8)
    >>> grid.chunks, grid.chunks_per_file, grid.files
    (597, 2, 299)
    """
    row_bytes = rank * itemsize
    target = min(max(rows * row_bytes // _VECTOR_FILES, _CHUNK_BYTES), _LARGEST_CHUNK_BYTES)
    chunks = -(-rows // max(target // row_bytes, 1))
    chunk_rows = -(-rows // chunks)
    chunks = -(-rows // chunk_rows)
    return VectorGrid(rows, rank, chunk_rows, -(-chunks // _VECTOR_FILES))


def plan_chunk(length: int, itemsize: int) -> int:
    """Entries per chunk of a one-dimensional array: 32 MiB, or more where that would make over 20 files."""
    return max(min(length, _CHUNK_BYTES // itemsize), -(-length // _VALUE_FILES), 1)


@dataclass(frozen=True)
class NamesCost:
    """How the names of one side are cut, and what writing them holds.

    Attributes
    ----------
    chunk : int
        Names of a chunk.
    text_bytes : int
        Most text of a chunk.
    memory_bytes : int
        Upper bound of what is held: text in its copies, and a number for each name of the side.
    """

    chunk: int
    text_bytes: int
    memory_bytes: int


def plan_names(count: int, decoded_together: int = 0) -> NamesCost:
    """Cut names into at most 20 chunks.

    Parameters
    ----------
    count : int
    decoded_together : int
        Names that their source decodes at a time.

    Examples
    --------
    >>> plan_names(1_000_000)
    NamesCost(chunk=50000, text_bytes=12800000, memory_bytes=75200000)
    """
    chunk = max(_CHUNK_NAMES, -(-count // _VALUE_FILES))
    text = max(_LEAST_TEXT, min(chunk, count) * _NAME_BYTES)
    return NamesCost(min(chunk, max(count, 1)), text, _TEXT_COPIES * text + 24 * count + _NAME_BYTES * decoded_together)


def store_cost(shape: tuple[int, int], rank: int, dtype: np.dtype, names: int = 0) -> StoreCost:
    """Bound the bytes, memory and files of a result before anything is written.

    Parameters
    ----------
    shape : (int, int)
        Rows and columns (m, n) of the decomposed matrix.
    rank : int
        Components k.
    dtype : numpy.dtype
        Type of the stored vectors.
    names : int
        Names of samples and features together; counted on disk with 64 bytes each. For memory see `plan_names`.

    Returns
    -------
    StoreCost

    Examples
    --------
    >>> cost = store_cost((100_000_000, 5_000), 50, np.dtype("float64"))
    >>> cost.disk_bytes // 10**9, cost.memory_bytes // 2**20, cost.files
    (40, 323, 444)
    """
    grids = [plan_grid(side, rank, dtype.itemsize) for side in shape]
    vectors = sum(shape) * rank * dtype.itemsize
    chunk = max(grid.chunk_rows * rank * dtype.itemsize for grid in grids)
    # zstd adds at most 1/256 to what it cannot compress; 1 KiB a component is room for the spectrum beyond the rank.
    disk = vectors + vectors // 256 + 25 * shape[1] + 1024 * rank + 2**20 + _NAME_DISK * names
    files = sum(grid.files for grid in grids) + 4 * _VALUE_FILES + _OTHER_FILES
    # Two buffers and an encoded chunk while streaming; while reading back an encoded and a decoded chunk beside freed
    # buffers that the allocator keeps: 4.0 chunks measured. Mean and scale are read back and opened: 40 bytes a column.
    return StoreCost(disk, 5 * chunk + 40 * shape[1] + 2**22, files)

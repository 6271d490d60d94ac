"""One side's singular vectors, streamed in rows of any number into whole chunks, nothing written twice.

Chunks are encoded here, exactly as their array's metadata says, and not through a Zarr array: a shard can then be
written chunk by chunk, so that memory holds one chunk at any size of the result, and the digest in the manifest is
that of the bytes as they were meant to be written, not as they came back.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from bigsvd.errors import NonFiniteError, OptionError
from bigsvd.factors.files import StoreFiles
from bigsvd.factors.layout import VECTORS, VectorGrid

if TYPE_CHECKING:
    import zarr

# Level 3 is 9 % slower and not smaller on Gaussian doubles (both save 4 %).
ZSTD_LEVEL = 1
_ABSENT = 2**64 - 1


class VectorStream:
    """Writes one array of vectors, rows in increasing order.

    Parameters
    ----------
    group : zarr.Group
        Where the array is made.
    files : StoreFiles
        The files of that group.
    name : str
        ``left_vectors`` or ``right_vectors``.
    grid : VectorGrid
    dtype : numpy.dtype
        Stored type: float32, float64, complex64 or complex128.
    attributes : mapping, optional
        Of the array.
    """

    def __init__(
        self,
        group: zarr.Group,
        files: StoreFiles,
        name: str,
        grid: VectorGrid,
        dtype: np.dtype,
        attributes: Mapping[str, Any] | None = None,
    ) -> None:
        from numcodecs.zstd import Zstd  # type: ignore[import-untyped]
        from zarr.codecs import ZstdCodec

        chunks = (grid.chunk_rows, grid.rank)
        self.array = group.create_array(
            name,
            shape=(grid.rows, grid.rank),
            dtype=dtype,
            chunks=chunks,
            shards=(grid.chunk_rows * grid.chunks_per_file, grid.rank) if grid.chunks_per_file > 1 else None,
            compressors=ZstdCodec(level=ZSTD_LEVEL, checksum=True),
            fill_value=empty_value(dtype),
            dimension_names=VECTORS[name],
            attributes=dict(attributes or {}),
            chunk_key_encoding={"name": "default", "separator": "."},
        )
        self.name, self.grid = name, grid
        self.next_row = 0
        # The first and the last row as stored, by index, to be compared with what Zarr decodes.
        self.ends: dict[int, np.ndarray] = {}
        self._files = files
        self._dtype = dtype.newbyteorder("<")
        self._codec = Zstd(level=ZSTD_LEVEL, checksum=True)
        self._buffer: np.ndarray | None = None
        self._held = 0
        self._chunks_done = 0
        self._index: list[tuple[int, int]] = []
        self._sums: dict[str, tuple[int, hashlib._Hash]] = {}

    @property
    def complete(self) -> bool:
        """Whether every row was written."""
        return self.next_row == self.grid.rows

    @property
    def digests(self) -> dict[str, tuple[int, str]]:
        """Bytes and SHA-256 of every file of chunks, as handed to the file system."""
        return {name: (size, digest.hexdigest()) for name, (size, digest) in self._sums.items()}

    def write(self, start: int, block: np.ndarray) -> None:
        """Take the rows from `start` on; see `FactorsWriter.write_vectors`."""
        self._check(start, block)
        if start == 0 and len(block):
            self.ends[0] = block[:1].astype(self._dtype)
        taken = 0
        while taken < len(block):
            part = block[taken : taken + self.grid.chunk_rows - self._held]
            if len(part) == self.grid.chunk_rows:
                self._put(np.ascontiguousarray(part, dtype=self._dtype))
            else:
                if self._buffer is None:
                    self._buffer = np.zeros((self.grid.chunk_rows, self.grid.rank), self._dtype)
                self._buffer[self._held : self._held + len(part)] = part
                self._held += len(part)
            taken += len(part)
            self.next_row += len(part)
            if self._buffer is not None and (self._held == self.grid.chunk_rows or (self.complete and self._held)):
                self._buffer[self._held :] = 0
                self._put(self._buffer)
                self._held = 0
        if self.complete and len(block):
            self.ends[self.grid.rows - 1] = block[-1:].astype(self._dtype)
            self._buffer = None

    def _check(self, start: int, block: np.ndarray) -> None:
        """Refuse a block that is out of order, of the wrong shape or type, or not finite."""
        asked = f"{self.name}: rows {start:,} to {start + len(block) - 1:,}, shape {block.shape}, {block.dtype}"
        if start != self.next_row or start + len(block) > self.grid.rows:
            raise OptionError(
                f"{self.name} are written in order: row {self.next_row:,} of {self.grid.rows:,} comes next",
                evidence=[asked],
                remedy=f"Write the block that starts at row {self.next_row:,}, no further than the last row.",
            )
        fits = block.ndim == 2 and block.shape[1] == self.grid.rank
        if not fits or not np.can_cast(block.dtype, self._dtype, "same_kind"):
            raise OptionError(
                f"{self.name} take blocks of (rows, {self.grid.rank}) {self._dtype.name}",
                evidence=[asked],
                remedy=f"Give all {self.grid.rank} components of each row, in a type that {self._dtype.name} can hold.",
            )
        finite = np.isfinite(block)
        if not finite.all():
            row, component = (int(index[0]) for index in np.nonzero(~finite))
            raise NonFiniteError(
                f"{self.name} must be finite, row {start + row:,} of component {component} is {block[row, component]}",
                remedy="Run again with --precision double; report it if that does not help.",
            )

    def _put(self, chunk: np.ndarray) -> None:
        """Encode one chunk and append it to its file; close a full shard with its index."""
        data = bytes(self._codec.encode(chunk))
        name = f"{self.name}/c.{self._chunks_done // self.grid.chunks_per_file}.0"
        self._index.append((self._sums[name][0] if name in self._sums else 0, len(data)))
        self._append(name, data)
        self._chunks_done += 1
        if len(self._index) == self.grid.chunks_per_file or self._chunks_done == self.grid.chunks:
            if self.grid.chunks_per_file > 1:
                self._append(name, shard_index(self._index, self.grid.chunks_per_file))
            self._index = []

    def _append(self, name: str, data: bytes) -> None:
        """Add bytes to a file and to its digest."""
        size, digest = self._sums.get(name) or (0, hashlib.sha256())
        digest.update(data)
        self._files.append(name, data)
        self._sums[name] = (size + len(data), digest)


def shard_index(entries: list[tuple[int, int]], chunks_per_file: int) -> bytes:
    """Offset and length of every chunk of a shard, absent ones 2⁶⁴ − 1, and the CRC32C over them (Zarr v3 sharding)."""
    import google_crc32c

    index = np.full((chunks_per_file, 2), _ABSENT, dtype="<u8")
    index[: len(entries)] = np.array(entries, dtype="<u8").reshape(-1, 2)
    data = index.tobytes()
    return data + int(google_crc32c.value(data)).to_bytes(4, "little")


def empty_value(dtype: np.dtype) -> float | complex | int | bool:
    """What an absent chunk reads as: NaN where the type has one, so that a loss never looks like data."""
    if dtype.kind == "c":
        return complex(float("nan"), float("nan"))
    return float("nan") if dtype.kind == "f" else False if dtype.kind == "b" else 0

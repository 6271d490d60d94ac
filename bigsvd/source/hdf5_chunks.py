"""Where the chunks of an HDF5 dataset lie in its file."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from bigsvd.source.rectangle import grid_shape, require_countable

# Beyond this the table would take more than 40 MB beside the panels, and the library keeps the places.
MOST_CHUNKS = 2_000_000


@dataclass(frozen=True, eq=False)
class ChunkTable:
    """Address, stored size and skipped filters of every chunk; 20 bytes a chunk.

    Attributes
    ----------
    offset : ndarray of int64, shape of the chunk grid
        First byte in the file; -1 where the chunk was never written.
    size : ndarray of int64
        Stored bytes.
    skipped : ndarray of uint32
        Bit i is set where filter i was not applied to that chunk.
    """

    offset: np.ndarray
    size: np.ndarray
    skipped: np.ndarray

    @classmethod
    def of(cls, dataset: Any) -> ChunkTable:
        """List the chunks in one walk over the index: asking for them one by one costs a walk each."""
        chunks = dataset.chunks
        grid = grid_shape(dataset.shape, chunks)
        table = cls(np.full(grid, -1, np.int64), np.zeros(grid, np.int64), np.zeros(grid, np.uint32))

        def note(chunk: Any) -> None:
            place = tuple(start // side for start, side in zip(chunk.chunk_offset, chunks, strict=True))
            # Chunks left outside when a dataset was made smaller are not part of it.
            if all(at < side for at, side in zip(place, grid, strict=True)):
                table.offset[place] = chunk.byte_offset
                table.size[place] = chunk.size
                table.skipped[place] = chunk.filter_mask

        dataset.id.chunk_iter(note)
        return table

    def at(self, place: tuple[int, ...]) -> tuple[int, int, int]:
        """Address, stored size and skipped filters of one chunk."""
        return int(self.offset[place]), int(self.size[place]), int(self.skipped[place])


def absent_chunks(dataset: Any, name: str) -> np.ndarray:
    """Mark the chunks that were never written; shape of the chunk grid, a byte a chunk.

    Raises
    ------
    UnsupportedMatrixError
        If there are too many to be looked at one by one.
    """
    chunks = dataset.chunks
    require_countable(grid_shape(dataset.shape, chunks), name)
    absent = np.ones(grid_shape(dataset.shape, chunks), np.bool_)

    def note(chunk: Any) -> None:
        place = tuple(start // side for start, side in zip(chunk.chunk_offset, chunks, strict=True))
        if all(at < side for at, side in zip(place, absent.shape, strict=True)):
            absent[place] = False

    dataset.id.chunk_iter(note)
    return absent

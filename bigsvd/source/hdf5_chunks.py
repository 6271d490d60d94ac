"""Where the chunks of an HDF5 dataset lie in its file."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from bigsvd.source.rectangle import grid_shape


@dataclass(frozen=True, eq=False)
class ChunkTable:
    """Address, stored size and skipped filters of every chunk; 20 bytes a chunk.

    Attributes
    ----------
    offset : ndarray of int64, shape (chunk rows, chunk columns)
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
            if place[0] < grid[0] and place[1] < grid[1]:
                table.offset[place] = chunk.byte_offset
                table.size[place] = chunk.size
                table.skipped[place] = chunk.filter_mask

        dataset.id.chunk_iter(note)
        return table

"""A list of numbers in HDF5 as a matrix of one row, so that it is read, checked and named as matrices are."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np


class OneRow:
    """A one-dimensional HDF5 dataset that shows itself with a first axis of length one.

    Parameters
    ----------
    dataset : h5py.Dataset
        Of one axis. All that is not about axes is its own.
    """

    def __init__(self, dataset: Any) -> None:
        self._dataset = dataset
        self.shape = (1, *dataset.shape)
        self.chunks = None if dataset.chunks is None else (1, *dataset.chunks)
        self.id = _OneRowId(dataset.id)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._dataset, name)


class _OneRowId:
    """The low-level handle, which tells and takes places of chunks by both axes."""

    def __init__(self, handle: Any) -> None:
        self._handle = handle

    def __getattr__(self, name: str) -> Any:
        return getattr(self._handle, name)

    def chunk_iter(self, note: Callable[[Any], None]) -> None:
        """Visit every chunk."""
        self._handle.chunk_iter(lambda chunk: note(chunk._replace(chunk_offset=(0, *chunk.chunk_offset))))

    def read_direct_chunk(self, place: tuple[int, int]) -> Any:
        """Stored bytes of a chunk by its first entry."""
        return self._handle.read_direct_chunk(place[1:])

    def read(self, memory_space: Any, file_space: Any, out: np.ndarray, kind: Any) -> None:
        """Read a selection of one row; the library is told its columns."""
        import h5py

        start, stop = (int(corner[1]) for corner in file_space.get_select_bounds())
        space = h5py.h5s.create_simple(self.shape)
        space.select_hyperslab((start,), (stop - start + 1,))
        self._handle.read(memory_space, space, out, kind)

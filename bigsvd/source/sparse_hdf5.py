"""Sparse matrices in groups of HDF5 files."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from bigsvd.errors import NoMatrixError
from bigsvd.source.access import Access
from bigsvd.source.entries import decoded_type, show_type
from bigsvd.source.hdf5 import Hdf5Source
from bigsvd.source.hdf5_dataset import missing_filters, show_encoding
from bigsvd.source.hdf5_file import library_errors_named, open_hdf5
from bigsvd.source.hdf5_layout import hdf5_axes
from bigsvd.source.hdf5_links import other_files, outside_files, require_path_inside
from bigsvd.source.home import Home
from bigsvd.source.sparse_describe import describe_sparse, opened_layout, surroundings, with_surroundings
from bigsvd.source.sparse_layout import MOST_NUMBERS, ArrayFacts, SparseLayout
from bigsvd.source.sparse_source import SparseSource, new_spec


class Hdf5Group:
    """A group of an HDF5 file, as `recognise` looks at it; links out of the folder are not opened.

    Parameters
    ----------
    file : h5py.File
    path : str
        Of the group.
    home : Home
    """

    def __init__(self, file: Any, path: str, home: Home) -> None:
        self.path = path or "/"
        self._file, self._home = file, home
        # Held open: links are asked by the number of an open group.
        self._group, self._root = file[self.path], file["/"]

    def has(self, name: str) -> bool:
        """Whether something of this name lies in the group; links are not followed."""
        return bool(self._group.id.links.exists(name.encode()))

    def root_has(self, name: str) -> bool:
        """Whether something of this name lies at the root of the file."""
        return bool(self._root.id.links.exists(name.encode()))

    def attribute(self, name: str) -> Any:
        """An attribute of the group, text as str; None where there is none that can be read."""
        return _attribute(self._group, name)

    def root_attribute(self, name: str) -> Any:
        """An attribute of the root of the file."""
        return _attribute(self._root, name)

    def facts(self, name: str) -> ArrayFacts | None:
        """What is known of an array in the group; None where the name is no array."""
        dataset = self._dataset(name)
        if dataset is None:
            return None
        missing = missing_filters(dataset)
        words = f"bytes of a filter that is not installed, {', '.join(missing)}" if missing else ""
        return ArrayFacts(
            dataset.shape,
            None if missing or decoded_type(dataset.dtype) is None else dataset.dtype,
            words or show_type(dataset.dtype),
            show_encoding(dataset),
            dataset.id.get_storage_size(),
            _absent(dataset),
        )

    def numbers(self, name: str) -> list[float]:
        """A list of few numbers, read; empty where it is none."""
        dataset = self._dataset(name)
        # A shape of many axes is none; nothing long is read to find that out.
        if dataset is None or math.prod(dataset.shape) > MOST_NUMBERS or dataset.dtype.kind not in "iuf":
            return []
        self._home.require(self.at(name), other_files(dataset), "virtual sources or external storage")
        found: list[float] = np.ravel(dataset[()]).tolist()
        return found

    def outside(self, layout: SparseLayout | None) -> tuple[str, ...]:
        """Files outside the folder that hold parts of the matrix."""
        names = (layout.values, layout.indices, layout.pointers) if layout is not None else ()
        found = [outside_files(self._file, self.at(name), self._home) for name in names if name]
        return tuple(dict.fromkeys(file for files in found for file in files))

    def at(self, name: str) -> str:
        """Path of a member of the group."""
        return f"{self.path.rstrip('/')}/{name}"

    def _dataset(self, name: str) -> Any:
        import h5py

        if not name or not self.has(name):
            return None
        require_path_inside(self._file, self.at(name), self._home)
        try:
            found = self._group[name]
        except (KeyError, OSError, RuntimeError, ValueError):
            return None
        return found if isinstance(found, h5py.Dataset) and found.shape is not None else None


def _attribute(thing: Any, name: str) -> Any:
    try:
        value = thing.attrs.get(name)
    except (OSError, TypeError, ValueError, KeyError, RuntimeError):
        return None
    if isinstance(value, np.ndarray) and value.shape == (1,) and value.dtype.kind in "SO":
        value = value[0]
    return value.decode("utf-8", "replace") if isinstance(value, bytes) else value


def _absent(dataset: Any) -> int | None:
    """How many chunks of a list were never written; None where that is no question of chunks."""
    if dataset.is_virtual or dataset.external:
        return None
    if dataset.chunks is None:
        return int(dataset.size > 0 and dataset.id.get_storage_size() == 0)
    return max(0, -(-dataset.shape[0] // dataset.chunks[0]) - int(dataset.id.get_num_chunks())) if dataset.ndim else 0


def is_sparse(file: Any, path: str, home: Home, sparse_format: str | None) -> bool:
    """Whether a group holds a sparse matrix, be it one that can be read or not."""
    return describe_sparse(Hdf5Group(file, path, home), sparse_format) is not None


def open_sparse_hdf5(path: str, inside: str, access: Access) -> SparseSource:
    """Open the sparse matrix in a group of an HDF5 file.

    Raises
    ------
    NoMatrixError
        If the group holds no sparse matrix.
    UnsupportedMatrixError, DamagedSourceError
        If it holds one that cannot be read.
    """
    home, name = Home(path, follow=access.follow_links), f"{path}:{inside}"
    with library_errors_named(name), open_hdf5(path) as file:
        group = Hdf5Group(file, inside, home)
        found = opened_layout(group, name, path, access.sparse_format)
        if found is None:
            raise NoMatrixError(f"{name} is a group that holds no sparse matrix", remedy="Name an array.")
        said, layout = found
        said = with_surroundings(said, hdf5_axes(file, inside, said.shape, home))
        values = group.facts(layout.values)
        value_type = values.dtype if values is not None else layout.value_type
        at = {part: group.at(part) for part in (layout.values, layout.indices, layout.pointers) if part}

    def part(which: str) -> Hdf5Source:
        return Hdf5Source(path, at[which], access, one_row=True)

    stored = layout.nonzeros > 0
    assert value_type is not None, "the layout was checked"
    return SparseSource(
        layout,
        (part(layout.values) if stored else None, part(layout.indices) if stored else None, part(layout.pointers)),
        new_spec(
            layout,
            name,
            value_type,
            encoding=said.encoding,
            stored_bytes=said.stored_bytes,
            fingerprint=inside,
            **surroundings(said),
        ),
    )

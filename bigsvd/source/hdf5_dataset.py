"""What an HDF5 dataset says of itself: layout, filters, type and hints, as a candidate."""

from __future__ import annotations

import os
from typing import Any

import numpy as np

from bigsvd.source.candidate import Candidate, why_unusable
from bigsvd.source.entries import decoded_type, show_type
from bigsvd.source.hdf5_direct import decodes_directly
from bigsvd.source.hdf5_file import register_plugins
from bigsvd.source.hdf5_filters import filters_of
from bigsvd.source.hdf5_layout import hdf5_axes
from bigsvd.source.hdf5_names import attribute_text
from bigsvd.source.home import Home
from bigsvd.source.packing import NAMES, Packing, find_packing
from bigsvd.units import show_count, show_shape


def missing_filters(dataset: Any) -> list[str]:
    """Filters that this installation cannot undo, with the number under which they are registered."""
    import h5py

    def absent() -> list[str]:
        return [f"{step.name} (filter {step.number})" for step in chain if not h5py.h5z.filter_avail(step.number)]

    chain = filters_of(dataset)
    if not absent() or decodes_directly(dataset):
        return []
    register_plugins()
    return absent()


def show_encoding(dataset: Any) -> str:
    """Layout, chunks and filters in words."""
    import h5py

    plist = dataset.id.get_create_plist()
    if plist.get_layout() == h5py.h5d.VIRTUAL:
        count = plist.get_virtual_count()
        return f"virtual, put together from {show_count(count)} {'part' if count == 1 else 'parts'}"
    if dataset.chunks is None:
        if plist.get_external_count():
            return "contiguous in external files"
        return "compact" if plist.get_layout() == h5py.h5d.COMPACT else "contiguous"
    words = [
        f"{step.name} {step.options[0]}" if step.number in (1, 32015) and step.options else step.name
        for step in filters_of(dataset)
    ]
    return f"chunks {show_shape(dataset.chunks)}, {' + '.join(words) or 'no filter'}"


def describe(dataset: Any, path: str, *, follow: bool = False) -> Candidate:
    """Say all that is known of a dataset without reading its entries."""
    import h5py

    shape = dataset.shape
    try:
        stored = dataset.dtype
    except (TypeError, ValueError, KeyError, OSError) as error:
        return Candidate(path, shape or (), reason=f"a type that h5py does not know ({error})")
    words = _type_words(dataset, stored)
    numeric = decoded_type(stored) is not None and attribute_text(dataset, "MATLAB_class") != "char"
    reason = _why_no_matrix(dataset, stored) or why_unusable(shape, numeric, words)
    if not reason and "MATLAB_empty" in dataset.attrs:
        reason = "it is empty"
    missing = missing_filters(dataset)
    if not reason and missing:
        reason = f"its filter is not installed: {', '.join(missing)}"
    sized = shape is not None and not h5py.check_vlen_dtype(stored) and stored.kind != "O"
    said = Candidate(
        path=path,
        shape=shape or (),
        dtype=words,
        chunks=dataset.chunks,
        encoding=show_encoding(dataset),
        stored_bytes=dataset.id.get_storage_size(),
        decoded_bytes=int(np.prod(shape, dtype=object)) * stored.itemsize if sized else None,
        usable=not reason,
        reason=reason,
        packing=None if reason else dataset_packing(dataset, decoded_type(stored)),
    )
    if not numeric or shape is None or len(shape) < 2 or 0 in shape:
        # Lists and texts are no matrices in any layout.
        return said
    home = Home(os.path.abspath(dataset.file.filename), follow=follow)
    return said.with_axes(hdf5_axes(dataset.file, dataset.name, shape, home))


def _type_words(dataset: Any, stored: np.dtype) -> str:
    import h5py

    if h5py.check_string_dtype(stored) is not None or attribute_text(dataset, "MATLAB_class") == "char":
        return "text"
    if h5py.check_ref_dtype(stored) is not None:
        return "references to other objects"
    if h5py.check_vlen_dtype(stored) is not None:
        return "lists of unequal length"
    return show_type(stored)


def _why_no_matrix(dataset: Any, stored: np.dtype) -> str:
    """Why records are no matrix, and how their numbers would become one."""
    if attribute_text(dataset, "CLASS") != "TABLE":
        return ""
    if attribute_text(dataset.parent, "pandas_type") == "frame_table":
        return "a pandas table, kept as records row by row: write it again with format='fixed', which keeps a matrix"
    numbers = [name for name in stored.names or () if decoded_type(stored[name]) is not None]
    listed = ", ".join(numbers[:6]) + (", …" if len(numbers) > 6 else "")
    columns = f"its columns of numbers are {listed}" if numbers else "none of its columns holds numbers"
    return f"a PyTables table, kept as records row by row; {columns}: store them side by side as one array"


def dataset_packing(dataset: Any, decoded: np.dtype | None) -> Packing | None:
    """What the attributes of a dataset say of decoding its entries."""
    if decoded is None:
        return None
    found = {}
    for name in NAMES:
        # An attribute that cannot be read decodes nothing; what it was is said.
        try:
            if name in dataset.attrs:
                found[name] = dataset.attrs[name]
        except (OSError, TypeError, ValueError, KeyError, RuntimeError) as error:
            found[name] = f"unreadable ({error})"
    return find_packing(found, decoded)

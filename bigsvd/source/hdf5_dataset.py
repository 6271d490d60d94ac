"""What an HDF5 dataset says of itself: layout, filters, type and hints, as a candidate."""

from __future__ import annotations

from typing import Any

import numpy as np

from bigsvd.source.candidate import Candidate, why_unusable
from bigsvd.source.entries import decoded_type, show_type
from bigsvd.source.hdf5_direct import decodes_directly
from bigsvd.source.hdf5_file import register_plugins
from bigsvd.source.hdf5_filters import filters_of
from bigsvd.source.hints import axis_names, hdf5_hint, sample_axis_from_names
from bigsvd.units import show_count, show_shape

_NOT_APPLIED = ("scale_factor", "add_offset", "_FillValue", "missing_value")
_BOTH = {"scale_factor", "add_offset"}


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


def describe(dataset: Any, path: str) -> Candidate:
    """Say all that is known of a dataset without reading its entries."""
    import h5py

    shape = dataset.shape
    try:
        stored = dataset.dtype
    except (TypeError, ValueError, KeyError, OSError) as error:
        return Candidate(path, shape or (), reason=f"a type that h5py does not know ({error})")
    words = _type_words(dataset, stored)
    numeric = decoded_type(stored) is not None and _text_attribute(dataset, "MATLAB_class") != "char"
    reason = why_unusable(shape, numeric, words)
    if not reason and "MATLAB_empty" in dataset.attrs:
        reason = "it is empty"
    missing = missing_filters(dataset)
    if not reason and missing:
        reason = f"its filter is not installed: {', '.join(missing)}"
    hint, hint_reason = hdf5_hint(dataset, path) if not reason else (None, "")
    names = axis_names(dataset) if not reason else ()
    sample_axes: tuple[int, ...] = ()
    if len(shape or ()) > 2:
        sample_axes, hint_reason = sample_axis_from_names(names, "the dimension scale")
    sized = shape is not None and not h5py.check_vlen_dtype(stored) and stored.kind != "O"
    return Candidate(
        path=path,
        shape=shape or (),
        dtype=words,
        chunks=dataset.chunks,
        encoding=show_encoding(dataset),
        stored_bytes=dataset.id.get_storage_size(),
        decoded_bytes=int(np.prod(shape, dtype=object)) * stored.itemsize if sized else None,
        usable=not reason,
        reason=reason,
        samples_hint=hint,
        hint_reason=hint_reason,
        axis_names=names,
        sample_axes=sample_axes,
    )


def _type_words(dataset: Any, stored: np.dtype) -> str:
    import h5py

    if h5py.check_string_dtype(stored) is not None or _text_attribute(dataset, "MATLAB_class") == "char":
        return "text"
    if h5py.check_ref_dtype(stored) is not None:
        return "references to other objects"
    if h5py.check_vlen_dtype(stored) is not None:
        return "lists of unequal length"
    return show_type(stored)


def _text_attribute(thing: Any, name: str) -> str:
    """An attribute as text; empty where it is missing or does not decode."""
    try:
        value = thing.attrs.get(name, "")
    except (OSError, TypeError, ValueError, KeyError, RuntimeError):
        return ""
    if isinstance(value, np.ndarray) and value.size == 1:
        value = value.reshape(-1)[0]
    return value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value)


def unapplied_attributes(names: set[str]) -> tuple[str, ...]:
    """Caution about attributes by which a reader is expected to decode entries."""
    found = [name for name in _NOT_APPLIED if name in names]
    if not _BOTH & set(found):
        # A fill value alone is written beside most arrays, packed or not.
        found = [name for name in found if name == "missing_value"]
    return (f"attributes {', '.join(found)} are not applied: entries are taken as stored",) if found else ()

"""Boxes of a Zarr array read through zarr-python, where its codecs are not all known here."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from typing import Any

import numpy as np

from bigsvd.source.rectangle import Box
from bigsvd.source.zarr_store import KeyStore, ZipKeys

Reader = Callable[[Box, np.ndarray], None]


def open_zarr(keys: KeyStore, inside: str, zarr_format: int) -> Any:
    """Open an array by zarr-python, directly and not through consolidated metadata, which may be stale."""
    import zarr
    from zarr.storage import LocalStore, ZipStore

    store = ZipStore(keys.path, mode="r") if isinstance(keys, ZipKeys) else LocalStore(keys.path, read_only=True)
    path = f"{keys.root}{inside}".rstrip("/") if isinstance(keys, ZipKeys) else inside
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return zarr.open_array(store=store, path=path, mode="r", zarr_format=2 if zarr_format == 2 else 3)


def python_reader(array: Any) -> Reader:
    """Read through zarr-python's default pipeline, straight into the buffer."""
    from zarr.core.buffer import default_buffer_prototype

    wrap = default_buffer_prototype().nd_buffer.from_numpy_array
    pair = array.dtype.names

    def read(box: Box, out: np.ndarray) -> None:
        selection = tuple(slice(*span) for span in box)
        if len(array.shape) == 1:
            # A list, shown as a matrix of one row.
            selection, out = selection[1:], out[0]
        if pair:
            values = array[selection]
            out.real, out.imag = values[pair[0]], values[pair[1]]
        else:
            array.get_basic_selection(selection, out=wrap(out))

    return read

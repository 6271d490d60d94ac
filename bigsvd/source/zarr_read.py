"""Two ways to decode rectangles of a Zarr array into a buffer: the Rust pipeline, and zarr-python's own."""

from __future__ import annotations

import json
import warnings
from collections.abc import Callable
from typing import Any

import numpy as np

from bigsvd.source.rectangle import Span, fill_by_bands, overlap, touched
from bigsvd.source.zarr_store import DirectoryKeys, KeyStore, ZipKeys

Reader = Callable[[Span, Span, np.ndarray], None]
KeyOf = Callable[[tuple[int, int]], str]


def open_zarr(keys: KeyStore, inside: str, zarr_format: int) -> Any:
    """Open an array by zarr-python, directly and not through consolidated metadata, which may be stale."""
    import zarr
    from zarr.storage import LocalStore, ZipStore

    store = ZipStore(keys.path, mode="r") if isinstance(keys, ZipKeys) else LocalStore(keys.path, read_only=True)
    path = f"{keys.root}{inside}".rstrip("/") if isinstance(keys, ZipKeys) else inside
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return zarr.open_array(store=store, path=path, mode="r", zarr_format=2 if zarr_format == 2 else 3)


def rust_reader(array: Any, keys: KeyStore, key_of: KeyOf, chunks: tuple[int, int]) -> Reader | None:
    """Read through the Rust pipeline; None where it is not installed or does not know all that the array needs.

    It is called without zarr-python's event loop and configuration, and with one thread: nothing outside this
    reader changes, and the workers that call it bring the parallelism.
    """
    if not isinstance(keys, DirectoryKeys):
        return None
    try:
        from zarrs._internal import ChunkItem, CodecPipelineImpl

        pipeline = CodecPipelineImpl(
            json.dumps(array.metadata.to_dict()),
            store_config=array.store,
            validate_checksums=True,
            chunk_concurrent_minimum=1,
            chunk_concurrent_maximum=1,
            num_threads=1,
        )
    except (ImportError, TypeError, ValueError, RuntimeError, OSError):
        return None

    def read(rows: Span, columns: Span, out: np.ndarray) -> None:
        if not out.flags.c_contiguous:
            fill_by_bands(read, rows, columns, out, chunks[0])
            return
        items = []
        for i, j in touched(rows, columns, chunks):
            inner_rows, outer_rows = overlap(i, chunks[0], rows)
            inner_columns, outer_columns = overlap(j, chunks[1], columns)
            places = [inner_rows, inner_columns], list(chunks), [outer_rows, outer_columns], list(out.shape)
            items.append(ChunkItem(key_of((i, j)), *places))
        pipeline.retrieve_chunks_and_apply_index(items, out)

    return read


def python_reader(array: Any) -> Reader:
    """Read through zarr-python's default pipeline, straight into the buffer."""
    from zarr.core.buffer import default_buffer_prototype

    wrap = default_buffer_prototype().nd_buffer.from_numpy_array
    pair = array.dtype.names

    def read(rows: Span, columns: Span, out: np.ndarray) -> None:
        selection = (slice(*rows), slice(*columns))
        if pair:
            values = array[selection]
            out.real, out.imag = values[pair[0]], values[pair[1]]
        else:
            array.get_basic_selection(selection, out=wrap(out))

    return read

"""Whether every chunk of a Zarr array is there: an absent one would be read as the fill value."""

from __future__ import annotations

from typing import Any

import numpy as np

from bigsvd.errors import UnsupportedMatrixError
from bigsvd.source.rectangle import grid_shape
from bigsvd.source.zarr_metadata import ZarrMetadata
from bigsvd.source.zarr_store import KeyStore

MOST_CHUNKS = 100_000_000


def absent_keys(keys: KeyStore, at: str, metadata: ZarrMetadata) -> np.ndarray:
    """Compare the stored keys with the grid, listing folders once and keeping one byte a chunk.

    Returns
    -------
    ndarray of bool, shape (chunk rows, chunk columns)
        True where no value is stored, or an empty one.
    """
    rows, columns = metadata.shape
    grid = grid_shape((rows, columns), (metadata.chunks[0], metadata.chunks[1]))
    if grid[0] * grid[1] > MOST_CHUNKS:
        raise UnsupportedMatrixError(
            f"{keys.path}/{at} has {grid[0] * grid[1]:,} chunks, and more than {MOST_CHUNKS:,} are not handled",
            evidence=[f"{rows:,} × {columns:,} in {metadata.encoding}"],
            remedy="Write the array again in chunks of about a megabyte, or in shards.",
        )
    absent = np.ones(grid, np.bool_)
    folder = "/".join(part for part in (at, metadata.prefix.rstrip("/") if "/" in metadata.prefix else "") if part)
    if metadata.separator == "/":
        for row, is_file in keys.children(folder):
            if not is_file and row.isdecimal() and int(row) < absent.shape[0]:
                _note(absent[int(row)], keys.children(f"{folder}/{row}" if folder else row))
    else:
        start = "" if "/" in metadata.prefix else metadata.prefix
        for name, is_file in keys.children(folder):
            row, _, column = name.removeprefix(start).partition(metadata.separator)
            if is_file and name.startswith(start) and row.isdecimal() and int(row) < absent.shape[0]:
                _note(absent[int(row)], [(column, is_file)])
    return absent


def _note(absent_row: np.ndarray, names: Any) -> None:
    for column, is_file in names:
        if is_file and column.isdecimal() and int(column) < len(absent_row):
            absent_row[int(column)] = False


def other_names(keys: KeyStore, at: str) -> list[str]:
    """Names, beside the metadata, that look like chunks under another key encoding."""
    names = [name for name, _ in keys.children(at) if name[:1].isdecimal() or name == "c" or name.startswith("c.")]
    return sorted(names)[:4]


def absent_inside(keys: KeyStore, key: str, place: tuple[int, int], metadata: ZarrMetadata) -> int:
    """Count the inner chunks that the index of a shard marks as never written; it is checked when the shard is read."""
    index, inner = metadata.index, metadata.inner
    if index is None or inner is None:
        return 0
    raw = keys.part(key, -index.bytes if index.at_end else 0, index.bytes)
    if len(raw) < index.bytes:
        return 0
    rows, columns = (
        -(-min(outer, side - position * outer) // part)
        for outer, part, side, position in zip(metadata.chunks, inner, metadata.shape, place, strict=True)
    )
    return index.absent(index.table(np.frombuffer(raw, np.uint8)), (rows, columns))

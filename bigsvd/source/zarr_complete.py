"""Whether every chunk of a Zarr array is there: an absent one would be read as the fill value."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

from bigsvd.source.complete import SHOWN, first_places
from bigsvd.source.rectangle import grid_shape, require_countable
from bigsvd.source.zarr_metadata import ZarrMetadata
from bigsvd.source.zarr_store import KeyStore
from bigsvd.units import show_count


def absent_keys(keys: KeyStore, at: str, metadata: ZarrMetadata) -> np.ndarray:
    """Compare the stored keys with the grid, listing folders once and keeping one byte a chunk.

    Returns
    -------
    ndarray of bool, shape of the chunk grid
        True where no value is stored, or an empty one.
    """
    grid = grid_shape(metadata.shape, metadata.chunks)
    require_countable(grid, f"{keys.path}/{at}".rstrip("/"))
    absent = np.ones(grid, np.bool_)
    folder = "/".join(part for part in (at, metadata.prefix.rstrip("/") if "/" in metadata.prefix else "") if part)
    if metadata.separator == "/" and not metadata.one_row:
        _note_below(absent, keys, folder)
        return absent
    start = "" if "/" in metadata.prefix else metadata.prefix
    # The first axis of a list that is shown as one row is in no name.
    axes = slice(int(metadata.one_row), None)
    for name, is_file in keys.children(folder):
        place = name.removeprefix(start).split(metadata.separator)
        known = is_file and name.startswith(start) and len(place) == len(grid[axes])
        if known and all(_within(at, side) for at, side in zip(place, grid[axes], strict=True)):
            absent[(*(0,) * metadata.one_row, *map(int, place))] = False
    return absent


def _note_below(absent: np.ndarray, keys: KeyStore, folder: str) -> None:
    """Mark what is there below a folder, whose names count along the first axis."""
    for name, is_file in keys.children(folder):
        if not _within(name, len(absent)) or is_file != (absent.ndim == 1):
            continue
        if is_file:
            absent[int(name)] = False
        else:
            _note_below(absent[int(name)], keys, f"{folder}/{name}" if folder else name)


def _within(name: str, side: int) -> bool:
    """Whether a name is the number of a chunk along an axis with so many."""
    return name.isdecimal() and int(name) < side


def other_names(keys: KeyStore, at: str) -> list[str]:
    """Names, beside the metadata, that look like chunks under another key encoding."""
    names = [name for name, _ in keys.children(at) if name[:1].isdecimal() or name == "c" or name.startswith("c.")]
    return sorted(names)[:4]


class AbsentChunks:
    """Which chunks of an array are absent, and which inside its shards; a byte each.

    Attributes
    ----------
    keys : ndarray of bool, shape of the chunk grid
        Of chunks or, of sharded arrays, of whole shards.
    inside : dict
        By coordinates of a shard, which of its inner chunks are; of those shards only that lack any.
    """

    def __init__(self, keys: np.ndarray) -> None:
        self.keys = keys
        self.inside: dict[tuple[int, ...], np.ndarray] = {}

    def __contains__(self, place: tuple[int, ...]) -> bool:
        return bool(self.keys[place])

    def lacks(self, shard: tuple[int, ...], inner: tuple[int, ...]) -> bool:
        """Whether a chunk inside a shard was found absent."""
        marked = self.inside.get(shard)
        return self.keys[shard] or (marked is not None and bool(marked[inner]))


def count_absent_chunks(
    absent: AbsentChunks, keys: KeyStore, key_of: Callable[[tuple[int, ...]], str], metadata: ZarrMetadata
) -> tuple[int, int, list[tuple[str, tuple[int, ...]]]]:
    """Count the chunks that are absent, those inside shards too, which are marked.

    Returns
    -------
    count, of : int
        Absent ones, and all there should be.
    places : list of (str, tuple of int)
        Of the first: what lacks, in words, and the chunk or shard where it does.
    """
    places: list[tuple[str, tuple[int, ...]]]
    if metadata.inner is None:
        places = [("", place) for place in first_places(absent.keys)]
        return int(absent.keys.sum()), absent.keys.size, places
    count, of, places = 0, 0, []
    for shard in np.ndindex(absent.keys.shape):
        missing, words = math.prod(inner_grid(metadata, shard)), "the shard of "
        of += missing
        if not absent.keys[shard]:
            marked = absent_inside(keys, key_of(shard), shard, metadata)
            missing = int(marked.sum())
            words = f"{show_count(missing)} inside the shard of "
            if missing:
                absent.inside[shard] = marked
        count += missing
        if missing and len(places) < SHOWN:
            places.append((words, shard))
    return count, of, places


def absent_inside(keys: KeyStore, key: str, place: tuple[int, ...], metadata: ZarrMetadata) -> np.ndarray:
    """Mark the inner chunks that the index of a shard names as never written; it is checked when the shard is read."""
    index = metadata.index
    used = inner_grid(metadata, place)
    if index is None:
        return np.zeros(used, np.bool_)
    raw = keys.part(key, -index.bytes if index.at_end else 0, index.bytes)
    if len(raw) < index.bytes:
        return np.zeros(used, np.bool_)
    return index.absent(index.table(np.frombuffer(raw, np.uint8)))[tuple(slice(side) for side in used)]


def inner_grid(metadata: ZarrMetadata, place: tuple[int, ...]) -> tuple[int, ...]:
    """How many of a shard's inner chunks lie in the array, along each axis."""
    return tuple(
        -(-min(outer, side - position * outer) // part)
        for outer, part, side, position in zip(
            metadata.chunks, metadata.inner or metadata.chunks, metadata.shape, place, strict=True
        )
    )

"""Every array in a Zarr store, by its metadata."""

from __future__ import annotations

import math
import os
from dataclasses import replace
from itertools import islice

from bigsvd.errors import OutsideError, SourceError
from bigsvd.source.candidate import Candidate, why_unusable
from bigsvd.source.entries import decoded_type
from bigsvd.source.packing import Packing, find_packing
from bigsvd.source.rectangle import grid_shape
from bigsvd.source.zarr_complete import AbsentChunks, absent_keys, count_absent_chunks
from bigsvd.source.zarr_layout import levels_of, zarr_axes
from bigsvd.source.zarr_metadata import ZarrMetadata, read_metadata
from bigsvd.source.zarr_names import TEXT_CODEC
from bigsvd.source.zarr_store import KeyStore, group_attributes
from bigsvd.units import show_count

MOST_NODES = 20_000
DEEPEST = 32


def walk_zarr(
    keys: KeyStore, start: str = "", most_nodes: int = MOST_NODES, sparse_format: str | None = None
) -> list[Candidate]:
    """List all arrays below a node; what another program left beside them (``._zarr.json``) is not looked at.

    `sparse_format` is as in `Access`.
    """
    # It reads short lists by a source, which describes itself by this file.
    from bigsvd.source.sparse_zarr import sparse_members

    found: list[Candidate] = []
    levels: dict[str, int] = {}
    waiting, seen = [start], 0
    while waiting:
        path = waiting.pop(0)
        seen += 1
        if seen > most_nodes:
            found.append(Candidate("…", reason=f"more than {show_count(most_nodes)} nodes; the rest is not listed"))
            break
        links: list[str] = []
        try:
            array = read_metadata(keys, path)
            attributes = group_attributes(keys, path) if array is None else {}
            for level, name in enumerate(levels_of(attributes).paths):
                levels.setdefault(f"{path}/{name}".strip("/"), level)
            if array is not None:
                stored = stored_bytes(keys, path)
                said = replace(describe_zarr(array, path, keys, stored), level=levels.get(path))
                # Where files are too many to be added up, they are too many to be looked for.
                counted = said.usable and stored is not None
                found.append(replace(said, absent_chunks=count_absent(keys, path, array) if counted else None))
            elif path.count("/") < DEEPEST:
                members = sparse_members(keys, path, sparse_format, found)
                below = islice(keys.children(path, links), most_nodes)
                names = sorted(name for name, is_file in below if not is_file and not name.startswith("."))
                names = [name for name in names if name not in members]
                waiting += [f"{path}/{name}" if path else name for name in names]
            else:
                found.append(Candidate(path, reason=f"groups below {DEEPEST} others are not looked into"))
        except OutsideError as error:
            reason = f"it lies partly in {error.files[0]}, outside the store: add --follow-links to read it"
            found.append(Candidate(path, reason=reason, outside=error.files))
        except SourceError as error:
            found.append(Candidate(path, reason=f"{error.problem} ({'; '.join(error.evidence)})"))
        found += [_linked(keys, link) for link in links]
    return found


def _linked(keys: KeyStore, link: str) -> Candidate:
    """A symbolic link out of the store, which is not looked into."""
    target = os.path.realpath(link)
    reason = f"a symbolic link to {target}, outside the store: add --follow-links to look into it"
    return Candidate(os.path.relpath(link, keys.path), reason=reason, outside=(target,))


def count_absent(keys: KeyStore, path: str, array: ZarrMetadata) -> int | None:
    """How many chunks were never written; None where there are too many to be looked for."""
    if math.prod(grid_shape(array.shape, array.chunks)) > 10_000:
        return None
    at = f"{path}/" if path else ""
    absent = AbsentChunks(absent_keys(keys, path, array))
    return count_absent_chunks(absent, keys, lambda place: at + array.key(place), array)[0]


def describe_zarr(
    array: ZarrMetadata, path: str, keys: KeyStore, stored: int | None, *, follow: bool = False
) -> Candidate:
    """Say all that is known of an array without opening it."""
    numeric = array.dtype is not None and decoded_type(array.dtype) is not None
    reason = why_unusable(array.shape, numeric, array.type_words)
    if array.forbidden == TEXT_CODEC and array.dtype is not None and array.dtype.kind == "O":
        reason = "not numbers but text"
    elif array.forbidden:
        reason = f"its codec {array.forbidden} makes objects, which can run what the writer liked: it is never decoded"
    said = Candidate(
        path=path,
        shape=array.shape,
        dtype=array.type_words,
        chunks=array.chunks,
        encoding=array.encoding,
        stored_bytes=stored,
        decoded_bytes=math.prod(array.shape) * array.dtype.itemsize if array.dtype is not None else None,
        usable=not reason,
        reason=reason,
        packing=None if reason else zarr_packing(array),
    )
    # Lists and texts are no matrices in any layout.
    layout = numeric and len(array.shape) > 1 and 0 not in array.shape
    return said.with_axes(zarr_axes(keys, path, array.shape, follow=follow)) if layout else said


def zarr_packing(array: ZarrMetadata) -> Packing | None:
    """What the attributes of an array say of decoding its entries.

    xarray keeps ``_FillValue`` of format 2 as the fill value of the array. That of others is 0 for want of another, so
    it counts only where xarray named the dimensions and it is not 0, or where entries are scaled.
    """
    stored = decoded_type(array.dtype) if array.dtype is not None else None
    attributes = array.attributes
    if stored is None:
        return None
    ours = array.zarr_format == 2 and "_FillValue" not in attributes and "_ARRAY_DIMENSIONS" in attributes
    scaled = "scale_factor" in attributes or "add_offset" in attributes
    if ours and array.fill is not None and (array.fill != 0 or scaled):
        attributes = {**attributes, "_FillValue": array.fill}
    return find_packing(attributes, stored)


def stored_bytes(keys: KeyStore, path: str, most_files: int = 10_000) -> int | None:
    """Bytes of all values below an array; None where adding them up would take long."""
    total, files, waiting = 0, 0, [path]
    while waiting:
        at = waiting.pop()
        for name, is_file in keys.children(at):
            key = f"{at}/{name}" if at else name
            if not is_file:
                waiting.append(key)
                continue
            files += 1
            if files > most_files:
                return None
            total += keys.size(key) or 0
    return total

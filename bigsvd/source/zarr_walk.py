"""Every array in a Zarr store, by its metadata."""

from __future__ import annotations

import math
import os
from dataclasses import replace
from itertools import islice
from typing import Any

from bigsvd.errors import OutsideError, SourceError
from bigsvd.source.candidate import SPARSE, SPARSE_TYPES, Candidate, why_unusable
from bigsvd.source.entries import decoded_type
from bigsvd.source.hints import NO_HINT, Hint, annotated_hint, hint_from_names, sample_axis_from_names
from bigsvd.source.rectangle import grid_shape
from bigsvd.source.zarr_complete import AbsentChunks, absent_keys, count_absent_chunks
from bigsvd.source.zarr_metadata import ZarrMetadata, read_metadata
from bigsvd.source.zarr_store import KeyStore, read_document
from bigsvd.units import show_count

MOST_NODES = 20_000
DEEPEST = 32


def walk_zarr(keys: KeyStore, start: str = "", most_nodes: int = MOST_NODES) -> list[Candidate]:
    """List all arrays below a node; what another program left beside them (``._zarr.json``) is not looked at."""
    found: list[Candidate] = []
    root = group_attributes(keys, "")
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
            if array is not None:
                stored = stored_bytes(keys, path)
                said = describe_zarr(array, path, root, stored)
                # Where files are too many to be added up, they are too many to be looked for.
                counted = said.usable and stored is not None
                found.append(replace(said, absent_chunks=_absent(keys, path, array) if counted else None))
            elif attributes.get("encoding-type") in SPARSE_TYPES:
                found.append(Candidate(path, reason=SPARSE))
            elif path.count("/") < DEEPEST:
                below = islice(keys.children(path, links), most_nodes)
                names = sorted(name for name, is_file in below if not is_file and not name.startswith("."))
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


def _absent(keys: KeyStore, path: str, array: ZarrMetadata) -> int | None:
    """How many chunks were never written; None where there are too many to be looked for."""
    if math.prod(grid_shape(array.shape, array.chunks)) > 10_000:
        return None
    at = f"{path}/" if path else ""
    absent = AbsentChunks(absent_keys(keys, path, array))
    return count_absent_chunks(absent, keys, lambda place: at + array.key(place), array)[0]


def group_attributes(keys: KeyStore, path: str) -> dict[str, Any]:
    """Attributes of a group in either format; empty where there are none."""
    at = f"{path}/" if path else ""
    third = read_document(keys, f"{at}zarr.json")
    attributes = third.get("attributes") if third is not None else read_document(keys, f"{at}.zattrs")
    return attributes if isinstance(attributes, dict) else {}


def describe_zarr(array: ZarrMetadata, path: str, root: dict[str, Any], stored: int | None) -> Candidate:
    """Say all that is known of an array without opening it."""
    numeric = array.dtype is not None and decoded_type(array.dtype) is not None
    reason = why_unusable(array.shape, numeric, array.type_words)
    if array.forbidden:
        reason = f"its codec {array.forbidden} makes objects, which can run what the writer liked: it is never decoded"
    hint, hint_reason = zarr_hint(array, path, root) if not reason else NO_HINT
    names = zarr_axis_names(array) if not reason else ()
    sample_axes: tuple[int, ...] = ()
    if len(array.shape) > 2:
        sample_axes, hint_reason = sample_axis_from_names(names, _marker(array))
    return Candidate(
        path=path,
        shape=array.shape,
        dtype=array.type_words,
        chunks=array.chunks,
        encoding=array.encoding,
        stored_bytes=stored,
        decoded_bytes=math.prod(array.shape) * array.dtype.itemsize if array.dtype is not None else None,
        usable=not reason,
        reason=reason,
        samples_hint=hint,
        hint_reason=hint_reason,
        axis_names=names,
        sample_axes=sample_axes,
    )


def zarr_hint(array: ZarrMetadata, path: str, root: dict[str, Any]) -> Hint:
    """Look for markers of the AnnData layout, then at the names of the dimensions."""
    hint = annotated_hint(path, root.get("encoding-type"))
    if hint[0]:
        return hint
    return hint_from_names(zarr_axis_names(array), _marker(array))


def _marker(array: ZarrMetadata) -> str:
    """Where the names of the dimensions stand."""
    return "dimension_names" if array.zarr_format == 3 else "_ARRAY_DIMENSIONS"


def zarr_axis_names(array: ZarrMetadata) -> tuple[str, ...]:
    """Names of the axes; empty where none has one, or their number is another."""
    names = tuple(name if isinstance(name, str) else "" for name in array.dimension_names)
    return names if any(names) and len(names) == len(array.shape) else ()


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

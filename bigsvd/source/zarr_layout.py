"""The layout that an array in a Zarr store follows, told by its markers, and what that says of its axes."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import islice
from typing import Any

from bigsvd.errors import SourceError
from bigsvd.source.axes import LABELS, LONGEST_WORD, MOST_NEIGHBOURS, Axes, list_kind, neighbours, votes_of_dimensions
from bigsvd.source.hdf5_layout import annotated_tables
from bigsvd.source.names import Names
from bigsvd.source.zarr_metadata import read_metadata
from bigsvd.source.zarr_names import zarr_names
from bigsvd.source.zarr_store import KeyStore, group_attributes

Above = list[tuple[str, dict[str, Any]]]


def zarr_axes(keys: KeyStore, inside: str, shape: tuple[int, ...], *, follow: bool = False) -> Axes:
    """Recognise the layout around a matrix; metadata only are read.

    Parameters
    ----------
    keys : KeyStore
    inside : str
        Path of the matrix: an array, or the group of a sparse one.
    shape : tuple of int
        Of the matrix as it will be read; other than two sides give the layout only.
    follow : bool
        Whether links out of the store are followed.

    Returns
    -------
    Axes
    """
    try:
        above = _groups_above(keys, inside)
        found = (
            _annotated(keys, inside, shape, follow, above)
            or _pyramid(inside, shape, above)
            or _dimensions(keys, inside, shape, follow)
            or _plain(keys, inside, shape, follow)
        )
        array = read_metadata(keys, inside)
        if found.axis_names or array is None or len(array.dimension_names) != len(shape):
            return found
        return found.called([name[:LONGEST_WORD] if isinstance(name, str) else "" for name in array.dimension_names])
    except SourceError:
        # A marker that cannot be read is no marker; the matrix itself may be fine.
        return Axes("plain Zarr", "markers around it cannot be read")


def _names(keys: KeyStore, inside: str, follow: bool) -> Names | None:
    """Names under a path, None where there are none that can be taken."""
    try:
        return zarr_names(keys, inside, follow=follow)
    except SourceError:
        return None


def _groups_above(keys: KeyStore, inside: str) -> Above:
    """Path and attributes of the groups around an array, the nearest first."""
    parts = inside.split("/")
    bases = ["/".join(parts[:depth]) for depth in range(len(parts) - 1, -1, -1)]
    return [(base, group_attributes(keys, base)) for base in bases]


def _annotated(keys: KeyStore, inside: str, shape: tuple[int, ...], follow: bool, above: Above) -> Axes | None:
    for base, attributes in above:
        at = inside[len(base) :].strip("/")
        before = "" if attributes.get("encoding-type") else _table_kind(keys, f"{base}/obs".strip("/"))
        if attributes.get("encoding-type") == "anndata" or before:
            break
    else:
        return None
    marker = f"encoding-type anndata {attributes.get('encoding-version', '')}".rstrip()
    marker = f"obs is {before}" if before else marker
    tables = annotated_tables(at)
    if tables is None:
        return Axes.of("AnnData", marker, shape=shape)
    names = [_names(keys, f"{base}/{table}", follow) if table else None for table in tables]
    votes = [(0, "AnnData layout: rows are observations")] if tables[0] == "obs" else []
    return Axes.of("AnnData", marker, votes, names, shape=shape)


def _table_kind(keys: KeyStore, obs: str) -> str:
    """How tables were kept before the layout had a marker of its own; empty where it is none of them."""
    table = group_attributes(keys, obs)
    framed = table.get("encoding-type") == "dataframe" and isinstance(table.get("_index"), str)
    return "a table of columns, as before 0.8" if framed else ""


def _pyramid(inside: str, shape: tuple[int, ...], above: Above) -> Axes | None:
    for base, attributes in above:
        found = levels_of(attributes)
        at = inside[len(base) :].strip("/")
        if at in found.paths:
            level = found.paths.index(at)
            said = f"level {level} of {len(found.paths)} of the image at {'/' + base}, {found.marker}"
            axes = f"; axes {' '.join(found.axes)}" if found.axes else ""
            called = found.axes if len(found.axes) == len(shape) else ()
            votes = votes_of_dimensions(called, found.marker)
            layout = LABELS if _labels(attributes, base) else "OME-Zarr"
            return Axes.of(layout, said + axes, votes, shape=shape).called(called)
    return None


def _labels(attributes: dict[str, Any], base: str) -> bool:
    """Whether an image holds numbers of regions of another, which lie below its group ``labels``."""
    newer = attributes.get("ome")
    said = "image-label" in attributes or (isinstance(newer, dict) and "image-label" in newer)
    return said or "labels" in base.split("/")[:-1]


@dataclass(frozen=True)
class Levels:
    """Arrays of one image, the full resolution first.

    Attributes
    ----------
    paths : tuple of str
        Below the group of the image; empty where it is none.
    marker : str
        What says so.
    axes : tuple of str
        Names of the axes, in the order of the arrays.
    """

    paths: tuple[str, ...] = ()
    marker: str = ""
    axes: tuple[str, ...] = ()


def levels_of(attributes: dict[str, Any]) -> Levels:
    """Read the multiscales of OME-Zarr 0.4 and 0.5 from the attributes of a group; of several images the first.

    >>> levels_of({"ome": {"version": "0.5", "multiscales": [{"datasets": [{"path": "0"}, {"path": "1"}]}]}}).paths
    ('0', '1')
    """
    newer = attributes.get("ome")
    newer = newer if isinstance(newer, dict) else {}
    images = newer.get("multiscales") or attributes.get("multiscales")
    image = images[0] if isinstance(images, list) and images and isinstance(images[0], dict) else {}
    datasets = image.get("datasets")
    paths = [one.get("path") for one in datasets if isinstance(one, dict)] if isinstance(datasets, list) else []
    if not paths or not all(isinstance(path, str) for path in paths):
        return Levels()
    version = newer.get("version") or image.get("version") or "of an unknown version"
    axes = image.get("axes")
    # Axes were plain words before 0.4.
    called = [one.get("name") if isinstance(one, dict) else one for one in axes] if isinstance(axes, list) else []
    words = f"multiscales {str(version)[:24]}"
    return Levels(tuple(str(path).strip("/") for path in paths), words, tuple(str(name)[:24] for name in called))


def _dimensions(keys: KeyStore, inside: str, shape: tuple[int, ...], follow: bool) -> Axes | None:
    array = read_metadata(keys, inside)
    if array is None or len(array.dimension_names) != len(array.shape):
        return None
    called = [name if isinstance(name, str) and name else None for name in array.dimension_names]
    if not any(called):
        return None
    marker = "dimension_names" if array.zarr_format == 3 else "_ARRAY_DIMENSIONS"
    folder = inside.rpartition("/")[0]
    names = []
    for name in called:
        coordinate = f"{folder}/{name}".strip("/")
        # A name such as "a/b" would lead elsewhere; the matrix is no list of its own rows.
        taken = name is not None and "/" not in name and coordinate != inside
        names.append(_names(keys, coordinate, follow) if taken else None)
    said = [name and name[:LONGEST_WORD] for name in called]
    votes = votes_of_dimensions(said, marker)
    words = f"{marker} {' × '.join(name or '?' for name in said)}"
    return Axes.of("Zarr with named dimensions (xarray)", words, votes, names, shape=shape)


def _plain(keys: KeyStore, inside: str, shape: tuple[int, ...], follow: bool) -> Axes:
    votes, names = neighbours(_lists(keys, inside, follow), shape)
    return Axes.of("plain Zarr", "no marker of a layout", votes, names, shape=shape)


def _lists(keys: KeyStore, inside: str, follow: bool) -> Iterator[tuple[str, Names]]:
    """Lists of text in the group of a matrix whose names say what they are of."""
    if not inside:
        return
    folder = inside.rpartition("/")[0]
    for name, is_file in islice(keys.children(folder, []), MOST_NEIGHBOURS):
        path = f"{folder}/{name}".strip("/")
        if is_file or path == inside or not list_kind(name):
            continue
        found, array = _names(keys, path, follow), None
        if found is not None:
            array = read_metadata(keys, path)
        if found is not None and array is not None and (array.dtype is None or array.dtype.kind in "OSU"):
            yield name, found

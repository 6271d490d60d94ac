"""The layout that a matrix in an HDF5 file follows, told by its markers, and what that says of its axes."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from itertools import islice
from typing import Any

from bigsvd.errors import SourceError
from bigsvd.source.axes import LONGEST_WORD, MOST_NEIGHBOURS, Axes, Vote, list_kind, neighbours, votes_of_dimensions
from bigsvd.source.hdf5_links import require_path_inside
from bigsvd.source.hdf5_names import Hdf5Names, attribute_text, hdf5_names
from bigsvd.source.home import Home
from bigsvd.source.names import Names

Shape = tuple[int, ...]
# Loom names no attribute as the one that identifies; these are the usual ones (loompy and its users: common practice).
_LOOM_ROWS = ("Gene", "gene", "Genes", "GeneName", "gene_name", "gene_names", "var_names", "Accession", "id")
_LOOM_COLUMNS = ("CellID", "CellId", "cell_id", "cell_names", "obs_names", "Cell", "cell", "barcode", "barcodes", "id")
_R_MARK = "rhdf5-NA.OK"
# What netCDF writes as the NAME of a dimension that has no values (netCDF-4 format specification).
_NO_VARIABLE = "This is a netCDF dimension but not a netCDF variable"


def hdf5_axes(file: Any, inside: str, shape: Shape, home: Home) -> Axes:
    """Recognise the layout around a matrix; nothing of any length is read.

    Parameters
    ----------
    file : h5py.File
    inside : str
        Path of the matrix: a dataset, or the group of a sparse one.
    shape : tuple of int
        Of the matrix as it will be read; other than two sides give the layout only.
    home : Home
        Of the file.

    Returns
    -------
    Axes
    """
    import h5py

    try:
        thing = file[inside]
        if thing.file.filename != file.filename:
            # Behind a link to another file its own surroundings count.
            file, inside = thing.file, thing.name
            home = Home(str(file.filename), follow=home.follow)
        inside = "/" + inside.strip("/")
        for recognise in (_annotated, _barcodes, _loom, _matlab, _nwb, _pandas, _dimensions, _pytables):
            found = recognise(file, thing, inside, shape, home)
            if found is not None:
                return found.called(_called(thing, shape))
        remarks = []
        if isinstance(thing, h5py.Dataset) and _R_MARK in thing.attrs:
            remarks.append(
                f"attribute {_R_MARK} says that R wrote it, which stores a matrix transposed: its rows are the columns"
                " here; if they are the samples, --samples columns"
            )
        votes, names = neighbours(_lists(file, inside, home), shape)
        return Axes.of("plain HDF5", "no marker of a layout", votes, names, shape=shape, remarks=remarks)
    except (OSError, LookupError, ValueError, TypeError, RuntimeError, AttributeError):
        # A marker that cannot be read is no marker; the matrix itself may be fine.
        return Axes("plain HDF5", "markers around it cannot be read")


def _holds(group: Any, *names: str) -> bool:
    """Whether a group has all of these names; no link is followed for it."""
    return all(group.id.links.exists(name.encode()) for name in names)


def _object(file: Any, inside: str, home: Home) -> Any:
    """What lies under a path of the file; None where nothing does, or where the path leads out of the folder."""
    try:
        require_path_inside(file, inside, home)
    except SourceError:
        return None
    return file.get(inside)


def _names(file: Any, inside: str, home: Home) -> Names | None:
    """Names under a path, None where there are none that can be taken."""
    try:
        return hdf5_names(file, inside, home)
    except (SourceError, OSError, KeyError, ValueError, TypeError, RuntimeError):
        return None


def _annotated(file: Any, thing: Any, inside: str, shape: Shape, home: Home) -> Axes | None:
    """AnnData: rows of X and of layers are observations; obsm, varm, obsp and varp follow one of the tables."""
    base = inside
    while base:
        base = base.rpartition("/")[0]
        group = file[base or "/"]
        kind = attribute_text(group, "encoding-type")
        before = "" if kind or not _holds(group, "obs", "var") else _table_kind(_object(file, f"{base}/obs", home))
        if kind == "anndata" or before:
            break
    else:
        return None
    at = inside[len(base) :].strip("/")
    version = f" {attribute_text(group, 'encoding-version')}".rstrip()
    marker = f"obs is {before}" if before else f"encoding-type anndata{version}"
    tables = annotated_tables(at)
    if tables is None:
        return Axes.of("AnnData", marker, shape=shape)
    names = [_names(file, f"{base}/{table}", home) if table else None for table in tables]
    votes = [(0, "AnnData layout: rows are observations")] if tables[0] == "obs" else []
    return Axes.of("AnnData", marker, votes, names, shape=shape)


def annotated_tables(at: str) -> tuple[str, str] | None:
    """Tables that name the rows and the columns of a part of the AnnData layout; None for parts without.

    >>> annotated_tables("X"), annotated_tables("raw/X"), annotated_tables("obsm/scores"), annotated_tables("uns/x")
    (('obs', 'var'), ('obs', 'raw/var'), ('obs', ''), None)
    """
    if at == "X" or at.startswith("layers/"):
        return "obs", "var"
    parts = {"raw/X": ("obs", "raw/var"), "raw.X": ("obs", "raw.var")}
    first = at.split("/", 1)[0]
    # Factors of features have no observations, and distances have them twice.
    return parts.get(at) or {
        "obsm": ("obs", ""),
        "varm": ("var", ""),
        "obsp": ("obs", "obs"),
        "varp": ("var", "var"),
    }.get(first if "/" in at else "")


def _table_kind(thing: Any) -> str:
    """How tables were kept before the layout had a marker of its own; empty where it is none of them."""
    if {"index", "_index"} & set(getattr(getattr(thing, "dtype", None), "names", None) or ()):
        return "a table of records, as before 0.7"
    framed = attribute_text(thing, "encoding-type") == "dataframe" and attribute_text(thing, "_index")
    return "a table of columns, as before 0.8" if framed else ""


def _barcodes(file: Any, thing: Any, inside: str, shape: Shape, home: Home) -> Axes | None:
    """Feature-barcode matrices: a sparse group with its names inside."""
    if hasattr(thing, "dtype") or not _holds(thing, "barcodes"):
        return None
    third = _object(file, f"{inside}/features/id", home) is not None
    if not third and not _holds(thing, "genes"):
        return None
    marker = "barcodes and features beside data" if third else "barcodes and genes beside data, the older form"
    shown, identifiers = ("features/name", "features/id") if third else ("gene_names", "genes")
    cells = _names(file, f"{inside}/barcodes", home)
    called = _names(file, f"{inside}/{shown}", home)
    features = _names(file, f"{inside}/{identifiers}", home)
    if called is not None and (features is None or called.count != features.count):
        features = called
    elif called is not None and features is not None:
        store = Hdf5Names(home.path, f"{inside}/{shown}", also=f"{inside}/{identifiers}", follow=home.follow)
        features = Names(called.count, called.words, store)
    if cells is None or features is None:
        return Axes.of("feature-barcode", marker, shape=shape)
    # Features × barcodes stored by columns is barcodes × features stored by rows; a reader may show it either way.
    turned = shape == (features.count, cells.count) and features.count != cells.count
    votes = [(int(turned), f"feature-barcode layout: barcodes are its {'columns' if turned else 'rows'}")]
    names = (features, cells) if turned else (cells, features)
    return Axes.of("feature-barcode", marker, votes, names, shape=shape)


def _loom(file: Any, thing: Any, inside: str, shape: Shape, home: Home) -> Axes | None:
    """Loom: genes × cells."""
    if not _holds(file, "row_attrs", "col_attrs", "matrix"):
        return None
    at = inside.strip("/")
    if at != "matrix" and not at.startswith("layers/"):
        return None
    version = attribute_text(file, "LOOM_SPEC_VERSION")
    kept = _object(file, "/attrs/LOOM_SPEC_VERSION", home) if not version else None
    if kept is not None and getattr(kept, "shape", None) == ():
        said = kept[()]
        version = said.decode("utf-8", "replace") if isinstance(said, bytes) else str(said)
    words = f", LOOM_SPEC_VERSION {version[:LONGEST_WORD]}" if version else ""
    marker = f"row_attrs and col_attrs beside matrix{words}"
    names = []
    for group, usual in (("row_attrs", _LOOM_ROWS), ("col_attrs", _LOOM_COLUMNS)):
        tries = (_names(file, f"/{group}/{name}", home) for name in usual)
        names.append(next((found for found in tries if found is not None), None))
    return Axes.of("Loom", marker, [(1, "Loom layout: the columns of the matrix are samples")], names, shape=shape)


def _matlab(file: Any, thing: Any, inside: str, shape: Shape, home: Home) -> Axes | None:
    """MATLAB v7.3 reverses the axes."""
    if "MATLAB_class" not in thing.attrs:
        return None
    marker = f"attribute MATLAB_class {attribute_text(thing, 'MATLAB_class')}"
    if not hasattr(thing, "dtype"):
        # A sparse group tells its rows by number, and is not turned.
        return Axes.of("MATLAB v7.3", marker, shape=shape)
    reason = "written by MATLAB, which stores a matrix transposed: its rows are the columns here"
    # Of more axes it says only that they are reversed, not what they hold.
    return Axes.of("MATLAB v7.3", marker, [(1, reason)] if len(shape) == 2 else [], shape=shape)


def _nwb(file: Any, thing: Any, inside: str, shape: Shape, home: Home) -> Axes | None:
    """NWB: time comes first in series."""
    version = attribute_text(file, "nwb_version")
    if not version:
        return None
    series = thing.parent
    kind = attribute_text(series, "neurodata_type")
    timed = inside.endswith("/data") and (_holds(series, "timestamps") or _holds(series, "starting_time"))
    votes: list[Vote] = [(0, f"NWB layout: time comes first in a {kind or 'series'}")] if timed else []
    return Axes.of("NWB", f"nwb_version {version}{f', {kind}' if kind else ''}", votes, shape=shape)


def _pandas(file: Any, thing: Any, inside: str, shape: Shape, home: Home) -> Axes | None:
    """Frames that pandas wrote: of the fixed format each block holds the columns of one type."""
    frame, _, block = inside.rpartition("/")
    kind = attribute_text(file[frame or "/"], "pandas_type")
    if not kind:
        return None
    marker = f"pandas_type {kind}"
    if kind != "frame" or not block.startswith("block"):
        return Axes.of("pandas", marker, shape=shape)
    count = attribute_text(file[frame or "/"], "nblocks")
    remarks = []
    if count not in ("", "1"):
        remarks.append(
            f"it is one of {count} blocks of a pandas frame, one for each type of column: only its own columns"
        )
    items = f"{frame}/{block.removesuffix('_values')}_items"
    names = [_labels(file, f"{frame}/axis1", home), _labels(file, items, home)]
    return Axes.of("pandas", marker, (), names, shape=shape, remarks=remarks)


def _labels(file: Any, inside: str, home: Home) -> Names | None:
    """Labels of a pandas axis; those that were pickled are never read."""
    found = _names(file, inside, home)
    kind = attribute_text(file[inside], "kind") if found is not None else ""
    if found is None or not kind.startswith("datetime64"):
        return found
    unit = kind.partition("[")[2].rstrip("]") or "ns"
    return Names(found.count, found.words, Hdf5Names(home.path, inside, dates=unit, follow=home.follow))


def _dimensions(file: Any, thing: Any, inside: str, shape: Shape, home: Home) -> Axes | None:
    """netCDF-4, and plain dimension scales: axes have names, and often values."""
    scales = [_scale(thing, axis) for axis in range(len(shape))] if hasattr(thing, "dims") else []
    properties = attribute_text(file, "_NCProperties")
    called = [name for name, _ in scales]
    if not properties and not any(called):
        return None
    layout = "netCDF-4" if properties or "_Netcdf4Dimid" in thing.attrs else "HDF5 with dimension scales"
    said = f"axes {' × '.join(name or '?' for name in called)}" if any(called) else ""
    marker = "; ".join(filter(None, ["_NCProperties" if properties else "", said]))
    names = [
        hdf5_names_of(file, scale, home) if scale is not None and len(scale.shape) == 1 else None for _, scale in scales
    ]
    votes = votes_of_dimensions(called, "the dimension scale")
    return Axes.of(layout, marker, votes, names, shape=shape)


def hdf5_names_of(file: Any, dataset: Any, home: Home) -> Names | None:
    """Names that a dataset holds, if it lies in this file and its numbers mean what they are."""
    if {"scale_factor", "add_offset"} & set(dataset.attrs):
        return None
    return _names(file, dataset.name, home) if dataset.name and dataset.file.filename == file.filename else None


def _called(thing: Any, shape: Shape) -> list[str]:
    """Names of the axes."""
    return [_scale(thing, axis)[0] for axis in range(len(shape))] if hasattr(thing, "dims") else []


def _scale(thing: Any, axis: int) -> tuple[str, Any]:
    """Name of an axis, its label or that of the first scale attached to it; and the scale, if that holds values."""
    dimension = thing.dims[axis]
    scale = dimension[0] if len(dimension) else None
    name = dimension.label or (str(scale.name).rsplit("/", 1)[-1] if scale is not None else "")
    empty = scale is not None and attribute_text(scale, "NAME").startswith(_NO_VARIABLE)
    # h5py hands out bytes where a label is no UTF-8.
    text = name.decode("utf-8", "surrogateescape") if isinstance(name, bytes) else str(name)
    text = text.removeprefix("_nc4_non_coord_")[:LONGEST_WORD]
    # netCDF-4 makes up a name for a dimension without a scale of its own.
    return "" if text.startswith("phony_dim_") else text, None if empty else scale


def _pytables(file: Any, thing: Any, inside: str, shape: Shape, home: Home) -> Axes | None:
    """PyTables keeps no names beside an array."""
    version = attribute_text(file, "PYTABLES_FORMAT_VERSION")
    if not version:
        return None
    leaf = attribute_text(thing, "CLASS")
    votes, names = neighbours(_lists(file, inside, home), shape)
    marker = f"PYTABLES_FORMAT_VERSION {version}{f', {leaf}' if leaf else ''}"
    return Axes.of("PyTables", marker, votes, names, shape=shape)


def _lists(file: Any, inside: str, home: Home) -> Iterator[tuple[str, Names]]:
    """Lists of text in the group of a matrix whose names say what they are of."""
    import h5py

    parent = inside.rpartition("/")[0]
    group: Sequence[str] = file[parent or "/"]
    for name in islice(group, MOST_NEIGHBOURS):
        if not list_kind(name):
            continue
        found = _names(file, f"{parent}/{name}", home)
        thing = file.get(f"{parent}/{name}") if found is not None else None
        if found is not None and isinstance(thing, h5py.Dataset) and h5py.check_string_dtype(thing.dtype) is not None:
            yield name, found

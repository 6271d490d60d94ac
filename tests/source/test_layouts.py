"""The layout of a matrix is told by its markers, said in words, and tells which axis holds samples, and the names."""

from __future__ import annotations

import shlex
from collections.abc import Callable
from functools import partial
from pathlib import Path

import h5py
import layout_samples as made
import numpy as np
import pytest
from layout_samples import CELLS, COLUMNS, GENES, ROWS, numbers, versions
from source_samples import read_whole

from bigsvd.report import survey_facts, survey_lines
from bigsvd.source import Access, Candidate, Names, open_source, survey
from bigsvd.source.axes import Axes, list_kind
from bigsvd.source.hdf5_layout import hdf5_axes
from bigsvd.source.home import Home

TENS = [str(10 * number) for number in range(ROWS)]


def all_of(names: Names | None) -> list[str] | None:
    return None if names is None else [name for block in names.blocks() for name in block]


Case = tuple[Callable[[Path], Path], str, str, str, str | None, list[str] | None, list[str] | None, str]
CASES: dict[str, Case] = {
    "AnnData in HDF5": (
        *(partial(made.write_annotated, kind="hdf5"), "/X", "AnnData", "encoding-type anndata 0.1.0", "rows"),
        *(CELLS, GENES, "anndata"),
    ),
    "AnnData in Zarr": (
        *(partial(made.write_annotated, kind="zarr"), "X", "AnnData", "encoding-type anndata 0.1.0", "rows"),
        *(CELLS, GENES, "anndata"),
    ),
    "AnnData before 0.7": (
        *(made.write_records, "/X", "AnnData", "obs is a table of records, as before 0.7", "rows", CELLS, GENES, ""),
    ),
    "Loom": (
        *(made.write_loom, "/matrix", "Loom", "row_attrs and col_attrs beside matrix, LOOM_SPEC_VERSION 3.0.0"),
        *("columns", GENES, CELLS, ""),
    ),
    "MATLAB": (*(made.write_matlab, "/A", "MATLAB v7.3", "attribute MATLAB_class double", "columns", None, None, ""),),
    "NWB": (
        *(made.write_series, "/acquisition/probe/data", "NWB", "nwb_version 2.7.0, ElectricalSeries", "rows"),
        *(None, None, ""),
    ),
    "pandas": (
        *(made.write_frames, "/plain/block0_values", "pandas", "pandas_type frame", None, CELLS, GENES, "pandas"),
    ),
    "PyTables": (
        *(
            made.write_pytables,
            "/frames",
            "PyTables",
            "PYTABLES_FORMAT_VERSION 2.1, CARRAY",
            None,
            None,
            None,
            "tables",
        ),
    ),
    "netCDF-4 by netCDF4": (
        *(partial(made.write_netcdf, engine="netcdf4"), "/expression", "netCDF-4"),
        *("_NCProperties; axes gene × cell", "columns", GENES, TENS, "netCDF4"),
    ),
    "netCDF-4 by h5netcdf": (
        *(partial(made.write_netcdf, engine="h5netcdf"), "/expression", "netCDF-4"),
        *("_NCProperties; axes gene × cell", "columns", GENES, TENS, "h5netcdf"),
    ),
    "xarray, Zarr 2": (
        *(partial(made.write_xarray_zarr, zarr_format=2), "expression", "Zarr with named dimensions (xarray)"),
        *("_ARRAY_DIMENSIONS gene × cell", "columns", GENES, TENS, "xarray"),
    ),
    "xarray, Zarr 3": (
        *(partial(made.write_xarray_zarr, zarr_format=3), "expression", "Zarr with named dimensions (xarray)"),
        *("dimension_names gene × cell", "columns", GENES, TENS, "xarray"),
    ),
    "tensorstore, Zarr 2": (
        *(partial(made.write_tensorstore, driver="zarr"), "", "plain Zarr", "no marker of a layout"),
        *(None, None, None, "tensorstore"),
    ),
    "tensorstore, Zarr 3": (
        *(partial(made.write_tensorstore, driver="zarr3"), "", "Zarr with named dimensions (xarray)"),
        *("dimension_names time × pixel", "rows", None, None, "tensorstore"),
    ),
}


@pytest.mark.parametrize("which", CASES)
def test_a_layout_is_recognised_with_its_marker_its_samples_and_its_names(which: str, tmp_path: Path) -> None:
    write, path, layout, marker, hint, rows, columns, library = CASES[which]
    file = write(tmp_path / "file")
    told = versions(library) if library else "written by hand"
    found = {one.path: one for one in survey(file)}[path]
    assert (found.layout, found.marker, found.samples_hint) == (layout, marker, hint), told
    source = open_source(file, path or None)
    assert (source.spec.layout, source.spec.marker, source.spec.samples_hint) == (layout, marker, hint), told
    assert all_of(source.spec.row_names) == rows, told
    assert all_of(source.spec.column_names) == columns, told
    entries = read_whole(source)
    expected = numbers().T if hint == "columns" else numbers()
    np.testing.assert_allclose(entries, expected, rtol=1e-7)
    source.close()


@pytest.mark.parametrize("which", CASES)
def test_inspect_says_the_layout_why_and_the_line_to_type(which: str, tmp_path: Path) -> None:
    write, path, layout, marker, hint, *_ = CASES[which]
    file = write(tmp_path / "file")
    found = survey(file)
    lines = survey_lines(str(file), found, 2000)
    assert any(line.startswith(f"Taken for {layout} ({marker}): ") for line in lines), lines
    command = next(one["command"] for one in survey_facts(str(file), found)["matrices"] if one["path"] == path)
    assert f"  {command}" in lines
    words = shlex.split(command)
    assert words[:3] == ["bigsvd", "decompose", str(file)]
    assert ("columns" in words) is (hint == "columns")


def test_a_feature_barcode_group_is_recognised_and_names_its_axes_either_way(tmp_path: Path) -> None:
    # The group itself is read by the sparse reader; its surroundings are told here.
    file = made.write_barcodes(tmp_path / "file.h5")
    (group,) = [one for one in survey(file) if one.path == "/matrix"]
    assert (group.layout, group.marker) == ("feature-barcode", "barcodes and features beside data")

    def axes(*shape: int) -> Axes:
        with h5py.File(file) as opened:
            return hdf5_axes(opened, "/matrix", shape, Home(str(file), follow=False))

    by_cell, by_feature = axes(ROWS, COLUMNS), axes(COLUMNS, ROWS)
    assert (by_cell.samples_hint, by_feature.samples_hint) == ("rows", "columns")
    # Identifiers stand behind names that repeat.
    features = ["TBCE (ENS000)", "TBCE (ENS001)", *GENES[2:]]
    assert all_of(by_cell.column_names) == all_of(by_feature.row_names) == features
    assert all_of(by_cell.row_names) == [f"ACGT-{number}" for number in range(ROWS)]


def test_layers_raw_and_scores_of_an_annotated_file_follow_their_tables(tmp_path: Path) -> None:
    found = {one.path: one for one in survey(made.write_annotated(tmp_path / "a.h5ad", "hdf5"))}
    assert all_of(found["/layers/scaled"].column_names) == GENES
    assert all_of(found["/raw/X"].column_names) == GENES
    place = found["/obsm/place"]
    assert (place.samples_hint, all_of(place.row_names), place.column_names) == ("rows", CELLS, None)


def test_tables_are_explained_and_a_frame_of_two_types_says_so(tmp_path: Path) -> None:
    found = {one.path: one for one in survey(made.write_frames(tmp_path / "f.h5"))}
    assert "format='fixed'" in found["/rows/table"].reason
    assert found["/mixed/block0_values"].remarks == (
        "it is one of 2 blocks of a pandas frame, one for each type of column: only its own columns",
    )
    assert all_of(found["/dated/block0_values"].row_names)[1].startswith("2026-03-02T00:00:00")
    events = {one.path: one for one in survey(made.write_pytables(tmp_path / "t.h5"))}["/events"]
    assert events.reason == (
        "a PyTables table, kept as records row by row; its columns of numbers are when, size: store them side by side"
        " as one array"
    )


# ------------------------------------------------------------------------------------------- files without a layout
def beside(path: Path, shape: tuple[int, int], **lists: int) -> Candidate:
    """A plain file with lists of text beside a matrix."""
    with h5py.File(path, "w") as file:
        file["x"] = np.zeros(shape)
        for name, count in lists.items():
            file[name] = np.array([f"{name} {number}" for number in range(count)], object)
    return next(one for one in survey(path) if one.path == "/x")


def test_the_length_of_a_list_of_names_settles_the_samples(tmp_path: Path) -> None:
    one = beside(tmp_path / "a.h5", (23, 37), gene_names=23)
    assert one.samples_hint == "columns"
    assert one.hint_reason == "gene_names holds 23 names of features, as many as there are rows"
    assert all_of(one.row_names)[:2] == ["gene_names 0", "gene_names 1"]
    assert one.column_names is None
    assert beside(tmp_path / "b.h5", (23, 37), cells=23, genes=37).samples_hint == "rows"


def test_lists_that_contradict_fit_no_side_or_both_settle_nothing(tmp_path: Path) -> None:
    assert beside(tmp_path / "a.h5", (23, 37), cells=23, samples=37).samples_hint == "contradictory"
    assert beside(tmp_path / "b.h5", (23, 37), cells=22).samples_hint is None
    square = beside(tmp_path / "c.h5", (23, 23), cells=23)
    assert (square.samples_hint, square.row_names) == (None, None)
    named = beside(tmp_path / "d.h5", (23, 37), rownames=23, colnames=37)
    assert named.samples_hint is None
    assert all_of(named.row_names)[0] == "rownames 0"
    assert all_of(named.column_names)[0] == "colnames 0"


def test_what_R_leaves_is_a_remark_and_no_more(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "r.h5", "w") as file:
        file["x"] = numbers()
        file["x"].attrs["rhdf5-NA.OK"] = 1
    (one,) = survey(tmp_path / "r.h5")
    assert one.samples_hint is None
    assert "R wrote it, which stores a matrix transposed" in one.remarks[0]
    assert open_source(tmp_path / "r.h5").spec.cautions == one.remarks


def test_names_whose_number_is_wrong_are_left_out_and_that_is_said(tmp_path: Path) -> None:
    file = made.write_records(tmp_path / "a.h5")
    with h5py.File(file, "r+") as opened:
        del opened["X"]
        opened["X"] = numbers()[:-1]
    spec = open_source(file, "X").spec
    assert spec.row_names is None
    assert all_of(spec.column_names) == GENES
    assert spec.cautions == ("names of rows are not taken: obs/index holds 37 names and the matrix has 36 rows",)


def test_markers_that_cannot_be_read_leave_the_matrix_as_it_is(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.attrs["encoding-type"] = "anndata"
        file["X"] = numbers()
        file["obs"] = h5py.SoftLink("/nowhere")
        file["var"] = h5py.ExternalLink("/etc/hostname", "/x")
    spec = open_source(tmp_path / "a.h5").spec
    assert (spec.layout, spec.row_names, spec.column_names) == ("AnnData", None, None)


def test_no_link_out_of_the_folder_is_followed_to_recognise_a_layout(tmp_path: Path) -> None:
    (tmp_path / "here").mkdir()
    made.write_records(tmp_path / "far.h5")
    with h5py.File(tmp_path / "here" / "a.h5", "w") as file:
        file["X"] = numbers()
        for table in ("obs", "var"):
            file[table] = h5py.ExternalLink("../far.h5", f"/{table}")
    assert open_source(tmp_path / "here" / "a.h5", "X").spec.layout == "plain HDF5"
    followed = open_source(tmp_path / "here" / "a.h5", "X", Access(follow_links=True)).spec
    assert followed.layout == "AnnData"
    assert all_of(followed.row_names) == CELLS


@pytest.mark.parametrize(("name", "kind"), [("Barcodes", "samples"), ("var_names", "features"), ("notes", "")])
def test_words_of_lists(name: str, kind: str) -> None:
    assert list_kind(name) == kind

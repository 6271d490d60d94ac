"""A survey names every array with its size, type and encoding, why it may not do, and which axis holds samples."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import zarr
from source_samples import matrix

from bigsvd.source import Candidate, open_source, survey
from bigsvd.source.hdf5_walk import walk_hdf5
from bigsvd.source.home import Home
from bigsvd.source.zarr_store import open_keys
from bigsvd.source.zarr_walk import walk_zarr


def by_path(found: list[Candidate]) -> dict[str, Candidate]:
    return {candidate.path: candidate for candidate in found}


def test_a_survey_of_hdf5_names_sizes_types_filters_and_reasons(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", data=matrix("u2"), chunks=(10, 7), compression="gzip", shuffle=True)
        file.create_dataset("deep/er/y", data=np.zeros((2, 3, 4), ">f4"))
        file["text"] = "words"
        file["null"] = h5py.Empty("f4")
    found = by_path(survey(tmp_path / "a.h5"))
    assert set(found) == {"/x", "/deep/er/y", "/text", "/null"}
    x = found["/x"]
    assert (x.shape, x.dtype, x.chunks, x.usable) == ((37, 23), "uint16", (10, 7), True)
    assert x.encoding == "chunks 10 × 7, shuffle + gzip 4"
    assert x.decoded_bytes == 37 * 23 * 2
    assert x.stored_bytes
    assert found["/deep/er/y"].dtype == "float32 big-endian"
    assert (found["/deep/er/y"].usable, found["/deep/er/y"].option) == (True, "0")
    assert found["/deep/er/y"].encoding == "contiguous"
    assert "not numbers but text" in found["/text"].reason
    assert "holds no values" in found["/null"].reason


def test_a_survey_of_zarr_names_sizes_types_codecs_and_reasons(tmp_path: Path) -> None:
    group = zarr.create_group(tmp_path / "a")
    group.create_array("x", data=matrix("u2"), chunks=(10, 7), shards=(20, 14))
    group.create_array("deep/y", data=np.zeros(4, ">f4"))
    (tmp_path / "a" / "x" / "._zarr.json").write_text("left by a copy")
    (tmp_path / "a" / "broken").mkdir()
    (tmp_path / "a" / "broken" / "zarr.json").write_text("{")
    found = by_path(survey(tmp_path / "a"))
    assert set(found) == {"x", "deep/y", "broken"}
    x = found["x"]
    assert (x.shape, x.dtype, x.chunks, x.usable) == ((37, 23), "uint16", (20, 14), True)
    assert x.encoding.startswith("chunks 10 × 7 in shards 20 × 14, zstd")
    assert x.decoded_bytes == 37 * 23 * 2
    assert x.stored_bytes
    assert "1-D" in found["deep/y"].reason
    assert "cannot be read" in found["broken"].reason


def test_links_that_go_in_circles_end_and_broken_ones_are_listed(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "other.h5", "w") as file:
        file["far"] = matrix("f4")
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["group/x"] = matrix("f4")
        file["group/again"] = file["/"]
        file["group/up"] = h5py.SoftLink("/group")
        file["same"] = h5py.SoftLink("/group/x")
        file["gone"] = h5py.SoftLink("/nowhere")
        file["round"] = h5py.SoftLink("/round")
        file["away"] = h5py.ExternalLink("missing.h5", "/x")
        file["near"] = h5py.ExternalLink("other.h5", "/far")
    found = by_path(survey(tmp_path / "a.h5"))
    assert set(found) == {"/group/x", "/gone", "/round", "/away", "/near"}
    assert found["/gone"].reason == "a broken link to /nowhere"
    assert found["/away"].reason == "a broken link to /x in missing.h5"
    assert found["/near"].usable
    assert open_source(tmp_path / "a.h5", "near").spec.shape == (37, 23)


def test_walks_are_bounded_and_say_so(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        for number in range(40):
            file[f"g{number}/x"] = 1.0
        found = walk_hdf5(file, Home(str(tmp_path / "a.h5"), follow=False), most_objects=50)
    assert 10 < len(found) < 40
    assert "more than 50 objects" in found[-1].reason
    group = zarr.create_group(tmp_path / "z")
    for number in range(20):
        group.create_group(f"g{number}")
    assert "more than 10 nodes" in walk_zarr(open_keys(str(tmp_path / "z")), most_nodes=10)[-1].reason


def scaled(file: h5py.File, names: tuple[str, str]) -> None:
    """A dataset with a dimension scale on both axes."""
    file["x"] = matrix("f4")
    for axis, name in enumerate(names):
        file[name] = np.arange(file["x"].shape[axis])
        file[name].make_scale(name)
        file["x"].dims[axis].attach_scale(file[name])


def annotated(file: h5py.File) -> None:
    file.attrs["encoding-type"] = "anndata"
    file["X"] = matrix("f4")


def loom(file: h5py.File) -> None:
    file["matrix"] = matrix("f4")
    for name in ("row_attrs", "col_attrs", "layers"):
        file.create_group(name)


def matlab(file: h5py.File) -> None:
    file["x"] = matrix("f4")
    file["x"].attrs["MATLAB_class"] = np.bytes_("single")


def labelled(file: h5py.File) -> None:
    file["x"] = matrix("f4")
    file["x"].dims[1].label = "cell"


@pytest.mark.parametrize(
    ("make", "hint", "marker"),
    [
        (annotated, "rows", "AnnData"),
        (loom, "columns", "Loom"),
        (matlab, "columns", "MATLAB"),
        (labelled, "columns", "'cell'"),
        (lambda file: scaled(file, ("time", "pixel")), "rows", "'time'"),
        (lambda file: scaled(file, ("gene", "sample")), "columns", "'gene'"),
        (lambda file: scaled(file, ("time", "cell")), "contradictory", "names axis 1 'cell'"),
        (lambda file: scaled(file, ("lat", "lon")), None, ""),
    ],
)
def test_sure_markers_in_hdf5_tell_which_axis_holds_samples(
    tmp_path: Path, make: Any, hint: str | None, marker: str
) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        make(file)
    spec = open_source(tmp_path / "a.h5").spec
    assert spec.samples_hint == hint
    assert marker in spec.hint_reason
    found = [candidate for candidate in survey(tmp_path / "a.h5") if candidate.usable]
    assert [candidate.samples_hint for candidate in found] == [hint]


@pytest.mark.parametrize(
    ("zarr_format", "names", "hint"),
    [
        (3, ("time", "pixel"), "rows"),
        (3, ("gene", "cell"), "columns"),
        (3, (None, "obs"), "columns"),
        (3, ("x", "y"), None),
        (2, ("frame", "pixel"), "rows"),
        (2, ("feature", "sample"), "columns"),
    ],
)
def test_dimension_names_in_zarr_tell_which_axis_holds_samples(
    tmp_path: Path, zarr_format: Any, names: tuple[str | None, str], hint: str | None
) -> None:
    named: dict[str, Any] = (
        {"dimension_names": names} if zarr_format == 3 else {"attributes": {"_ARRAY_DIMENSIONS": list(names)}}
    )
    zarr.create_array(tmp_path / "a", data=matrix("f4"), zarr_format=zarr_format, **named)
    assert open_source(tmp_path / "a").spec.samples_hint == hint


def test_the_anndata_layout_in_zarr_has_samples_in_rows(tmp_path: Path) -> None:
    group = zarr.create_group(tmp_path / "a", attributes={"encoding-type": "anndata"})
    group.create_array("X", data=matrix("f4"))
    group.create_array("varm/loadings", data=matrix("f4"))
    found = by_path(survey(tmp_path / "a"))
    assert found["X"].samples_hint == "rows"
    assert found["varm/loadings"].samples_hint is None

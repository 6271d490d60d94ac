"""Images in several resolutions: the full one by default, another by --level, and never a choice between copies."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zarr

import bigsvd
from bigsvd.errors import NoMatrixError, OptionError, SeveralMatricesError
from bigsvd.report import survey_lines
from bigsvd.source import survey

FULL = np.random.default_rng(8).normal(size=(40, 24)).astype("f4")


def image(group: Any, zarr_format: int, *, order: tuple[str, ...] = ("0", "1", "2")) -> None:
    """An image of two axes in three resolutions, as OME-Zarr 0.4 (attributes) and 0.5 (attributes.ome) describe it."""
    for step, path in enumerate(order):
        group.create_array(path, data=FULL[:: 2**step, :: 2**step], chunks=(10, 10))
    axes = [{"name": "y", "type": "space"}, {"name": "x", "type": "space"}]
    sets = [
        {"path": path, "coordinateTransformations": [{"type": "scale", "scale": [2**step, 2**step]}]}
        for step, path in enumerate(order)
    ]
    scales = [{"axes": axes, "datasets": sets, **({"version": "0.4"} if zarr_format == 2 else {})}]
    group.attrs.update(
        {"multiscales": scales} if zarr_format == 2 else {"ome": {"version": "0.5", "multiscales": scales}}
    )


@pytest.fixture(params=[2, 3])
def store(request: pytest.FixtureRequest, tmp_path: Path) -> Path:
    image(zarr.create_group(tmp_path / "night.zarr", zarr_format=request.param), request.param)
    return tmp_path / "night.zarr"


def test_the_full_resolution_is_taken_and_the_copies_compete_with_nothing(store: Path) -> None:
    source = bigsvd.open_matrix(store)
    assert (source.spec.shape, source.inside) == ((40, 24), "0")
    version = "0.4" if (store / ".zattrs").exists() else "0.5"
    assert source.spec.layout == "OME-Zarr"
    assert source.spec.marker == f"level 0 of 3 of the image at /, multiscales {version}; axes y x"


def test_the_first_in_the_list_is_the_full_one_whatever_it_is_called(tmp_path: Path) -> None:
    image(zarr.create_group(tmp_path / "a", zarr_format=2), 2, order=("s2", "s0", "s1"))
    assert bigsvd.open_matrix(tmp_path / "a").inside == "s2"


def test_another_level_is_taken_by_its_number_or_its_own_path(store: Path) -> None:
    by_number = bigsvd.open_matrix(store, level=2)
    out = np.empty((10, 6), "f4")
    by_number.read((0, 10), (0, 6), out)
    np.testing.assert_array_equal(out, FULL[::4, ::4])
    assert bigsvd.open_matrix(store, "1").spec.shape == (20, 12)
    assert bigsvd.open_matrix(store, level=0).spec.shape == (40, 24)


def test_inspect_lists_the_copies_apart_and_one_line_to_type(store: Path) -> None:
    lines = survey_lines("night.zarr", survey(store), 120)
    assert lines[0] == "night.zarr: 3 arrays, 1 matrix that can be decomposed"
    at = lines.index("Smaller copies of the same image, taken only if asked for:")
    assert [line.split() for line in lines[at + 1 :]] == [
        ["--level", "1", "1", "20", "×", "12"],
        ["--level", "2", "2", "10", "×", "6"],
    ]
    assert [line for line in lines if "bigsvd decompose" in line] == [
        "  bigsvd decompose night.zarr --out night_factors.zarr"
    ]


def test_of_two_images_one_must_be_named(tmp_path: Path) -> None:
    root = zarr.create_group(tmp_path / "plate", zarr_format=2)
    for name in ("A/1", "B/2"):
        image(root.create_group(name), 2)
    with pytest.raises(SeveralMatricesError, match="2 images with a level 1") as refused:
        bigsvd.open_matrix(tmp_path / "plate", level=1)
    assert refused.value.remedy == "Name one: --matrix A/1 --level 1"
    assert bigsvd.open_matrix(tmp_path / "plate", "B/2", level=1).inside == "B/2/1"
    assert bigsvd.open_matrix(tmp_path / "plate", "B/2").inside == "B/2/0"
    with pytest.raises(SeveralMatricesError, match="holds 2 matrices"):
        bigsvd.open_matrix(tmp_path / "plate")


@pytest.mark.parametrize("zarr_format", [2, 3])
def test_labels_of_regions_compete_with_no_image(tmp_path: Path, zarr_format: Any) -> None:
    group = zarr.create_group(tmp_path / "a", zarr_format=zarr_format)
    image(group, zarr_format)
    image(group.create_group("labels/cells"), zarr_format)
    found = {one.path: one.layout for one in survey(tmp_path / "a")}
    assert (found["0"], found["labels/cells/0"]) == ("OME-Zarr", "OME-Zarr labels")
    assert bigsvd.open_matrix(tmp_path / "a").inside == "0"
    assert bigsvd.open_matrix(tmp_path / "a", "labels/cells").inside == "labels/cells/0"


@pytest.mark.parametrize(
    ("level", "error", "words", "remedy"),
    [
        (3, NoMatrixError, "has no level 3", "Give --level 0 to 2."),
        (-1, OptionError, "is not a level", "Give 0 for the full resolution, 1 for the next."),
    ],
)
def test_levels_that_are_not_there_are_refused(
    store: Path, level: int, error: type[Exception], words: str, remedy: str
) -> None:
    with pytest.raises(error, match=words) as refused:
        bigsvd.open_matrix(store, level=level)
    assert refused.value.remedy == remedy  # type: ignore[attr-defined]


def test_an_array_in_memory_has_no_levels() -> None:
    with pytest.raises(OptionError, match="level=1 was given with ndarray, which is one array"):
        bigsvd.open_matrix(FULL, level=1)


def test_what_is_no_image_has_no_levels(tmp_path: Path) -> None:
    zarr.create_array(tmp_path / "a", data=FULL)
    with pytest.raises(NoMatrixError, match="is no image of several resolutions"):
        bigsvd.open_matrix(tmp_path / "a", level=1)


@pytest.mark.parametrize(
    "attributes",
    [
        {"multiscales": 7},
        {"multiscales": [{"datasets": [{"path": 3}]}]},
        {"multiscales": [{"datasets": "0"}]},
        {"ome": [], "multiscales": []},
        {"ome": {"multiscales": [{"datasets": [{}]}]}},
    ],
)
def test_broken_descriptions_of_an_image_are_no_image(tmp_path: Path, attributes: dict[str, Any]) -> None:
    group = zarr.create_group(tmp_path / "a", zarr_format=2, attributes=attributes)
    group.create_array("0", data=FULL)
    (one,) = survey(tmp_path / "a")
    assert (one.level, one.layout) == (None, "plain Zarr")

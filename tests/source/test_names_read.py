"""Names of every kind are read as text, in blocks of bounded size, and shown so that no terminal obeys them."""

from __future__ import annotations

import pickle
from pathlib import Path
from typing import Any

import h5py
import layout_samples as made
import numcodecs
import numpy as np
import pytest
import zarr
from layout_samples import CELLS, ROWS

from bigsvd.errors import NoMatrixError, OutsideError, SourceError, UnsupportedMatrixError
from bigsvd.report import survey_lines
from bigsvd.source import find_names, join_names, repeated, showable, survey, take_names
from bigsvd.source.names import BLOCK_LETTERS, MOST_BLOCK, Names


def read(file: Path, inside: str) -> list[str]:
    return [name for block in find_names(file, inside).blocks() for name in block]


WORDS = ["tide", "Gezeiten 潮", "", "a\x1b[31mb", "x" * 1000]


@pytest.mark.parametrize(
    ("values", "expected"),
    [
        (np.array(WORDS, object), WORDS),
        (np.array([word.encode() for word in WORDS]), WORDS),
        (np.array([b"G\xe4rten", b"\xff\xfe"], "S8"), ["G\udce4rten", "\udcff\udcfe"]),
        (np.array([3, -1], "i8"), ["3", "-1"]),
        (np.array([0.1, 2.5], "f4"), ["0.1", "2.5"]),
        (np.array([True, False]), ["True", "False"]),
        (np.array([[b"a", b"b"], [b"c", b" "]], "S1"), ["ab", "c"]),
    ],
    ids=["variable", "fixed", "no UTF-8", "whole", "float32", "bool", "letters"],
)
def test_every_kind_of_list_in_hdf5_is_read_as_text(tmp_path: Path, values: np.ndarray, expected: list[str]) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["names"] = values
    assert read(tmp_path / "a.h5", "names") == expected


def test_variable_text_that_is_no_utf8_is_kept_byte_by_byte(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("names", data=[b"G\xe4rten", b"ok"], dtype=h5py.string_dtype("ascii"))
    assert read(tmp_path / "a.h5", "names") == ["G\udce4rten", "ok"]
    assert showable("G\udce4rten \ud800 潮") == "G\\xe4rten \\ud800 潮"


def test_blanks_by_which_fortran_fills_up_are_no_part_of_a_name(tmp_path: Path) -> None:
    kind = h5py.h5t.C_S1.copy()
    kind.set_size(8)
    kind.set_strpad(h5py.h5t.STR_SPACEPAD)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        space = h5py.h5s.create_simple((2,))
        dataset = h5py.h5d.create(file.id, b"names", kind, space)
        dataset.write(h5py.h5s.ALL, h5py.h5s.ALL, np.array([b"tide    ", b"reef 1  "], "S8"), mtype=kind)
    assert read(tmp_path / "a.h5", "names") == ["tide", "reef 1"]


@pytest.mark.parametrize("kind", ["hdf5", "zarr"])
def test_tables_and_categorical_columns_of_the_annotated_layout_give_names(tmp_path: Path, kind: str) -> None:
    file = made.write_annotated(tmp_path / "a", kind)
    assert read(file, "obs") == CELLS
    ground = read(file, "obs/ground")
    # The first is missing, hence empty.
    assert ground[:4] == ["", "reef", "sand", "weed"]
    assert len(ground) == ROWS


def test_categorical_columns_of_the_form_before_0_8_are_followed_by_reference(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["obs/__categories/ground"] = np.array(["reef", "sand"], object)
        file["obs/ground"] = np.array([1, 0, -1], "i1")
        file["obs/ground"].attrs["categories"] = file["obs/__categories/ground"].ref
    assert read(tmp_path / "a.h5", "obs/ground") == ["sand", "reef", ""]


@pytest.mark.parametrize("zarr_format", [2, 3])
@pytest.mark.parametrize(
    ("values", "expected"),
    [
        (np.array(WORDS, np.dtypes.StringDType()), WORDS),
        (np.array(WORDS[:4]), WORDS[:4]),
        (np.array([7, 8]), ["7", "8"]),
    ],
    ids=["variable", "fixed", "whole"],
)
@pytest.mark.filterwarnings("ignore")
def test_every_kind_of_list_in_zarr_is_read_as_text(
    tmp_path: Path, zarr_format: Any, values: np.ndarray, expected: list[str]
) -> None:
    group = zarr.create_group(tmp_path / "a", zarr_format=zarr_format)
    group.create_array("names", data=values, chunks=(2,))
    assert read(tmp_path / "a", "names") == expected


def test_pickled_objects_are_never_names(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("axis", (1,), dtype=h5py.vlen_dtype(np.uint8))[0] = np.frombuffer(pickle.dumps("x"), "u1")
    with pytest.raises(UnsupportedMatrixError, match="neither text nor numbers"):
        find_names(tmp_path / "a.h5", "axis")
    old = zarr.create_array(tmp_path / "z", shape=(1,), dtype="i8", zarr_format=2, compressors=None)
    old[:] = 1
    text = (tmp_path / "z" / ".zarray").read_text().replace('"<i8"', '"|O"')
    assert '"filters": null' in text
    for codec in ("pickle", "json2"):
        (tmp_path / "z" / ".zarray").write_text(text.replace('"filters": null', f'"filters": [{{"id": "{codec}"}}]'))
        (tmp_path / "z" / "0").write_bytes(numcodecs.Pickle().encode(np.array(["x"], object)))
        with pytest.raises(SourceError, match=r"holds no (list of )?names"):
            find_names(tmp_path / "z", "")


@pytest.mark.parametrize(
    ("inside", "error", "words"),
    [
        ("nothing", NoMatrixError, "holds nothing under /nothing"),
        ("grid", UnsupportedMatrixError, "2-D, and a list of names has 1 axis"),
        ("records", UnsupportedMatrixError, "records of depth: name one of these"),
        ("group", UnsupportedMatrixError, "a group of member"),
        ("away", OutsideError, "outside the folder"),
    ],
)
def test_what_is_no_list_of_names_is_refused_with_what_it_is(
    tmp_path: Path, inside: str, error: type[Exception], words: str
) -> None:
    (tmp_path / "here").mkdir()
    with h5py.File(tmp_path / "far.h5", "w") as file:
        file["names"] = [b"a"]
    with h5py.File(tmp_path / "here" / "a.h5", "w") as file:
        file["grid"] = np.zeros((3, 2))
        file["records"] = np.zeros(3, [("depth", "f8")])
        file["group/member"] = 1
        file["away"] = h5py.ExternalLink("../far.h5", "/names")
    with pytest.raises(error, match=words) as refused:
        find_names(tmp_path / "here" / "a.h5", inside)
    assert refused.value.remedy  # type: ignore[attr-defined]


def test_a_field_of_records_is_named_like_a_path(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["table"] = np.array([(b"reef", 1), (b"sand", 2)], [("place", "S8"), ("number", "i4")])
    assert read(tmp_path / "a.h5", "table/place") == ["reef", "sand"]
    assert read(tmp_path / "a.h5", "table/number") == ["1", "2"]


# ------------------------------------------------------------------------------------------------------- in blocks
def sizes(names: Names) -> list[int]:
    return [len(block) for block in names.blocks()]


def test_blocks_grow_to_thousands_of_short_names_and_shrink_for_long_ones(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("short", data=np.arange(100_000), chunks=(1000,), compression="gzip")
        file["long"] = np.array(["x" * 1_000_000] * 200, object)
    short = sizes(find_names(tmp_path / "a.h5", "short"))
    assert sum(short) == 100_000
    assert max(short) == MOST_BLOCK
    long = sizes(find_names(tmp_path / "a.h5", "long"))
    assert sum(long) == 200
    # After the first block, whose length nobody knows before, no more letters than are meant.
    assert max(long[1:]) * 1_000_000 <= max(BLOCK_LETTERS, 1_000_000)


def test_names_are_found_without_being_read_and_travel_as_an_address(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["names"] = np.array(["x" * 100] * 10_000, object)
    found = find_names(tmp_path / "a.h5", "names")
    sent = pickle.dumps(found)
    assert len(sent) < 1000
    assert sizes(pickle.loads(sent)) == sizes(found)


def test_names_of_some_lines_and_of_several_files_come_in_their_order(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["a"] = np.array([f"a{number}" for number in range(1000)], object)
        file["b"] = np.arange(5)
    a, b = find_names(tmp_path / "a.h5", "a"), find_names(tmp_path / "a.h5", "b")
    chosen = np.flatnonzero(np.random.default_rng(2).random(1000) < 0.3)
    taken = take_names(a, chosen)
    assert taken is not None
    assert [name for block in pickle.loads(pickle.dumps(taken)).blocks() for name in block] == [f"a{n}" for n in chosen]
    joined = join_names([a, b])
    assert joined is not None
    assert (joined.count, joined.words) == (1005, "a and b")
    everything = [name for block in joined.blocks() for name in block]
    assert everything == [*(f"a{number}" for number in range(1000)), *"01234"]
    assert take_names(None, chosen) is None
    assert join_names([a, None]) is None


def test_names_that_repeat_are_found_by_their_hashes(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["names"] = np.array(["a", "b", "a", "c"], object)
    assert repeated(find_names(tmp_path / "a.h5", "names")) == {hash("a")}


def test_names_that_end_too_early_are_damage_and_not_a_short_list(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["names"] = [b"a", b"b"]
    found = find_names(tmp_path / "a.h5", "names")
    longer = Names(3, found.words, found._store)
    with pytest.raises(SourceError, match="ends after 2 names of 3"):
        list(longer.blocks())


def test_hostile_names_of_arrays_and_markers_are_shown_by_number(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["x"] = made.numbers()
        evil = b"time\x1b]0;owned\x07"
        file[evil] = np.arange(ROWS)
        file[evil].make_scale("time")
        file["x"].dims[0].attach_scale(file[evil])
        file["x"].dims[0].label = "time\x1b[2J"
        file["x"].dims[1].label = b"\xff" * 3 + b"y" * 10_000
    text = "\n".join(survey_lines("a.h5", survey(tmp_path / "a.h5"), 100))
    assert "\x1b" not in text
    assert "\x07" not in text
    assert "\\x1b" in text
    assert "\\udcff" in text
    text.encode()
    # A label is cut where it is quoted.
    assert max(map(len, text.split())) < 200

"""Names that the user gives: from the same file, another, a text or .npy file; counted, kept, part of the input."""

from __future__ import annotations

import pickle
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import zarr

import bigsvd
from bigsvd.adapt.names import LONGEST_LINE
from bigsvd.errors import OptionError, SourceChangedError, SourceError, UnsupportedMatrixError

ROWS, COLUMNS = 40, 12
LINES = [f"night {number}" for number in range(ROWS)]


@pytest.fixture
def file(tmp_path: Path) -> Path:
    """A matrix with a list of names beside it that no convention would find."""
    with h5py.File(tmp_path / "pool.h5", "w") as opened:
        opened["x"] = np.random.default_rng(5).normal(size=(ROWS, COLUMNS))
        opened["tags/places"] = np.array([f"place {number}" for number in range(ROWS)], object)
        opened["tags/sizes"] = np.arange(COLUMNS) / 2
    return tmp_path / "pool.h5"


def rows_of(file: Path, place: Any, **more: Any) -> list[str]:
    names = bigsvd.open_matrix(file, "x", row_names=place, **more).spec.row_names
    return [name for block in names.blocks() for name in block]


def test_a_list_in_the_same_file_is_found_by_its_path(file: Path) -> None:
    spec = bigsvd.open_matrix(file, "x", row_names="tags/places", column_names="/tags/sizes").spec
    assert rows_of(file, "tags/places")[:2] == ["place 0", "place 1"]
    assert [*next(spec.column_names.blocks())][:3] == ["0.0", "0.5", "1.0"]


@pytest.mark.parametrize("end", ["\n", "\r\n"])
@pytest.mark.parametrize("last", [True, False])
def test_a_text_file_gives_a_name_a_line(file: Path, tmp_path: Path, end: str, last: bool) -> None:
    text = tmp_path / "nights.txt"
    text.write_bytes(b"\xef\xbb\xbf" + (end.join(LINES) + end * last).encode())
    assert rows_of(file, str(text)) == LINES
    assert rows_of(file, text) == LINES


def test_bytes_of_a_text_file_that_are_no_utf8_survive(file: Path, tmp_path: Path) -> None:
    (tmp_path / "n.txt").write_bytes(b"\n".join([b"G\xe4rten", *[b"x"] * (ROWS - 1)]))
    assert rows_of(file, tmp_path / "n.txt")[0] == "G\udce4rten"


def test_an_npy_file_of_text_gives_names_and_one_of_objects_is_never_unpickled(file: Path, tmp_path: Path) -> None:
    np.save(tmp_path / "n.npy", np.array(LINES))
    assert rows_of(file, tmp_path / "n.npy") == LINES
    np.save(tmp_path / "o.npy", np.array(LINES, object), allow_pickle=True)
    with pytest.raises(OptionError, match="holds no names that can be read"):
        rows_of(file, tmp_path / "o.npy")
    np.save(tmp_path / "g.npy", np.zeros((ROWS, 2)))
    with pytest.raises(OptionError, match="2-D, float64"):
        rows_of(file, tmp_path / "g.npy")


def test_a_list_in_another_file_or_store_is_named_after_a_colon(file: Path, tmp_path: Path) -> None:
    with h5py.File(tmp_path / "other.h5", "w") as other:
        other["nights"] = np.array(LINES, object)
    assert rows_of(file, f"{tmp_path / 'other.h5'}:nights") == LINES
    zarr.create_group(tmp_path / "z").create_array("nights", data=np.arange(ROWS))
    assert rows_of(file, f"{tmp_path / 'z'}:nights")[-1] == str(ROWS - 1)


def test_names_of_an_array_in_memory_come_from_files(tmp_path: Path) -> None:
    (tmp_path / "n.txt").write_text("\n".join(LINES))
    factors = bigsvd.decompose(
        np.random.default_rng(1).normal(size=(ROWS, COLUMNS)), rank=2, row_names=tmp_path / "n.txt"
    )
    assert list(factors.sample_names[:]) == LINES
    assert factors.feature_names is None


@pytest.mark.parametrize(
    ("count", "remedy"),
    [
        (ROWS - 1, "Give 40 names, or leave --row-names out."),
        (COLUMNS, "They fit the columns: give them to --column-names."),
    ],
)
def test_too_few_or_too_many_names_are_refused_with_both_numbers(
    file: Path, tmp_path: Path, count: int, remedy: str
) -> None:
    (tmp_path / "n.txt").write_text("name\n" * count)
    with pytest.raises(OptionError, match=rf"holds {count} names, and .*:/x has 40 rows") as refused:
        rows_of(file, tmp_path / "n.txt")
    assert refused.value.remedy == remedy


def test_a_place_that_leads_nowhere_names_where_it_was_looked_for(file: Path) -> None:
    with pytest.raises(OptionError, match="--row-names 'no where' leads nowhere") as refused:
        rows_of(file, "no where")
    assert refused.value.evidence[0] == f"nothing under that path in {file}"
    assert "a text file with a name a line" in refused.value.remedy


@pytest.mark.parametrize(("head", "words"), [(b"\x1f\x8b12345678", "unpack it first"), (b"PK\x03\x041234", "no text")])
def test_files_that_are_no_text_are_told_apart(file: Path, tmp_path: Path, head: bytes, words: str) -> None:
    (tmp_path / "n.txt").write_bytes(head)
    with pytest.raises(OptionError, match=words):
        rows_of(file, tmp_path / "n.txt")


def test_a_file_without_line_ends_is_no_list_of_names(file: Path, tmp_path: Path) -> None:
    (tmp_path / "n.txt").write_bytes(b"x" * (LONGEST_LINE + 1))
    with pytest.raises(SourceError, match="a line of more than 16,777,216 bytes"):
        rows_of(file, tmp_path / "n.txt")


def test_a_dataset_that_is_no_list_is_refused(file: Path) -> None:
    with pytest.raises(UnsupportedMatrixError, match="2-D, and a list of names has 1 axis"):
        rows_of(file, "x")


def test_names_are_part_of_the_input_of_a_run(file: Path, tmp_path: Path) -> None:
    (tmp_path / "n.txt").write_text("\n".join(LINES))

    def fingerprint(**reading: Any) -> str:
        return bigsvd.open_matrix(file, "x", **reading).spec.fingerprint

    plain, named = fingerprint(), fingerprint(row_names=tmp_path / "n.txt")
    assert plain
    assert named != plain
    assert fingerprint(row_names=tmp_path / "n.txt") == named
    (tmp_path / "n.txt").write_text("\n".join(LINES[::-1]) + "\n")
    assert fingerprint(row_names=tmp_path / "n.txt") not in (plain, named)


def test_a_named_source_reads_travels_and_forwards_like_the_one_inside(file: Path) -> None:
    plain = bigsvd.open_matrix(file, "x")
    source = pickle.loads(pickle.dumps(bigsvd.open_matrix(file, "x", row_names="tags/places")))
    assert len(pickle.dumps(source)) < 2 * len(pickle.dumps(plain)) + 1000
    out, expected = np.empty((5, 3)), np.empty((5, 3))
    source.announce((0, 5), (2, 5))
    source.require_complete()
    source.read((0, 5), (2, 5), out)
    plain.read((0, 5), (2, 5), expected)
    np.testing.assert_array_equal(out, expected)
    assert source.path == str(file)
    with pytest.raises(AttributeError):
        source.nothing_of_this_name  # noqa: B018
    source.close()
    plain.close()


def test_names_that_changed_since_they_were_counted_are_not_read(file: Path, tmp_path: Path) -> None:
    (tmp_path / "n.txt").write_text("\n".join(LINES))
    names = bigsvd.open_matrix(file, "x", row_names=tmp_path / "n.txt").spec.row_names
    (tmp_path / "n.txt").write_text("\n".join(["other", *LINES[1:]]))
    with pytest.raises(SourceChangedError, match="changed while it was being read"):
        next(names.blocks())

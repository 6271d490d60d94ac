"""What inspect says: matrices, hints, lines to type, and why the others will not do."""

from __future__ import annotations

import shlex

import pytest

from bigsvd.report import command_line, survey_facts, survey_lines
from bigsvd.source import Candidate


def matrix(path: str, **changes: object) -> Candidate:
    given: dict[str, object] = {"path": path, "shape": (20000, 40960), "dtype": "uint16", "chunks": (500, 2560)}
    given |= {"encoding": "chunks 500 × 2,560, shuffle + gzip 1", "stored_bytes": 1 << 30, "decoded_bytes": 3 << 29}
    return Candidate(**(given | {"usable": True} | changes))  # type: ignore[arg-type]


LIST = Candidate("/time", (20000,), "float64", reason="1-D, and a matrix has 2 axes")
TEXT = Candidate("/names", (3,), "text", reason="not numbers but text")


def test_a_matrix_is_listed_with_all_that_is_known_of_it() -> None:
    lines = survey_lines("n.h5", [matrix("/frames"), LIST], 120)
    assert lines[0] == "n.h5: 2 arrays, 1 matrix that can be decomposed"
    assert lines[3].split("  ") == [
        "/frames",
        "20,000 × 40,960",
        "uint16",
        "1.5 GiB",
        " 1 GiB",
        "chunks 500 × 2,560, shuffle + gzip 1",
    ]
    assert "  /time  20,000 float64  1-D, and a matrix has 2 axes" in lines


def test_on_a_narrow_terminal_filters_go_below() -> None:
    lines = survey_lines("n.h5", [matrix("/night/camera/frames"), matrix("/night/camera/background/frames")], 80)
    at = next(number for number, line in enumerate(lines) if line.startswith("/night/camera/frames"))
    assert lines[at + 1] == "    chunks 500 × 2,560, shuffle + gzip 1"
    assert max(len(line) for line in lines if "bigsvd decompose" not in line) <= 80


def test_the_line_to_type_is_quoted_and_names_the_matrix_only_where_needed() -> None:
    where = "my $file's (1).h5"
    one = command_line(where, matrix("/frames"), named=False)
    assert shlex.split(one) == ["bigsvd", "decompose", where, "--out", "my_file_s_1_factors.zarr"]
    two = command_line(where, matrix("/a b/c", samples_hint="columns"), named=True)
    assert shlex.split(two)[5:] == ["--matrix", "/a b/c", "--samples", "columns"]


def test_a_hint_is_given_with_its_reason() -> None:
    lines = survey_lines("n.h5", [matrix("/x", samples_hint="columns", hint_reason="axis 1 is 'frame'")], 100)
    assert "/x: samples are its columns (axis 1 is 'frame')" in lines
    assert any(line.endswith("--samples columns") for line in lines)


def test_matrices_of_which_the_same_is_said_are_named_together() -> None:
    hints = {"samples_hint": "rows", "hint_reason": "rows are nights"}
    four = [matrix(f"/m{number}", **hints, remarks=("a remark",)) for number in range(4)]
    lines = survey_lines("n.h5", four, 100)
    assert "/m0, /m1, /m2, /m3: samples are their rows (rows are nights)" in lines
    assert "/m0, /m1, /m2, /m3: a remark" in lines
    lines = survey_lines("n.h5", [*four, matrix("/m4", **hints)], 100)
    assert "/m0, /m1, /m2 and 2 more matrices: samples are their rows (rows are nights)" in lines


def test_contradictory_markers_are_said_with_what_to_add() -> None:
    lines = survey_lines("n.h5", [matrix("/x", samples_hint="contradictory", hint_reason="rows: a; columns: b")], 200)
    assert (
        "/x: markers contradict each other about the samples (rows: a; columns: b); say --samples rows or --samples"
        " columns"
    ) in lines
    assert any(line.endswith("--samples rows") for line in lines if "bigsvd decompose" in line)


def test_layouts_are_said_with_their_marker_also_of_what_cannot_be_used() -> None:
    group = Candidate("/matrix", reason="a sparse group", layout="feature-barcode", marker="barcodes beside data")
    lines = survey_lines("n.h5", [group], 100)
    assert "Taken for feature-barcode (barcodes beside data): /matrix" in lines


def test_of_many_matrices_no_one_is_guessed() -> None:
    lines = survey_lines("n.h5", [matrix(f"/m{number}") for number in range(9)], 100)
    assert [line for line in lines if "bigsvd decompose" in line] == [
        "  bigsvd decompose n.h5 --out n_PATH_factors.zarr --matrix PATH"
    ]


def test_what_cannot_be_used_says_why_and_its_type_once() -> None:
    lines = survey_lines("n.h5", [TEXT], 100)
    assert lines[0] == "n.h5: 1 array, 0 matrices that can be decomposed"
    assert lines[-1] == "  /names  3     not numbers but text"


@pytest.mark.parametrize(("count", "more"), [(40, False), (41, True)])
def test_long_lists_of_what_cannot_be_used_are_cut_and_counted(count: int, more: bool) -> None:
    lines = survey_lines("n.h5", [LIST] * count, 100)
    assert (lines[-1] == "  … and 1 more, which --json lists") is more


def test_sizes_that_a_format_does_not_tell_are_question_marks() -> None:
    assert "?" in survey_lines("n.h5", [matrix("", stored_bytes=None)], 120)[3]


def test_json_has_a_command_for_matrices_only() -> None:
    facts = survey_facts("n.h5", [matrix("/frames"), LIST])
    assert facts["matrices"][0]["command"] == "bigsvd decompose n.h5 --out n_factors.zarr"
    assert facts["matrices"][1]["command"] is None

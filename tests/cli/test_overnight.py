"""docs/overnight.md offers what the program has: its options, statuses, names and messages."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from bigsvd.cli import main
from bigsvd.cli.program import FAILED, INTERRUPTED, MET, NOT_MET, REFUSED, TERMINATED
from bigsvd.errors import DeadlineError, DiskFullError, OtherRunError, SourceChangedError
from bigsvd.factors import Place
from bigsvd.units import parse_deadline

ROOT = Path(__file__).parents[2]
PAGE = (ROOT / "docs" / "overnight.md").read_text()
LINES = [line[line.index("bigsvd decompose") :] for line in PAGE.splitlines() if "bigsvd decompose " in line]


@pytest.mark.parametrize("line", LINES)
def test_every_line_to_type_has_options_that_exist(line: str) -> None:
    known = {option for parameter in main.commands["decompose"].params for option in parameter.opts}
    for option in re.findall(r"(?<= )--[a-z-]+", line.split(" && ")[0]):
        assert option in known, option


def test_every_status_has_a_row() -> None:
    rows = {int(number) for row in re.findall(r"^\| ([0-9, ]+)", PAGE, re.M) for number in re.findall(r"\d+", row)}
    assert {MET, FAILED, REFUSED, NOT_MET, INTERRUPTED, TERMINATED} <= rows


def test_the_names_beside_a_result_are_all_there() -> None:
    place = Place.at(Path("OUT.zarr"))
    for path in (place.out, place.partial, place.lock, place.run, place.log):
        assert f"`{path.name}" in PAGE


def test_durations_that_are_offered_are_understood() -> None:
    for words in set(re.findall(r"--finish-by ([0-9:hmin]+)", PAGE)) | {"2h30min"}:
        assert parse_deadline(words, 1000.0) > 1000.0


def test_messages_that_are_quoted_are_said() -> None:
    code = "".join(path.read_text() for path in (ROOT / "bigsvd").rglob("*.py"))
    for words in re.findall(r'^\| \d[^|]*\| "([^"]+)"', PAGE, re.M):
        for part in words.split("…"):
            text = part.strip(" ,")
            assert text.lower() in code.lower(), text


def test_statuses_are_those_of_the_errors() -> None:
    from bigsvd.cli.program import status_of

    full = DiskFullError("x")
    full.__cause__ = OSError(28, "No space left on device")
    assert [status_of(error) for error in (full, SourceChangedError("x"), DeadlineError("x"))] == [FAILED] * 3
    assert status_of(OtherRunError("x")) == REFUSED

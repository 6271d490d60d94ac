"""Every row of the list of faults has tests, or words that say why it has none."""

from __future__ import annotations

import subprocess
import sys

import pytest
from index import HERE, TESTS, WHAT, explanations, functions_in, rows_of, table


def test_the_list_is_whole() -> None:
    assert list(WHAT) == list(range(1, 55))
    assert set(table()) == set(WHAT)
    assert set(explanations()) <= set(WHAT)


@pytest.mark.parametrize("row", sorted(WHAT))
def test_every_row_is_tested_or_explained(row: int) -> None:
    assert table()[row] or explanations().get(row), f"row {row}, {WHAT[row]}: no test and no reason"


def test_no_row_is_without_a_test() -> None:
    assert not [row for row, names in table().items() if not names]


def test_every_test_that_is_named_is_there() -> None:
    known = {path.relative_to(TESTS.parent).as_posix(): set(functions_in(path)) for path in TESTS.rglob("test_*.py")}
    missing = []
    for names in table().values():
        for name in names:
            path, _, function = name.partition("::")
            if function not in known.get(path, set()):
                missing.append(name)
    assert missing == []


def test_rows_are_told_by_the_names_of_tests() -> None:
    assert rows_of("test_07_a_shard") == [7]
    assert rows_of("test_23_and_24_crashed") == [23, 24]
    assert rows_of("test_every_row") == []


def test_the_list_is_printed() -> None:
    words = [sys.executable, str(HERE / "index.py")]
    lines = subprocess.run(words, capture_output=True, text=True, check=True).stdout.splitlines()
    assert lines[0] == " 1  a Zarr chunk deleted"
    assert sum(line[:2].strip().isdigit() for line in lines) == 54

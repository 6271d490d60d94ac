"""Thousands of mutated files: each is read as it was or refused in words, never with a hang, a crash or a lie.

BIGSVD_FUZZ is the number of mutations of every kind of file (24 by default: about 20 s); see also `fuzz.py`.
"""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from fuzz import KINDS, make, matrix, read_library, read_ours, run_kind

ROWS = {number: ["test_mutated_files_are_refused_or_read_as_they_were"] for number in (5, 9, 10, 13, 14, 15)}
COUNT = int(os.environ.get("BIGSVD_FUZZ", "24"))


@pytest.mark.parametrize("kind", KINDS)
def test_mutated_files_are_refused_or_read_as_they_were(kind: str) -> None:
    tally = run_kind(kind, COUNT)
    assert tally.faults == []
    assert sum(tally.outcomes.values()) == COUNT


@pytest.mark.parametrize("kind", KINDS)
def test_the_files_that_are_mutated_are_sound(tmp_path: Path, kind: str) -> None:
    KINDS[kind].write(tmp_path / "a", matrix())
    assert read_ours(tmp_path / "a") == ("read", matrix().tobytes())
    assert read_library(tmp_path / "a") == matrix().tobytes()


def test_mutations_change_files_and_can_be_made_again(tmp_path: Path) -> None:
    kind = "zarr 3 crc32c"
    KINDS[kind].write(tmp_path / "a", matrix())

    def made(number: int) -> list[bytes]:
        make(kind, number, tmp_path / "a", tmp_path / "b")
        return [path.read_bytes() for path in sorted((tmp_path / "b").rglob("*")) if path.is_file()]

    assert made(1) == made(1)
    assert len({tuple(made(number)) for number in range(40)}) > 30


def test_a_lie_would_be_found(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A reader that does not look at the checksum is caught by the same comparison that the mutations go through."""
    from bigsvd.source import codecs

    kind = "zarr 3 crc32c"
    KINDS[kind].write(tmp_path / "a", matrix())
    monkeypatch.setattr(codecs, "require_crc32c", lambda stored: stored.size - 4)
    lies = 0
    for number in range(60):
        guarded, _ = make(kind, number, tmp_path / "a", tmp_path / "b")
        outcome, entries = read_ours(tmp_path / "b")
        lies += guarded and outcome == "read" and entries != matrix().tobytes() and read_library(tmp_path / "b") is None
    assert lies > 0

"""Where a stopped run stands, in words that can be typed."""

from __future__ import annotations

import os
import re
from dataclasses import replace
from pathlib import Path

import pytest

from bigsvd.journal import Standing
from bigsvd.report import going_on_line, going_on_words, standing_facts, standing_lines, standing_words

SAVED = 1_796_131_872.0


def standing(**parts: object) -> Standing:
    """A run cut in its second sweep."""
    usual = Standing(
        folder=Path("/night/f.zarr.run"),
        out=Path("/night/f.zarr"),
        identity={"input": {"name": "cells.h5:/counts", "shape": [100_000, 5000], "type": "uint16"}},
        command=("bigsvd", "decompose", "my cells.h5", "--out", "f.zarr", "--start-over"),
        command_folder="/night",
        began=SAVED - 4000,
        pilot=True,
        sweep=2,
        waves=7,
        of=12,
        kept_bytes=3 * 2**30,
        bytes_read=4 * 2**30,
        seconds=125.0,
        saved=SAVED,
        damaged=(),
        running=False,
    )
    return replace(usual, **parts)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("parts", "words"),
    [
        ({}, "wave 7 of 12 of sweep 2, saved 20"),
        ({"waves": 12}, "the end of sweep 2, saved 20"),
        ({"sweep": 0, "waves": 0, "of": 0}, "the end of the pilot, saved 20"),
        ({"sweep": 0, "pilot": False, "saved": None}, "nothing yet"),
    ],
)
def test_the_place_is_named(parts: dict[str, object], words: str) -> None:
    assert standing_words(standing(**parts)).startswith(words)


def test_going_on_is_one_line_with_what_is_not_read_again() -> None:
    words = going_on_words(standing(damaged=("sums-02-00008 has 3 bytes and should have 9",)))
    assert re.fullmatch(
        r"going on from wave 7 of 12 of sweep 2, saved [-0-9]{10} [:0-9]{8}; 3 GiB are not read again;"
        r" not used: sums-02-00008 has 3 bytes and should have 9",
        words,
    ), words


def test_the_line_to_go_on_is_quoted_and_does_not_start_over() -> None:
    assert going_on_line(standing().command) == "bigsvd decompose 'my cells.h5' --out f.zarr"


def test_a_stopped_run_is_laid_out_with_the_line_to_type() -> None:
    lines = standing_lines(standing(), None, 100, now=lambda: SAVED + 600)
    text = "\n".join(lines)
    assert "run     /night/f.zarr.run: not finished, and no process is at it" in text
    assert "matrix  cells.h5:/counts: 100,000 × 5,000 uint16" in text
    assert "wave 7 of 12 of sweep 2" in text
    assert "10 min ago" in text
    assert "4 GiB in 2 min 5 s, up to then; 3 GiB need not be read again" in text
    assert lines[-2:] == ["To go on, type:", "  cd /night && bigsvd decompose 'my cells.h5' --out f.zarr"]
    here = standing_lines(standing(command_folder=os.getcwd()), None, 100)
    assert here[-1] == "  bigsvd decompose 'my cells.h5' --out f.zarr"


def test_a_run_from_python_says_so() -> None:
    assert standing_lines(standing(command=()), None, 100)[-1] == "It was begun from Python; the same call goes on."


def test_a_running_run_says_how_far_it_is_and_offers_no_line() -> None:
    status = {"stage": "sweep", "sweep": 3, "bytes_done": 2**30, "bytes_total": 4 * 2**30, "written": "just now"}
    text = "\n".join(standing_lines(standing(running=True), status | {"verdict": "after sweep 2: 1 open"}, 100))
    assert "a process is at it now" in text
    assert "sweep 3, 1 GiB of 4 GiB, told just now" in text
    assert "after sweep 2: 1 open" in text
    assert "type" not in text


def test_how_it_ended_is_told_in_one_line() -> None:
    text = "\n".join(standing_lines(standing(), {"state": "failed", "problem": "DiskFullError: full\n    place"}, 100))
    assert "ended   DiskFullError: full\n" in text


def test_an_identity_that_tells_nothing_is_left_out() -> None:
    text = "\n".join(standing_lines(standing(identity={"input": [3]}), None, 100))
    assert "matrix" not in text


def test_facts_are_plain_json() -> None:
    import json

    found = json.loads(json.dumps(standing_facts(standing(), {"state": "stopped"}), allow_nan=False))
    assert (found["sweep"], found["waves"], found["of_waves"]) == (2, 7, 12)
    assert found["command"] == "bigsvd decompose 'my cells.h5' --out f.zarr"
    assert found["status"] == {"state": "stopped"}

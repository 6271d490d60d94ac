"""OUT.run/status.json: whole at any moment, every few seconds, with what a program needs, at little cost."""

from __future__ import annotations

import json
import os
import threading
import time
from pathlib import Path
from typing import Any

import pytest

from bigsvd.report import read_status
from bigsvd.report.status import EVERY, StatusFile
from bigsvd.sweep import Progress

pytestmark = pytest.mark.alone

MIB = 1 << 20


class Clock:
    """A clock that is set by hand."""

    now = 1000.0

    def __call__(self) -> float:
        return self.now


def status_file(folder: Path, clock: Any) -> StatusFile:
    return StatusFile(folder, {"out": folder / "out.zarr", "process": 7}, lambda: {"bytes_read": 5}, clock=clock)


def test_it_says_how_far_the_stage_is(tmp_path: Path) -> None:
    clock = Clock()
    status = status_file(tmp_path, clock)
    for second in range(0, 101, 5):
        clock.now = 1000.0 + second
        status(Progress("sweep", 2, second * MIB, 200 * MIB))
    found = read_status(tmp_path)
    assert found is not None
    assert (found["state"], found["stage"], found["sweep"]) == ("running", "sweep", 2)
    assert (found["bytes_done"], found["bytes_total"]) == (100 * MIB, 200 * MIB)
    assert found["bytes_per_second"] == pytest.approx(MIB)
    assert found["seconds_left"] == pytest.approx(100)
    assert found["out"] == str(tmp_path / "out.zarr")
    assert (found["process"], found["bytes_read"]) == (7, 5)
    assert found["resident_bytes"] > MIB
    assert [path.name for path in tmp_path.iterdir()] == ["status.json"]


def test_what_an_earlier_process_summed_counts_as_done_and_not_as_speed(tmp_path: Path) -> None:
    clock = Clock()
    status = status_file(tmp_path, clock)
    status(Progress("sweep", 1, 0, 1000 * MIB))
    status(Progress("sweep", 1, 900 * MIB, 1000 * MIB))
    for second in range(1, 11):
        clock.now = 1000.0 + second
        status(Progress("sweep", 1, (900 + second) * MIB, 1000 * MIB))
    found = read_status(tmp_path)
    assert found is not None
    assert found["bytes_per_second"] == pytest.approx(MIB)
    assert found["seconds_left"] == pytest.approx((1000 * MIB - found["bytes_done"]) / MIB)


def test_it_is_written_every_few_seconds_and_not_at_every_panel(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    clock, replaced, replace = Clock(), [], os.replace
    monkeypatch.setattr(os, "replace", lambda *names: (replaced.append(clock.now), replace(*names)))
    status = status_file(tmp_path, clock)
    for step in range(1000):
        clock.now = 1000.0 + step / 100
        status(Progress("sweep", 1, step, 1000))
    assert replaced == pytest.approx([1000.0 + EVERY * number for number in range(4)])


def test_an_event_costs_little(tmp_path: Path) -> None:
    status = StatusFile(tmp_path, {}, dict)
    start = time.perf_counter()
    for done in range(5000):
        status(Progress("sweep", 1, done, 5000))
    assert (time.perf_counter() - start) / 5000 < 2e-4


def test_a_certificate_is_told_and_is_no_stage(tmp_path: Path) -> None:
    clock = Clock()
    status = status_file(tmp_path, clock)
    status(Progress("sweep", 1, 10, 10))
    status(Progress("certificate", 0, 10, 0, "after sweep 1: 3 of 12 resolved"))
    clock.now += 10
    status(Progress("sweep", 2, 1, 10))
    found = read_status(tmp_path)
    assert found is not None
    assert (found["stage"], found["verdict"]) == ("sweep", "after sweep 1: 3 of 12 resolved")


def test_how_a_run_ended_stays(tmp_path: Path) -> None:
    status = status_file(tmp_path, Clock())
    status(Progress("sweep", 1, 1, 10))
    status.close("failed", "SourceChangedError: the file changed")
    found = read_status(tmp_path)
    assert found is not None
    assert (found["state"], found["problem"]) == ("failed", "SourceChangedError: the file changed")


def test_a_reader_never_meets_half_a_document(tmp_path: Path) -> None:
    clock = Clock()
    status = status_file(tmp_path, clock)
    status(Progress("sweep", 1, 0, 1000))
    done = threading.Event()
    bad: list[str] = []

    def look() -> None:
        while not done.is_set():
            text = (tmp_path / "status.json").read_text()
            try:
                json.loads(text)
            except ValueError:
                bad.append(text)

    reader = threading.Thread(target=look)
    reader.start()
    for step in range(300):
        clock.now += EVERY
        status(Progress("sweep", 1, step, 1000))
    done.set()
    reader.join()
    assert bad == []


def test_a_folder_that_cannot_be_written_does_not_end_the_run(tmp_path: Path) -> None:
    status = status_file(tmp_path / "gone", Clock())
    status(Progress("sweep", 1, 0, 10))
    status.close("finished")
    assert read_status(tmp_path / "gone") is None


@pytest.mark.parametrize("content", ["", "{", "[]", '{"format": 99}', "[" * 100_000])
def test_what_is_no_status_is_none(content: str, tmp_path: Path) -> None:
    (tmp_path / "status.json").write_text(content)
    assert read_status(tmp_path) is None

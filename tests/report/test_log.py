"""OUT.log: lines with time stamps, one a minute and at every stage, appended, and never the reason why a run fails."""

from __future__ import annotations

import os
import re
import threading
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path

import pytest

from bigsvd.errors import ResultError
from bigsvd.report.log import RunLog
from bigsvd.report.progress import Reporter
from bigsvd.sweep import Progress

MIB = 1 << 20
EVENING = datetime(2026, 12, 1, 23, 41, 10, tzinfo=timezone(timedelta(hours=1)))


class Clock:
    """A clock that is set by hand."""

    now = 0.0

    def __call__(self) -> float:
        return self.now


def test_every_line_has_a_moment_with_its_time_zone(tmp_path: Path) -> None:
    log = RunLog(tmp_path / "out.zarr.log", now=lambda: EVENING)
    log.say(["began: bigsvd decompose σ.h5", "matrix  σ.h5:/a", ""])
    log.close(["failed: NonFiniteError: 3 values are NaN\n    first at row 7"])
    assert (tmp_path / "out.zarr.log").read_text().splitlines() == [
        "2026-12-01 23:41:10+01:00  began: bigsvd decompose σ.h5",
        "2026-12-01 23:41:10+01:00  matrix  σ.h5:/a",
        "2026-12-01 23:41:10+01:00  failed: NonFiniteError: 3 values are NaN",
        "2026-12-01 23:41:10+01:00      first at row 7",
    ]


def test_a_line_a_minute_and_one_at_the_end_of_a_stage(tmp_path: Path) -> None:
    log, clock = RunLog(tmp_path / "out.log"), Clock()
    log._reporter = Reporter(log._write, every=60.0, clock=clock)
    for second in range(0, 301, 5):
        clock.now = float(second)
        log(Progress("sweep", 1, second * MIB, 300 * MIB, "0 + 30 columns"))
    log(Progress("certificate", 0, 0, 0, "after sweep 1: 3 of 12 resolved"))
    log.close()
    lines = [line[27:] for line in (tmp_path / "out.log").read_text().splitlines()]
    assert len(lines) == 5 + 2
    assert lines[0].startswith("sweep 1: 60 MiB of 300 MiB (20%), 1 MiB/s, 4 min left")
    assert lines[-2].startswith("sweep 1: 300 MiB in 5 min, ")
    assert lines[-1] == "after sweep 1: 3 of 12 resolved"


def test_runs_that_follow_each_other_share_it(tmp_path: Path) -> None:
    for night in (1, 2):
        log = RunLog(tmp_path / "out.log", now=lambda night=night: EVENING.replace(day=night))
        log.close([f"night {night}"])
    assert re.sub(r"[+].*?  ", " ", (tmp_path / "out.log").read_text()).splitlines() == [
        "2026-12-01 23:41:10 night 1",
        "2026-12-02 23:41:10 night 2",
    ]


@pytest.mark.parametrize("kind", ["link", "folder", "thesis", "pipe"])
def test_what_is_no_log_of_ours_is_refused_and_left_as_it_is(kind: str, tmp_path: Path) -> None:
    path = tmp_path / "out.log"
    if kind == "link":
        (tmp_path / "target").write_text("")
        path.symlink_to(tmp_path / "target")
    elif kind == "folder":
        path.mkdir()
    elif kind == "thesis":
        path.write_text("Years of work\n")
    else:
        os.mkfifo(path)
    with pytest.raises(ResultError) as caught:
        RunLog(path)
    assert str(path) in str(caught.value)
    assert caught.value.remedy
    if kind == "thesis":
        assert path.read_text() == "Years of work\n"
        assert "Years of work" in str(caught.value)


def test_a_full_device_does_not_end_the_run_for_its_logs_sake(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    log = RunLog(tmp_path / "out.log")

    def full(*_: object) -> int:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "write", full)
    log(Progress("sweep", 1, 0, 10))
    log.say(["a line that is lost"])
    monkeypatch.undo()
    log.close(["a line that is not"])
    assert (tmp_path / "out.log").read_text().endswith("a line that is not\n")


def test_lines_of_many_threads_stay_whole(tmp_path: Path) -> None:
    log = RunLog(tmp_path / "out.log", now=lambda: datetime.now(UTC))
    threads = [
        threading.Thread(target=lambda part=part: [log.say([f"{part} " * 40]) for _ in range(50)]) for part in range(4)
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    log.close()
    lines = (tmp_path / "out.log").read_text().splitlines()
    assert len(lines) == 200
    assert all(len(set(line[27:].split())) == 1 and len(line[27:].split()) == 40 for line in lines)


def test_names_that_are_not_text_are_escaped(tmp_path: Path) -> None:
    log = RunLog(tmp_path / "out.log")
    log.close(["matrix " + os.fsdecode(b"night\xff.h5")])
    assert "night\\udcff.h5" in (tmp_path / "out.log").read_text()

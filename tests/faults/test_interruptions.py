"""Runs that are killed, asked to stop, put to sleep or slowed down, and journals that are not those of the run."""

from __future__ import annotations

import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from fault_samples import Night, as_words, fetches, meanwhile, result_bits, run, whole_bits

import bigsvd
from bigsvd.errors import IncompleteResultError
from bigsvd.journal import read_standing
from bigsvd.sweep import PanelReader, events

pytestmark = pytest.mark.alone

# The same command line in a process of its own, with the short waves of these tests; it dies where it is told to.
WORKER = """
import os, signal, sys
import bigsvd.journal.journal as journal
import bigsvd.plan.geometry as geometry
geometry.WAVE_SECONDS = 1e-9
journal.WORTH_KEEPING, journal.SHARE_OF_TIME = 0.0, 1e9
moment = sys.argv[1]
def die(*_, **__):
    os.kill(os.getpid(), signal.SIGKILL)
def after(number, function):
    calls = []
    def counted(*words, **options):
        calls.append(1)
        return die() if len(calls) > number else function(*words, **options)
    return counted
if moment == "in a sweep":
    from bigsvd.sweep import PanelReader
    PanelReader.fetch = after(90, PanelReader.fetch)
elif moment == "while a record is written":
    os.fsync = after(5, os.fsync)
elif moment == "before a record has its name":
    os.replace = after(6, os.replace)
elif moment == "while the folder is made":
    journal_folder = __import__("bigsvd.journal.run_folder", fromlist=["x"])
    journal_folder.write_identity = die
elif moment == "on slices":
    __import__("bigsvd.api").api.check_slices = die
elif moment == "while the result is written":
    from bigsvd.factors import FactorsWriter
    FactorsWriter.write_vectors = after(1, FactorsWriter.write_vectors)
elif moment == "before the result is in place":
    __import__("bigsvd.factors.writer").factors.writer.install = die
elif moment == "after the result is in place":
    from bigsvd.journal import RunFolder
    RunFolder.close = die
from bigsvd.cli import main
main(sys.argv[2:])
"""


def start(night: Night, moment: str = "", **more: Any) -> subprocess.Popen[str]:
    """Begin, or go on with, the night's run in a process of its own."""
    options = night.options | {"overwrite": True, "save_every": 0, "quiet": True} | more
    words = ["decompose", str(night.file), "--out", str(night.out), *as_words(options)]
    line = [sys.executable, "-c", WORKER, moment, *words]
    return subprocess.Popen(line, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


@pytest.mark.parametrize(
    "moment",
    [
        "in a sweep", "while a record is written", "before a record has its name", "while the folder is made",
        "on slices", "while the result is written", "before the result is in place", "after the result is in place",
    ],
)  # fmt: skip
def test_44_killed_at_any_moment_it_goes_on_with_the_same_bits(moment: str, night: Night) -> None:
    wanted, before = whole_bits(night), result_bits(night.out)
    process = start(night, moment)
    _, told = process.communicate(timeout=60)
    assert process.returncode == -signal.SIGKILL, told
    in_place = moment == "after the result is in place"
    # Of the two results one is there, whole; what is half written is not taken for one.
    assert result_bits(night.out) == (wanted if in_place else before)
    bigsvd.open_factors(night.out)
    partial = night.out.with_name("out.zarr.partial")
    if partial.exists() and moment != "before the result is in place":
        with pytest.raises(IncompleteResultError):
            bigsvd.open_factors(partial)
    assert night.done() == wanted
    assert sorted(path.name for path in night.folder.iterdir()) == ["heights.h5", "out.zarr", "out.zarr.log"]


@pytest.mark.parametrize(("number", "status"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_45_asked_to_stop_it_stops_within_a_panel_and_is_kept(
    number: signal.Signals, status: int, night: Night, monkeypatch: pytest.MonkeyPatch
) -> None:
    wanted = whole_bits(night)
    asked: list[float] = []
    with monkeypatch.context() as patch:
        # A run in the background of a shell has Ctrl-C ignored.
        patch.setattr(signal, "getsignal", lambda number: signal.default_int_handler)
        meanwhile(
            patch, lambda: (asked.append(time.monotonic()), os.kill(os.getpid(), number)), after=fetches(night, 2, 0.5)
        )
        text = night.refused(status)
        assert time.monotonic() - asked[0] < 10
    standing = read_standing(night.journal)
    assert standing.sweep >= 1
    assert f"of sweep {standing.sweep}, saved " in text
    assert "To go on, type:\n  bigsvd decompose " in text
    assert night.done() == wanted


# ------------------------------------------------------------------------------------------------- 47: other journals
def stop(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    """Cut the night's run in its second sweep."""

    def cut() -> None:
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        meanwhile(patch, cut, after=fetches(night, 2, 0.5))
        night.refused(130)
    assert read_standing(night.journal).sweep >= 1


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"rank": 5}, "option --rank: 4 when the run began, 5 now"),
        ({"seed": 7}, "option --seed: 0 when the run began, 7 now"),
        ({"tolerance": 1e-4}, "option --tolerance: 1e-06 when the run began, 0.0001 now"),
    ],
)
def test_47_a_journal_of_another_run_is_refused_with_the_difference(
    options: dict[str, Any], words: str, night: Night, monkeypatch: pytest.MonkeyPatch
) -> None:
    stop(night, monkeypatch)
    before = read_standing(night.journal).saved
    text = night.refused(2, **options)
    assert words in text
    assert "--start-over" in text
    assert read_standing(night.journal).saved == before
    night.done(start_over=True, **options)


def test_47_a_journal_of_another_version_or_input_is_refused_with_the_difference(
    night: Night, monkeypatch: pytest.MonkeyPatch
) -> None:
    stop(night, monkeypatch)
    with monkeypatch.context() as patch:
        patch.setattr("bigsvd.machine.package_version", lambda name: "9.9")
        assert "version of numpy: " in night.refused(2)
    os.utime(night.file)
    assert "the input fingerprint: " in night.refused(2)


def test_47_a_damaged_journal_falls_back_to_the_record_before(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    wanted = whole_bits(night)
    stop(night, monkeypatch)
    last = sorted(night.journal.glob("sums-*"))[-1]
    content = bytearray(last.read_bytes())
    content[-1] ^= 1
    last.write_bytes(content)
    ended = run("decompose", night.file, "--out", night.out, *as_words(night.options), "--overwrite", "--save-every", 0)
    assert ended.exit_code == 0, ended.output
    assert re.search(rf"not used: \w+ in {last.name} does not match its checksum", ended.stderr), ended.stderr
    assert result_bits(night.out) == wanted


# -------------------------------------------------------------------------------------------- 53: clocks and slowness
@pytest.mark.parametrize("jump", [1e9, -1e9], ids=["ahead", "back"])
def test_53_a_clock_that_jumps_changes_nothing(jump: float, night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    wanted, clock, shift = whole_bits(night), time.time, [0.0]
    monkeypatch.setattr(time, "time", lambda: clock() + shift[0])
    monkeypatch.setattr(events.time, "time", time.time)
    happened = meanwhile(monkeypatch, lambda: shift.__setitem__(0, jump), after=fetches(night, 2, 0.2))
    assert night.done() == wanted
    assert happened


def test_53_a_run_goes_on_after_the_clock_went_back(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    """The record that counts is told by its place in the run, not by its time."""
    wanted, clock = whole_bits(night), time.time
    stop(night, monkeypatch)
    monkeypatch.setattr(time, "time", lambda: clock() - 1e6)
    assert night.done() == wanted


def test_53_a_process_that_was_put_to_sleep_goes_on(night: Night) -> None:
    wanted = whole_bits(night)
    process = start(night)
    run_folder = night.journal
    end = time.monotonic() + 30
    while not list(run_folder.glob("sums-01-*")) and time.monotonic() < end:
        time.sleep(0.002)
    process.send_signal(signal.SIGSTOP)
    time.sleep(1.0)
    process.send_signal(signal.SIGCONT)
    _, told = process.communicate(timeout=60)
    assert process.returncode == 0, told
    assert result_bits(night.out) == wanted


def test_53_a_slow_disk_is_waited_for(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    wanted, fetch = whole_bits(night), PanelReader.fetch

    def slowly(self: PanelReader, panel: int, buffer: np.ndarray) -> np.ndarray:
        time.sleep(0.5 if panel == 7 else 0.0)
        return fetch(self, panel, buffer)

    monkeypatch.setattr(PanelReader, "fetch", slowly)
    assert night.done() == wanted


def test_53_records_on_a_slow_disk_take_a_fortieth_of_the_time(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    from bigsvd.journal import journal

    write, spent = journal.write_record, []

    def slowly(path: Path, *words: Any) -> Any:
        spent.append(path.name)
        time.sleep(0.1)
        return write(path, *words)

    monkeypatch.setattr(journal, "write_record", slowly)
    monkeypatch.setattr(journal, "SHARE_OF_TIME", 1 / 40)
    night.done()
    often = [name for name in spent if name.startswith("sums")]
    # After the first that took a tenth of a second the next would be due in four; ends of sweeps are kept sooner.
    assert len(often) <= 8

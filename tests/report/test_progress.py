"""Progress: plain lines off a terminal, one live line on it, nothing when quiet, safe from any thread."""

from __future__ import annotations

import io
import re
import threading
import time

import pytest

from bigsvd.report import show_progress
from bigsvd.report.progress import Reporter
from bigsvd.sweep import Progress

pytestmark = pytest.mark.alone

MIB = 1 << 20


class Clock:
    """A clock that is set by hand."""

    now = 0.0

    def __call__(self) -> float:
        return self.now


class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self) -> bool:
        return True


def reported(seconds_per_event: float, events: list[Progress]) -> list[str]:
    """Lines that a reporter with lines every ten seconds writes."""
    lines: list[str] = []
    clock = Clock()
    reporter = Reporter(lines.append, every=10.0, clock=clock)
    for event in events:
        reporter(event)
        clock.now += seconds_per_event
    reporter.close()
    return lines


def sweep(number: int, panels: int = 100) -> list[Progress]:
    first = Progress("sweep", number, 0, panels * MIB, "0 + 30 columns")
    return [first, *(Progress("sweep", number, done * MIB, panels * MIB) for done in range(1, panels + 1))]


def test_lines_come_every_ten_seconds_and_one_at_the_end_of_a_stage() -> None:
    lines = reported(1.0, sweep(1))
    assert len(lines) == 10 + 1
    assert lines[0].startswith("sweep 1: 10 MiB of 100 MiB (10%), 1 MiB/s, 1 min 30 s left, ")
    assert re.fullmatch(
        r"sweep 1: 100 MiB in 1 min 41 s, 1014 KiB/s, [\d.]+ MiB resident, 0 \+ 30 columns", lines[-1]
    ), lines[-1]


def test_a_fast_stage_is_one_line_and_the_order_of_stages_is_kept() -> None:
    events = [
        Progress("pilot", 0, 5 * MIB, 5 * MIB),
        *sweep(1),
        *sweep(2),
        *(Progress("slices", 0, done, 3) for done in range(4)),
    ]
    titles = [line.split(":")[0] for line in reported(1e-3, events)]
    assert titles == ["pilot", "sweep 1", "sweep 2", "exact check on slices"]


def test_slices_are_counted_not_weighed() -> None:
    lines = reported(20.0, [Progress("slices", 0, done, 3) for done in range(3)])
    assert lines[0].startswith("exact check on slices: 1 of 3, ")
    assert lines[-1].startswith("exact check on slices: 2 in 1 min, ")


def test_a_stage_that_did_nothing_is_not_mentioned() -> None:
    assert reported(0.1, [Progress("slices", 0, 0, 0), Progress("write", 0, 0, 0)]) == []


def test_off_a_terminal_lines_are_plain() -> None:
    stream = io.StringIO()
    with show_progress(stream) as listener:
        assert listener is not None
        for event in sweep(1):
            listener(event)
    assert "\x1b" not in stream.getvalue()
    assert stream.getvalue().startswith("sweep 1: 100 MiB in ")
    assert stream.getvalue().count("\n") == 1


def test_quiet_says_nothing() -> None:
    stream = io.StringIO()
    with show_progress(stream, quiet=True) as listener:
        assert listener is None
    assert stream.getvalue() == ""


def test_the_last_stage_is_closed_when_the_run_fails() -> None:
    stream = io.StringIO()
    try:
        with show_progress(stream) as listener:
            assert listener is not None
            listener(Progress("sweep", 1, MIB, 2 * MIB))
            raise KeyboardInterrupt
    except KeyboardInterrupt:
        pass
    assert stream.getvalue().startswith("sweep 1: 1 MiB in ")


def test_many_threads_and_a_live_line_do_not_wait_for_each_other() -> None:
    stream = Terminal()
    with show_progress(stream) as listener:
        assert listener is not None

        def work(part: int) -> None:
            for step in range(200):
                listener(Progress("sweep", 1 + (step + part) // 40, step * MIB, 200 * MIB))
                if step % 20 == 0:
                    time.sleep(0.002)

        workers = [threading.Thread(target=work, args=(part,), daemon=True) for part in range(4)]
        for worker in workers:
            worker.start()
        for worker in workers:
            worker.join(timeout=20)
        assert not any(worker.is_alive() for worker in workers), "a worker waits for ever"
    assert "sweep 1" in stream.getvalue()


def test_an_event_costs_little() -> None:
    reporter = Reporter(lambda line: None)
    events = sweep(1, 2000)
    start = time.perf_counter()
    for event in events:
        reporter(event)
    assert (time.perf_counter() - start) / len(events) < 2e-4

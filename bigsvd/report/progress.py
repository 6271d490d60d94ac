"""Progress on standard error: one live line on a terminal, a plain line now and then elsewhere, nothing when quiet."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, TextIO

from bigsvd.machine import resident_bytes
from bigsvd.units import show_bytes, show_seconds

if TYPE_CHECKING:
    from rich.text import Text

    from bigsvd.sweep import Progress

# Seconds between plain lines within a stage.
PLAIN_EVERY = 10.0
_TITLES = {
    "probe": "probe",
    "missing": "counting missing entries",
    "pilot": "pilot",
    "slices": "exact check on slices",
    "write": "writing",
    "verify": "verifying",
}
# Stages whose amount is a number of things, not of bytes.
_COUNTED = ("slices",)
# What is said once, as a line of its own: where a run goes on, and what a sweep has certified.
SAID = ("journal", "certificate")
# Below this much of a stage, a rate says nothing yet.
_LEAST_SECONDS = 0.5
_LEAST_TOLD = 0.05


class Stage:
    """What is known of the present stage, and how to say it.

    Parameters
    ----------
    event : Progress
        The first of the stage.
    now : float
        Seconds of a steady clock.
    """

    def __init__(self, event: Progress, now: float) -> None:
        self.event, self.note, self.began = event, event.note, now
        # What was there with the first bytes may have been summed by an earlier process: no rate follows from it.
        self._first = (event.bytes_done, now)

    def take(self, event: Progress, now: float) -> None:
        """Keep the latest event, of two threads' the one further on; notes stay until there is another."""
        if event.bytes_done >= self.event.bytes_done:
            self.event = event
        if not self._first[0]:
            self._first = (event.bytes_done, now)
        self.note = event.note or self.note

    def continues(self, event: Progress) -> bool:
        """Whether an event belongs to this stage."""
        return (event.stage, event.sweep) == (self.event.stage, self.event.sweep) and (
            event.bytes_total == self.event.bytes_total
        )

    def rate(self, now: float) -> float | None:
        """Amount a second; None while it says nothing yet."""
        (first, since), done = self._first, self.done()
        if done > first and now - since >= _LEAST_SECONDS:
            return (done - first) / (now - since)
        return done / (now - self.began) if done and now - self.began >= _LEAST_SECONDS else None

    def seconds_left(self, now: float) -> float | None:
        """Seconds to the end of the stage at this rate; None where that is not known."""
        rate, left = self.rate(now), self.event.bytes_total - self.done()
        return left / rate if rate else None

    def words(self, now: float, resident: int) -> str:
        """Stage, amount, rate, time left and resident size, on one line."""
        event, rate, left = self.event, self.rate(now), self.seconds_left(now)
        done, total = self.done(), event.bytes_total
        if event.stage in _COUNTED:
            return f"{self._title()}: {done} of {total}, {show_bytes(resident)} resident"
        parts = [f"{show_bytes(done)} of {show_bytes(total)}" + (f" ({done / total:.0%})" if total else "")]
        if rate:
            parts.append(f"{show_bytes(rate)}/s")
            if left:
                parts.append(f"{show_seconds(left)} left")
        return f"{self._title()}: {', '.join(parts)}, {show_bytes(resident)} resident"

    def closing_words(self, now: float, resident: int) -> str:
        """How the stage ended, on one line."""
        seconds, done = now - self.began, self.done()
        counted = self.event.stage in _COUNTED
        parts = [f"{done if counted else show_bytes(done)} in {show_seconds(seconds)}"]
        # At once is what an earlier process had summed.
        if seconds >= _LEAST_TOLD and not counted:
            parts.append(f"{show_bytes(self.rate(now) or done / seconds)}/s")
        parts += [f"{show_bytes(resident)} resident", *([self.note] if self.note else [])]
        return f"{self._title()}: {', '.join(parts)}"

    def done(self) -> int:
        """Amount done; a stage that goes over its bytes several times is done when it went over them once."""
        return min(self.event.bytes_done, self.event.bytes_total or self.event.bytes_done)

    def _title(self) -> str:
        """Name of the stage for people."""
        event = self.event
        return f"sweep {event.sweep}" if event.sweep else _TITLES.get(event.stage, event.stage)


class Reporter:
    """A listener that keeps the latest event and prints little; called from any thread.

    Parameters
    ----------
    write : callable
        Takes one finished line.
    every : float or None
        Seconds between lines within a stage; None for lines at the ends of stages only.
    clock : callable
        Steady seconds.
    """

    def __init__(
        self,
        write: Callable[[str], None],
        *,
        every: float | None = PLAIN_EVERY,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._write, self._every, self._clock = write, every, clock
        self._lock = threading.Lock()
        self._stage: Stage | None = None
        self._printed = clock()

    def __call__(self, event: Progress) -> None:
        """Take note of an event."""
        line = ""
        with self._lock:
            now = self._clock()
            if event.stage in SAID:
                line, self._stage = "\n".join(filter(None, (self._end(now), event.note))), None
            elif self._stage is None or not self._stage.continues(event):
                line = self._end(now)
                self._stage, self._printed = Stage(event, now), now
            else:
                self._stage.take(event, now)
                if self._every is not None and now - self._printed >= self._every:
                    line, self._printed = self._stage.words(now, resident_bytes()), now
        # Written without the lock: whoever draws the live line holds the terminal and waits for `line`.
        if line:
            self._write(line)

    def say(self, lines: Iterable[str]) -> None:
        """Write lines that stay, above the live one."""
        self._write("\n".join(lines))

    def line(self) -> str:
        """The present state; empty before anything happened."""
        with self._lock:
            return "" if self._stage is None else self._stage.words(self._clock(), resident_bytes())

    def close(self) -> None:
        """Say how the last stage ended."""
        with self._lock:
            line, self._stage = self._end(self._clock()), None
        if line:
            self._write(line)

    def _end(self, now: float) -> str:
        """The closing line of a stage in which anything was done."""
        return self._stage.closing_words(now, resident_bytes()) if self._stage and self._stage.event.bytes_done else ""


@contextmanager
def show_progress(stream: TextIO, *, quiet: bool = False) -> Iterator[Reporter | None]:
    """Report progress while the block runs.

    Parameters
    ----------
    stream : file
        Standard error. On a terminal the present state is one line that is drawn again four times a second; elsewhere
        there is a plain line every ten seconds. Both keep one line for each finished stage.
    quiet : bool
        Nothing at all.

    Yields
    ------
    Reporter or None
        What `bigsvd.decompose` takes as `progress`.
    """
    if quiet:
        yield None
    elif stream.isatty():
        with _live(stream) as reporter:
            yield reporter
    else:
        reporter = Reporter(lambda line: print(line, file=stream, flush=True))
        try:
            yield reporter
        finally:
            reporter.close()


@contextmanager
def _live(stream: TextIO) -> Iterator[Reporter]:
    """Draw the present state in place, below the lines of finished stages."""
    from rich.console import Console
    from rich.live import Live
    from rich.text import Text

    console = Console(file=stream, highlight=False, markup=False, soft_wrap=True)
    reporter = Reporter(lambda line: console.print(line), every=None)

    def draw() -> Text:
        return Text(reporter.line(), no_wrap=True, overflow="ellipsis")

    with Live(get_renderable=draw, console=console, refresh_per_second=4, transient=True, redirect_stdout=False):
        try:
            yield reporter
        finally:
            reporter.close()

"""What a run tells whoever listens, and how it is asked to stop."""

from __future__ import annotations

import threading
import time
from dataclasses import dataclass
from typing import Protocol


@dataclass(frozen=True)
class Progress:
    """How far a stage has come.

    Attributes
    ----------
    stage : str
        ``missing``, ``probe``, ``pilot``, ``sweep``, ``slices``, ``write`` or ``verify``; ``journal`` and
        ``certificate`` bring a note only: where a run goes on, and what a sweep has certified.
    sweep : int
        Number of the sweep, from 1; 0 outside sweeps.
    bytes_done, bytes_total : int
        Decoded bytes of this stage.
    note : str
        What else there is to say, one line; empty for none.
    """

    stage: str
    sweep: int
    bytes_done: int
    bytes_total: int
    note: str = ""


class Listener(Protocol):
    """Called from any thread, at least once per panel."""

    def __call__(self, event: Progress) -> None:
        """Take note of an event; must return at once."""
        ...


class StoppedError(Exception):
    """The run was asked to stop; raised inside workers between two panels."""


class OutOfTimeError(StoppedError):
    """The time for reading is over; raised inside workers between two panels."""


# Stages of which no more is read once the time for reading is over.
_READING = ("pilot", "sweep")


class Control:
    """Counts the bytes read, passes progress on and carries the wish to stop to the workers.

    Parameters
    ----------
    listener : Listener or None

    Attributes
    ----------
    bytes_read : int
        Decoded bytes read so far.
    read_until : float or None
        When pilot and sweeps are to stop reading, seconds since 1970.
    """

    def __init__(self, listener: Listener | None = None) -> None:
        self.bytes_read = 0
        self.read_until: float | None = None
        self._listener = listener
        self._lock = threading.Lock()
        self._stop = threading.Event()
        self._stage = ("", 0, 0)
        self._done = 0
        self._began = time.perf_counter()
        self._timings: dict[str, float] = {}
        self._spent: dict[tuple[str, str], float] = {}

    def begin(self, stage: str, total: int, sweep: int = 0, note: str = "") -> None:
        """Open a stage of so many bytes."""
        with self._lock:
            self._close_stage()
            self._stage, self._done = (stage, sweep, total), 0
        self.tell(note)

    def account(self, name: str) -> None:
        """Count the time from now on under another name, without telling the listener."""
        with self._lock:
            self._close_stage()
            self._stage = (name, 0, 0)

    def timings(self) -> dict[str, float]:
        """Seconds spent in every stage so far; sweeps together."""
        with self._lock:
            self._close_stage()
            return dict(self._timings)

    def spend(self, seconds: dict[str, float]) -> None:
        """Add up what workers spent on each phase of a sweep; seconds of several workers overlap."""
        with self._lock:
            for phase, more in seconds.items():
                key = self._stage[0], phase
                self._spent[key] = self._spent.get(key, 0.0) + more

    def spent(self, within: str | None = None) -> dict[str, float]:
        """Worker-seconds so far: read (with decoding), convert (with energy and sums), products, fold, scratch.

        Parameters
        ----------
        within : str or None
            Only those of this stage.
        """
        found: dict[str, float] = {}
        with self._lock:
            for (stage, phase), seconds in self._spent.items():
                if within in (None, stage):
                    found[phase] = found.get(phase, 0.0) + seconds
        return found

    def _close_stage(self) -> None:
        """Add the time since the stage began to its account."""
        now = time.perf_counter()
        if self._stage[0]:
            self._timings[self._stage[0]] = self._timings.get(self._stage[0], 0.0) + now - self._began
        self._began = now

    def advance(self, size: int, *, read: int | None = None) -> None:
        """Count bytes of the present stage; `read` is what was decoded from the source for them."""
        with self._lock:
            self._done += size
            self.bytes_read += size if read is None else read
        if self._stop.is_set():
            raise StoppedError
        # The clock on the wall: a machine that slept meanwhile is out of time as well.
        if self.read_until is not None and self._stage[0] in _READING and time.time() > self.read_until:
            raise OutOfTimeError
        self.tell()

    def tell(self, note: str = "") -> None:
        """Pass the present state to the listener."""
        if self._listener is not None:
            stage, sweep, total = self._stage
            self._listener(Progress(stage, sweep, self._done, total, note))

    def go_on(self) -> None:
        """Take back the wish to stop, once the workers have followed it."""
        self._stop.clear()

    def stop(self) -> None:
        """Ask the workers to stop after their present panel."""
        self._stop.set()


class Stopwatch:
    """Seconds that one worker spends on each phase.

    Attributes
    ----------
    seconds : dict of str to float
    """

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._phase = ""
        self._since = 0.0

    def start(self, phase: str) -> None:
        """End the present phase and begin another."""
        now = time.perf_counter()
        if self._phase:
            self.seconds[self._phase] = self.seconds.get(self._phase, 0.0) + now - self._since
        self._phase, self._since = phase, now

    def stop(self) -> None:
        """End the present phase; what follows is not counted."""
        self.start("")

"""OUT.run/status.json: how far a run is, for programs, written anew every few seconds and always whole."""

from __future__ import annotations

import contextlib
import json
import os
import threading
import time
from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bigsvd.machine import resident_bytes
from bigsvd.report.plain import plain
from bigsvd.report.progress import SAID, Stage

if TYPE_CHECKING:
    from bigsvd.sweep import Progress

NAME = "status.json"
FORMAT = 1
# Seconds between two writings, and before a new stage is told.
EVERY, SOONEST = 3.0, 0.5


class StatusFile:
    """A listener that keeps a small JSON file up to date.

    Parameters
    ----------
    folder : Path
        OUT.run.
    facts : mapping
        What does not change: process, host, matrix and so on.
    counts : callable
        What does: called for every writing, for example bytes read and the last saving.
    clock : callable
        Steady seconds.
    """

    def __init__(
        self,
        folder: Path,
        facts: Mapping[str, Any],
        counts: Callable[[], Mapping[str, Any]],
        *,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._path, self._facts, self._counts, self._clock = folder / NAME, dict(facts), counts, clock
        self._lock = threading.Lock()
        self._stage: Stage | None = None
        self._verdict: str | None = None
        self._written = clock() - EVERY

    def __call__(self, event: Progress) -> None:
        """Take note of an event, and write if it is time."""
        with self._lock:
            now = self._clock()
            if event.stage == "certificate":
                self._verdict = event.note
            if event.stage in SAID:
                return
            new = self._stage is None or not self._stage.continues(event)
            if self._stage is None or new:
                self._stage = Stage(event, now)
            else:
                self._stage.take(event, now)
            if now - self._written >= (SOONEST if new else EVERY):
                self._write("running", now)

    def close(self, state: str, problem: str | None = None) -> None:
        """Write how the run ended: ``finished``, ``stopped`` or ``failed``."""
        with self._lock:
            self._write(state, self._clock(), problem)

    def _write(self, state: str, now: float, problem: str | None = None) -> None:
        """Write beside the file and rename; a device that is full must not end the run for this."""
        self._written = now
        document = {
            "format": FORMAT,
            "state": state,
            "written": show_moment(time.time()),
            **self._facts,
            **self._counts(),
            **_stage_facts(self._stage, now),
            "verdict": self._verdict,
            "problem": problem,
        }
        partial = self._path.with_name(f"{NAME}.new")
        with contextlib.suppress(OSError):
            partial.write_text(json.dumps(plain(document), allow_nan=False) + "\n")
            os.replace(partial, self._path)


def show_moment(seconds: float | None) -> str | None:
    """A moment as ISO 8601 in UTC.

    >>> show_moment(0.0)
    '1970-01-01T00:00:00+00:00'
    """
    return None if seconds is None else datetime.fromtimestamp(seconds, UTC).isoformat(timespec="seconds")


def read_status(folder: Path) -> dict[str, Any] | None:
    """What the status file in a folder says; None where there is none that can be read."""
    try:
        found = json.loads((folder / NAME).read_text())
    except (OSError, ValueError, RecursionError):
        return None
    return found if isinstance(found, dict) and found.get("format") == FORMAT else None


def _stage_facts(stage: Stage | None, now: float) -> dict[str, Any]:
    """How far the present stage is."""
    event = stage.event if stage else None
    return {
        "stage": event.stage if event else "",
        "sweep": event.sweep if event else 0,
        "bytes_done": stage.done() if stage else 0,
        "bytes_total": event.bytes_total if event else 0,
        "bytes_per_second": stage.rate(now) if stage else None,
        "seconds_left": stage.seconds_left(now) if stage else None,
        "resident_bytes": resident_bytes(),
    }

"""OUT.log: what happened when, a line a minute and at every stage, for whoever looks in the morning."""

from __future__ import annotations

import contextlib
import os
import re
import stat
from collections.abc import Callable, Iterable
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING

from bigsvd.errors import ResultError
from bigsvd.report.progress import Reporter

if TYPE_CHECKING:
    from bigsvd.sweep import Progress

# Seconds between lines within a stage.
EVERY = 60.0
_STAMP = re.compile(rb"\d{4}-\d\d-\d\d \d\d:\d\d:\d\d[+-]\d\d:\d\d  ")


class RunLog:
    """A listener that appends lines with time stamps to a file; runs that follow each other share it.

    Parameters
    ----------
    path : Path
        OUT.log.
    now : callable
        The present moment, with the offset of its time zone.

    Raises
    ------
    ResultError
        If the file cannot be written, is a link, or is no log of ours.
    """

    def __init__(self, path: Path, *, now: Callable[[], datetime] = lambda: datetime.now().astimezone()) -> None:
        self._now = now
        self._handle = _open(path)
        self._reporter = Reporter(self._write, every=EVERY)

    def __call__(self, event: Progress) -> None:
        """Take note of an event."""
        self._reporter(event)

    def say(self, lines: Iterable[str]) -> None:
        """Write lines at once."""
        self._write("\n".join(lines))

    def close(self, lines: Iterable[str] = ()) -> None:
        """Say how the last stage ended, then these lines."""
        self._reporter.close()
        self.say(lines)
        os.close(self._handle)

    def _write(self, text: str) -> None:
        """Append lines; a device that is full must not end the run for its log's sake."""
        stamp = self._now().isoformat(sep=" ", timespec="seconds")
        lines = [line for line in text.splitlines() if line.strip()]
        # One call, so that lines of several threads stay whole.
        with contextlib.suppress(OSError):
            os.write(self._handle, "".join(f"{stamp}  {line}\n" for line in lines).encode(errors="backslashreplace"))


def _open(path: Path) -> int:
    """Open the file for appending; refuse what no log of ours is."""
    try:
        flags = os.O_RDWR | os.O_CREAT | os.O_APPEND | os.O_NOFOLLOW | os.O_NONBLOCK | os.O_CLOEXEC
        handle = os.open(path, flags, 0o666)
    except OSError as error:
        raise ResultError(
            f"the log file {path} cannot be written",
            evidence=[os.strerror(error.errno or 0) if not path.is_symlink() else f"it is a link to {path.readlink()}"],
            remedy="Move it away, or choose another --out.",
        ) from error
    begins = os.pread(handle, 64, 0) if stat.S_ISREG(os.fstat(handle).st_mode) else b"?"
    if begins and not _STAMP.match(begins):
        os.close(handle)
        raise ResultError(
            f"{path} is in the way, where the log of the run goes",
            evidence=[f"it is no such log; it begins with {begins[:20]!r}"],
            remedy="Move it away, or choose another --out.",
        )
    return handle

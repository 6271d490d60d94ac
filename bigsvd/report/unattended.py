"""What a run leaves for those who do not watch it: its log and its status file, kept as it goes and when it ends."""

from __future__ import annotations

import os
import socket
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from bigsvd.report.foresight import Foresight, announcement
from bigsvd.report.log import RunLog
from bigsvd.report.standing import going_on_line, going_on_words, standing_words
from bigsvd.report.status import StatusFile, show_moment

if TYPE_CHECKING:
    from bigsvd.certify import Certificate
    from bigsvd.drive import KeptRun
    from bigsvd.sweep import Control, Listener, Progress

# Lines of a log may be as long as they are.
_WIDTH = 1000


class Listeners:
    """Passes every event on to several listeners.

    Parameters
    ----------
    last : Listener or None
        The caller's own; it may raise, so the others come before it.
    """

    def __init__(self, last: Listener | None) -> None:
        self._last = last
        self.others: list[Listener] = []

    def __call__(self, event: Progress) -> None:
        """Pass an event on."""
        for listener in self.others:
            listener(event)
        if self._last is not None:
            self._last(event)

    def say(self, words: str) -> None:
        """Pass on a line about where the run goes on."""
        from bigsvd.sweep import Progress

        self(Progress("journal", 0, 0, 0, words))


class Watch:
    """The log and the status file of one run; neither where the run cannot be gone on with.

    Parameters
    ----------
    kept : KeptRun or None
    log : RunLog or None
    status : StatusFile or None
    """

    def __init__(
        self, kept: KeptRun | None = None, log: RunLog | None = None, status: StatusFile | None = None
    ) -> None:
        self._kept, self._log, self._status = kept, log, status
        self._certificate: Certificate | None = None

    def take(self, certificate: Certificate) -> None:
        """Take note of what the result says of itself."""
        self._certificate = certificate

    def end(self) -> None:
        """Say that the result is in place."""
        if self._log is None or self._status is None or self._kept is None:
            return
        self._status.close("finished")
        words = [f"in place: {self._kept.folder.place.out}"]
        if self._certificate is not None:
            met = "met" if self._certificate.tolerance_met else "not met"
            words.insert(0, f"finished: {self._certificate.verdict}; tolerance {met}")
        self._log.close(words)

    def fail(self, error: BaseException) -> None:
        """Say how the run ended without a result, and up to where it is kept."""
        from bigsvd.sweep import StoppedError

        if self._log is None or self._status is None or self._kept is None:
            return
        stopped = isinstance(error, StoppedError | KeyboardInterrupt | SystemExit)
        words = "asked to stop" if stopped else f"{type(error).__name__}: {error}"
        self._status.close("stopped" if stopped else "failed", words)
        standing = self._kept.standing(error)
        kept = "nothing" if standing is None else f"up to {standing_words(standing)}"
        self._log.close([f"{'stopped' if stopped else 'failed'}: {words}", f"kept: {kept}"])


@contextmanager
def watch(
    listeners: Listeners, foreseen: Foresight, kept: KeptRun | None, control: Control, command: Sequence[str]
) -> Iterator[Watch]:
    """Keep log and status file of a run while the block runs; says first where the run goes on.

    Parameters
    ----------
    listeners : Listeners
        Those of the run; log and status file join them for the time being.
    foreseen : Foresight
        The plan of the run.
    kept : KeptRun or None
    control : Control
        Counts the bytes read.
    command : sequence of str
        The command line; empty where there is none.

    Yields
    ------
    Watch
    """
    if kept is None:
        yield Watch()
        return
    log = RunLog(kept.folder.place.log)
    status = _status_file(foreseen, kept, control)
    watching = Watch(kept, log, status)
    asked = going_on_line(command) if command else f"a decomposition into {kept.folder.place.out}"
    log.say([f"began: {asked} (process {os.getpid()} on {socket.gethostname()})", *announcement(foreseen, _WIDTH)])
    listeners.others = [log, status]
    try:
        if kept.began_with is not None:
            listeners.say(going_on_words(kept.began_with))
        yield watching
    except BaseException as error:
        listeners.others = []
        watching.fail(error)
        raise
    listeners.others = []
    watching.end()


def _status_file(foreseen: Foresight, kept: KeptRun, control: Control) -> StatusFile:
    """The status file of a run."""
    plan, journal = foreseen.plan, kept.journal
    facts = {
        "out": kept.folder.place.out,
        "matrix": plan.spec.name,
        "process": os.getpid(),
        "host": socket.gethostname(),
        "began": show_moment(time.time()),
        "predicted_seconds": foreseen.seconds,
        "planned_bytes": plan.planned_bytes,
        "matrix_bytes": plan.spec.decoded_bytes,
        "resumed": journal.resumed,
    }

    def counts() -> dict[str, Any]:
        return {"bytes_read": control.bytes_read, "saved": show_moment(journal.saved_at)}

    return StatusFile(kept.folder.path, facts, counts)

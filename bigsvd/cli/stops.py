"""Ctrl-C and SIGTERM while a decomposition runs: it stops within one panel, is kept, and says how to go on."""

from __future__ import annotations

import os
import signal
import threading
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING

from bigsvd.cli.program import Terminated
from bigsvd.errors import SourceChangedError

if TYPE_CHECKING:
    from bigsvd.sweep import Listener, Progress

_SIGNALS = (signal.SIGINT, signal.SIGTERM)
# Rich hides the cursor while it draws; a process that leaves at once must give it back.
_SHOW_CURSOR = b"\x1b[?25h"


class Stops:
    """A listener that ends the run at the next panel once a signal has come.

    Parameters
    ----------
    listener : Listener or None
        Whom events are passed on to.

    Attributes
    ----------
    number : int
        The signal that came; 0 for none.
    reading : bool
        Whether the run is past its plan: what it does from there on is kept.
    """

    def __init__(self, listener: Listener | None) -> None:
        self._listener = listener
        self.number, self.reading = 0, False

    def __call__(self, event: Progress) -> None:
        """Pass an event on, or stop; called from any thread."""
        from bigsvd.sweep import StoppedError

        self.reading = self.reading or event.stage not in ("", "probe")
        if self.number:
            raise StoppedError
        if self._listener is not None:
            self._listener(event)

    def ask(self, number: int, frame: FrameType | None) -> None:
        """Take a signal: the first asks to stop, the second leaves at once."""
        if self.number:
            if os.isatty(2):
                os.write(2, _SHOW_CURSOR)
            # The journal is whole at any moment, and the system lets go of the lock.
            os._exit(128 + number)
        self.number = number
        if not self.reading:
            raise Terminated if number == signal.SIGTERM else KeyboardInterrupt
        if os.isatty(2):
            os.write(2, b"\nStopping after the panels in hand; once more leaves at once.\n")


@contextmanager
def orderly_stops(listener: Listener | None, out: str, words: Sequence[str]) -> Iterator[Stops]:
    """Take signals as wishes to stop while the block runs; what then ends it says what was kept and how to go on.

    Parameters
    ----------
    listener : Listener or None
    out : str
        The result to be made.
    words : sequence of str
        The command line.

    Yields
    ------
    Stops
        To be given to the run as its listener.

    Raises
    ------
    KeyboardInterrupt, Terminated
        When a signal stopped the run; its first argument is the sentence to print.
    """
    from bigsvd.sweep import StoppedError

    stops = Stops(listener)
    before = _install(stops)
    try:
        yield stops
    except (StoppedError, KeyboardInterrupt) as error:
        kind = Terminated if stops.number == signal.SIGTERM or isinstance(error, Terminated) else KeyboardInterrupt
        raise kind(_ending(stops, out, words)) from None
    except Exception as error:
        # A file that changed is another input: the same command would be refused.
        kept = _kept(out, words) if stops.reading and not isinstance(error, SourceChangedError) else ""
        if kept:
            error.add_note(kept)
        raise
    finally:
        for number, handler in before:
            signal.signal(number, handler)


def _install(stops: Stops) -> list[tuple[int, signal._HANDLER]]:
    """Set the handlers; returns those from before."""
    if threading.current_thread() is not threading.main_thread():
        return []
    # Whoever ignores Ctrl-C, as a shell does for what runs in its background, goes on ignoring it.
    heard = [number for number in _SIGNALS if signal.getsignal(number) != signal.SIG_IGN]
    return [(number, signal.signal(number, stops.ask)) for number in heard]


def _ending(stops: Stops, out: str, words: Sequence[str]) -> str:
    """What to say when a signal stopped the run."""
    if not stops.reading:
        return "stopped before the matrix was read."
    return f"stopped. {_kept(out, words) or 'Nothing was kept: there was nothing yet to go on from.'}"


def _kept(out: str, words: Sequence[str]) -> str:
    """Up to where the run is kept, and the line that goes on; empty where nothing is."""
    from bigsvd.errors import ResultError
    from bigsvd.factors import Place
    from bigsvd.journal import is_run_folder, read_standing
    from bigsvd.report import going_on_line, standing_words

    try:
        run = Place.at(Path(out)).run
        if not is_run_folder(run):
            return ""
        words_kept = standing_words(read_standing(run, contents=False))
    except ResultError:
        return ""
    return f"Kept up to {words_kept}, in {run}. To go on, type:\n  {going_on_line(words)}"

"""How the program ends: exit statuses, errors in words and as JSON, interruption."""

from __future__ import annotations

import errno
import json
import os
import signal
import sys
import threading
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from types import FrameType
from typing import Any

import click

from bigsvd.errors import BigsvdError, DamagedResultError, DeadlineError, SourceChangedError, UnreadableSourceError

MET, FAILED, REFUSED, NOT_MET = 0, 1, 2, 3
INTERRUPTED, TERMINATED = 130, 143
TRACEBACK = "BIGSVD_TRACEBACK"
# Errors that no other command line would mend: of what happened to the input, the result or the time, of the machine.
_NOT_THE_COMMAND = (SourceChangedError, UnreadableSourceError, DamagedResultError, DeadlineError)
_MACHINE = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EIO, errno.ENOMEM)


class Terminated(KeyboardInterrupt):
    """The process was asked to end (SIGTERM)."""


class Program(click.Group):
    """The group of all commands, which turns every way to end into words and an exit status."""

    def main(self, args: Sequence[str] | None = None, prog_name: str | None = None, *_: Any, **extra: Any) -> Any:
        """Run a command line and exit."""
        words = list(sys.argv[1:] if args is None else args)
        for stream in (sys.stdout, sys.stderr):
            # A terminal that cannot show a letter gets its number instead of a fault.
            if hasattr(stream, "reconfigure"):
                stream.reconfigure(errors="backslashreplace")
        extra["standalone_mode"] = False
        # The line as it was typed, for whoever has to say how to go on.
        extra["obj"] = ["bigsvd", *words]
        with _terminated_as_interrupted():
            try:
                status = super().main(words, prog_name, **extra)
            except click.ClickException as error:
                status = _refuse_usage(error, as_json="--json" in words)
            except BrokenPipeError:
                # Whoever read the output has what they wanted; what is still buffered has nowhere to go.
                os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
                status = FAILED
            except Exception as error:
                status = report_error(error, as_json="--json" in words)
        sys.exit(status if isinstance(status, int) else MET)

    def invoke(self, ctx: click.Context) -> Any:
        """Run the command; an interruption is one line and an exit status."""
        try:
            return super().invoke(ctx)
        except KeyboardInterrupt as stop:
            terminated = isinstance(stop, Terminated)
            said = stop.args[0] if stop.args else "stopped, and nothing half done was kept."
            click.echo(f"{'Terminated' if terminated else 'Interrupted'}: {said}", err=True)
            return TERMINATED if terminated else INTERRUPTED


def status_of(error: Exception) -> int:
    """Exit status of an error: 2 where the user's command line or input is at fault, 1 where it is not."""
    cause = error.__cause__
    if isinstance(cause, OSError) and not isinstance(cause, BigsvdError) and cause.errno in _MACHINE:
        return FAILED
    if isinstance(error, _NOT_THE_COMMAND) or not isinstance(error, BigsvdError):
        return FAILED
    return REFUSED


def report_error(error: Exception, *, as_json: bool) -> int:
    """Print an error on standard error, with ``--json`` on standard output as well; returns the exit status."""
    if isinstance(error, BigsvdError):
        facts = {"problem": error.problem, "evidence": list(error.evidence), "remedy": error.remedy}
        click.echo(f"{type(error).__name__}: {error}", err=True)
    else:
        problem, remedy = _unexpected(error)
        facts = {"problem": problem, "evidence": [], "remedy": remedy}
        click.echo(f"{problem} {remedy}", err=True)
    for note in getattr(error, "__notes__", ()):
        click.echo(note, err=True)
    if os.environ.get(TRACEBACK):
        import traceback

        click.echo("".join(traceback.format_exception(error)), err=True, nl=False)
    if as_json:
        print_json({"error": {"kind": type(error).__name__, **facts}})
    return status_of(error)


def print_json(facts: dict[str, Any]) -> None:
    """Print one object on one line; letters beyond ASCII are escaped, so that any terminal and any pipe will do."""
    # The one control character that JSON leaves as it is.
    click.echo(json.dumps(facts, allow_nan=False).replace("\x7f", "\\u007f"))


def _refuse_usage(error: click.ClickException, *, as_json: bool) -> int:
    """Print what click says of a command line it does not understand."""
    error.show()
    if as_json:
        context = getattr(error, "ctx", None)
        remedy = f"{context.command_path} --help" if context else "bigsvd --help"
        kind = type(error).__name__
        print_json({"error": {"kind": kind, "problem": error.format_message(), "evidence": [], "remedy": remedy}})
    return error.exit_code


def _unexpected(error: Exception) -> tuple[str, str]:
    """Problem and remedy of an error that nobody raised on purpose."""
    if isinstance(error, MemoryError):
        return "The machine has no memory left for this run.", "Free some, or lower --memory."
    traced = f"Run it again with {TRACEBACK}=1 in the environment to see where it happened."
    if isinstance(error, OSError) and error.strerror:
        place = f" ({error.filename})" if error.filename else ""
        remedy = "Make room, or choose --out and --scratch on another disk." if error.errno in _MACHINE else traced
        return f"The system refused what was asked of it: {error.strerror}{place}.", remedy
    text = " ".join(str(error).split()) or "no message"
    return f"This is a fault of bigsvd: {type(error).__name__}: {text}.", f"Please report it. {traced}"


@contextmanager
def _terminated_as_interrupted() -> Iterator[None]:
    """Let SIGTERM end a run as Ctrl-C does, so that workers stop and nothing half done is left behind."""

    def terminate(number: int, frame: FrameType | None) -> None:
        raise Terminated

    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGTERM, terminate)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)

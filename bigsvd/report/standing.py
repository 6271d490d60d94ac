"""Where a run that was cut stands: in words, and as one JSON object."""

from __future__ import annotations

import os
import shlex
import time
from collections.abc import Callable, Mapping, Sequence
from datetime import datetime
from typing import TYPE_CHECKING, Any

from bigsvd.report.layout import labelled
from bigsvd.report.plain import Json, plain
from bigsvd.report.status import show_moment
from bigsvd.units import show_bytes, show_seconds, show_shape

if TYPE_CHECKING:
    from bigsvd.journal import Standing


def standing_words(standing: Standing) -> str:
    """Up to where a run is kept, and since when: ``wave 7 of 12 of sweep 2, saved 2026-12-01 23:41:10``."""
    if standing.sweep:
        whole = standing.waves == standing.of
        place = f"the end of sweep {standing.sweep}"
        if not whole:
            place = f"wave {standing.waves} of {standing.of} of sweep {standing.sweep}"
    elif standing.pilot:
        place = "the end of the pilot"
    else:
        return "nothing yet"
    return f"{place}, saved {_moment(standing.saved)}"


def going_on_words(standing: Standing) -> str:
    """One line for a run that goes on where an earlier process ended."""
    kept = f"; {show_bytes(standing.kept_bytes)} are not read again" if standing.kept_bytes else ""
    damaged = f"; not used: {'; '.join(standing.damaged)}" if standing.damaged else ""
    return f"going on from {standing_words(standing)}{kept}{damaged}"


def going_on_line(words: Sequence[str]) -> str:
    """The line to type to go on: the one it began with, which must not start over."""
    return shlex.join(word for word in words if word != "--start-over")


def standing_lines(
    standing: Standing, status: Mapping[str, Any] | None, width: int, *, now: Callable[[], float] = time.time
) -> list[str]:
    """Lay out where a run stands, and what to type to go on.

    Parameters
    ----------
    standing : Standing
    status : mapping or None
        What its status file says.
    width : int
        Cells of a line.
    now : callable
        Seconds since 1970.

    Returns
    -------
    list of str
    """
    state = "a process is at it now" if standing.running else "not finished, and no process is at it"
    pairs = [("run", f"{standing.folder}: {state}")]
    if words := _matrix_words(standing.identity):
        pairs.append(("matrix", words))
    pairs.append(("began", _moment(standing.began)))
    ago = f", {show_seconds(max(0.0, now() - standing.saved))} ago" if standing.saved else ""
    pairs.append(("kept", f"{standing_words(standing)}{ago}"))
    if standing.saved:
        kept = f"; {show_bytes(standing.kept_bytes)} need not be read again" if standing.kept_bytes else ""
        spent = f"{show_bytes(standing.bytes_read)} in {show_seconds(standing.seconds)}"
        pairs.append(("read", f"{spent}, up to then{kept}"))
    if status:
        pairs += _status_words(status, running=standing.running)
    pairs += [("damaged", f"not used: {words}") for words in standing.damaged]
    return [*labelled(pairs, width), *([] if standing.running else _how_to_go_on(standing))]


def standing_facts(standing: Standing, status: Mapping[str, Any] | None) -> Json:
    """All of it as one JSON object; its keys are documented in docs/json.md."""
    facts: Json = plain(
        {
            "run": standing.folder,
            "out": standing.out,
            "running": standing.running,
            "began": show_moment(standing.began),
            "saved": show_moment(standing.saved),
            "pilot": standing.pilot,
            "sweep": standing.sweep,
            "waves": standing.waves,
            "of_waves": standing.of,
            "kept_bytes": standing.kept_bytes,
            "bytes_read": standing.bytes_read,
            "seconds": standing.seconds,
            "damaged": standing.damaged,
            "command": going_on_line(standing.command) if standing.command else None,
            "folder": standing.command_folder or None,
            "identity": standing.identity,
            "status": status,
        }
    )
    return facts


def _how_to_go_on(standing: Standing) -> list[str]:
    """The line to type."""
    if not standing.command:
        return ["", "It was begun from Python; the same call goes on."]
    line = going_on_line(standing.command)
    if standing.command_folder not in ("", os.getcwd()):
        line = f"cd {shlex.quote(standing.command_folder)} && {line}"
    return ["", "To go on, type:", f"  {line}"]


def _status_words(status: Mapping[str, Any], *, running: bool) -> list[tuple[str, str]]:
    """What the status file adds: how far the process is, or how it ended."""
    pairs = []
    stage = f"{status.get('stage')} {status.get('sweep') or ''}".strip()
    if running and stage:
        done, total = int(status.get("bytes_done") or 0), int(status.get("bytes_total") or 0)
        amount = f"{show_bytes(done)} of {show_bytes(total)}" if stage != "slices" else f"{done} of {total}"
        pairs.append(("now", f"{stage}, {amount}, told {status.get('written')}"))
    elif status.get("problem"):
        pairs.append(("ended", str(status["problem"]).splitlines()[0]))
    if status.get("verdict"):
        pairs.append(("verdict", str(status["verdict"])))
    return pairs


def _matrix_words(identity: Mapping[str, Any]) -> str:
    """Name, shape and type of the matrix, as far as the folder tells."""
    found = identity.get("input")
    if not isinstance(found, Mapping) or not isinstance(found.get("shape"), list):
        return ""
    return f"{found.get('name')}: {show_shape(tuple(found['shape']))} {found.get('type')}"


def _moment(seconds: float | None) -> str:
    """A moment by the clock on the wall."""
    return "never" if not seconds else datetime.fromtimestamp(seconds).isoformat(sep=" ", timespec="seconds")

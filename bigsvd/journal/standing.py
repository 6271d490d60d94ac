"""Where a run that was cut stands, read from its folder."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from bigsvd.errors import ResultError
from bigsvd.factors import OutputLock, Place
from bigsvd.journal.identity import IDENTITY, read_identity
from bigsvd.journal.journal import PILOT, Saved, saved_in
from bigsvd.journal.record import DamagedRecordError, read_facts, read_record


@dataclass(frozen=True)
class Standing:
    """Where a run that was cut stands.

    Attributes
    ----------
    folder : Path
        OUT.run.
    out : Path
        The result to be made.
    identity : dict
        See `identity_of`.
    command : sequence of str
        The command line it began with; empty where it was called from Python.
    command_folder : str
        Where that was typed.
    began : float
        When the run began, seconds since 1970.
    pilot : bool
        Whether the pilot is kept.
    sweep, waves, of : int
        The last sums kept: after `waves` of `of` waves of a sweep; zeros where none were.
    kept_bytes : int
        Decoded bytes of the matrix that are in kept sums and will not be read again.
    bytes_read : int
        Decoded bytes read up to the last saving.
    seconds : float
        Spent up to then.
    saved : float or None
        When that was, seconds since 1970.
    damaged : tuple of str
        Records that cannot be used, and why.
    running : bool
        Whether a process is at it now.
    """

    folder: Path
    out: Path
    identity: dict[str, Any]
    command: Sequence[str]
    command_folder: str
    began: float
    pilot: bool
    sweep: int
    waves: int
    of: int
    kept_bytes: int
    bytes_read: int
    seconds: float
    saved: float | None
    damaged: tuple[str, ...]
    running: bool


def is_run_folder(path: Path) -> bool:
    """Whether a path is the folder of an unfinished run."""
    return path.name.endswith(".run") and (path / IDENTITY).is_file()


def read_standing(path: Path, *, contents: bool = True) -> Standing:
    """Say where the run of an OUT.run stands; changes nothing.

    Parameters
    ----------
    path : Path
    contents : bool
        Read every record whole; otherwise damage inside the arrays goes unnoticed.

    Returns
    -------
    Standing

    Raises
    ------
    DamagedJournalError
        If the folder is not one of an unfinished run, or what it says cannot be read.
    """
    record = read_identity(path)
    place = Place.at(path.with_name(path.name.removesuffix(".run")))
    command = record.get("command") or {}
    damaged: list[str] = []
    pilot = _facts(path / PILOT, damaged, contents=contents)
    found = [(each, _facts(each.path, damaged, contents=contents)) for each in saved_in(path)]
    sums = [(each, facts) for each, facts in found if facts is not None]
    last: tuple[Saved, dict[str, Any]] | None = sums[-1] if sums else None
    facts = last[1] if last else pilot or {}
    counts = facts.get("run", {})
    return Standing(
        folder=path,
        out=place.out,
        identity=record["identity"],
        command=tuple(command.get("words", ())),
        command_folder=str(command.get("folder", "")),
        began=float(record.get("began", 0.0)),
        pilot=pilot is not None,
        sweep=last[0].sweep if last else 0,
        waves=last[0].waves if last else 0,
        of=int(facts.get("of", 0)),
        kept_bytes=_kept_bytes(sums, record["identity"]),
        bytes_read=int(counts.get("bytes_read", 0)),
        seconds=float(counts.get("seconds", 0.0)),
        saved=counts.get("saved"),
        damaged=tuple(damaged),
        running=_is_held(place),
    )


def _facts(path: Path, damaged: list[str], *, contents: bool) -> dict[str, Any] | None:
    """Facts of a record; a damaged one is named, and counts as none."""
    try:
        return read_record(path)[0] if contents else read_facts(path)
    except FileNotFoundError:
        return None
    except (DamagedRecordError, OSError) as error:
        damaged.append(str(error))
        return None


def _kept_bytes(sums: Sequence[tuple[Saved, dict[str, Any]]], identity: dict[str, Any]) -> int:
    """Bytes of the matrix in the last sums of every sweep; waves are of nearly the same size."""
    try:
        spec, held = identity["input"], identity["plan"]["matrix held in memory"]
        matrix = math.prod(spec["shape"]) * np.dtype(spec["type"]).itemsize
    except (KeyError, TypeError, ValueError):
        return 0
    shares = {each.sweep: each.waves / max(1, int(facts.get("of", 0))) for each, facts in sums}
    # What was held in memory is gone with it, and is read once more.
    return int(matrix * (sum(shares.values()) if not held else 0))


def _is_held(place: Place) -> bool:
    """Whether a process holds the lock of the result."""
    try:
        OutputLock(place.lock, place.out).refuse_if_held()
    except ResultError:
        return True
    return False

"""OUT.run, the folder of a run that is not finished: made by one run, found again by the same command."""

from __future__ import annotations

import json
import os
import shutil
import stat
import time
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from bigsvd.errors import DamagedJournalError, OtherRunError, ResultError
from bigsvd.factors import OutputLock, Place, is_whole
from bigsvd.journal.identity import differences
from bigsvd.journal.journal import PILOT, Saved, saved_in
from bigsvd.journal.record import DamagedRecordError, read_record

IDENTITY = "identity.json"
FORMAT = 1


@dataclass(frozen=True)
class Standing:
    """Where a run that was cut stands.

    Attributes
    ----------
    folder : Path
    identity : dict
        See `identity_of`.
    sweep, waves, of : int
        The last sums kept: after `waves` of `of` waves of a sweep; zeros where none were.
    bytes_read : int
    seconds : float
        Spent so far.
    saved : float or None
        When the last sums were kept, seconds since 1970.
    running : bool
        Whether a process is at it now.
    """

    folder: Path
    identity: dict[str, Any]
    sweep: int
    waves: int
    of: int
    bytes_read: int
    seconds: float
    saved: float | None
    running: bool


class RunFolder:
    """Holds OUT.run and the lock of OUT for one process.

    Parameters
    ----------
    out : Path
        The result to be made.
    identity : mapping
        What the run is.
    scratch : Path or None
        Folder for Y that the user chose; None keeps it inside.

    Attributes
    ----------
    path : Path
        OUT.run.
    scratch : Path
        Folder of Y, ours alone.
    lock : OutputLock
        Held; the writer of the result takes it over.
    """

    def __init__(self, out: Path, identity: Mapping[str, Any], scratch: Path | None) -> None:
        self.place = Place.at(out)
        self.path = self.place.run
        self.identity = dict(identity)
        self.lock = OutputLock(self.place.lock, self.place.out)
        self._stays = False
        chosen = None if scratch is None else scratch.expanduser().resolve()
        name = f".{self.place.out.name}.scratch"
        self.scratch = self.path / "scratch" if chosen is None else chosen / name

    def open(self, *, start_over: bool) -> None:
        """Take the lock; make the folder, or go on in the one that is there.

        Raises
        ------
        OtherRunError
            If an unfinished run of another input, option, plan or version stands there.
        ResultError
            If another process is at it, or OUT.run is a link, somebody else's, or no folder of ours.
        """
        self.lock.acquire()
        try:
            if os.path.lexists(self.path):
                self._require_own()
                if start_over:
                    self._remove()
                else:
                    self._require_same()
            if not self.path.exists():
                self._make()
            self._make_scratch()
        except BaseException:
            self.lock.release()
            raise

    def holds_sums(self) -> bool:
        """Whether there is anything to go on from."""
        return bool(saved_in(self.path)) or (self.path / PILOT).exists()

    def stay(self) -> None:
        """Keep the folder although a result is in place, the one that a deadline left time for; the run may go on."""
        self._stays = True
        (self.path / "stopped").touch()

    def close(self, *, keep: bool) -> None:
        """Let go of the lock; remove everything unless the run is to be gone on with."""
        if not (keep or self._stays):
            self._remove()
        self.lock.release()

    def _make(self) -> None:
        """Make the folder; it says what it is before anything else is in it."""
        os.mkdir(self.path, mode=0o700)
        record = {"format": FORMAT, "began": time.time(), "scratch": str(self.scratch), "identity": self.identity}
        new = self.path / f"{IDENTITY}.new"
        with open(new, "w") as file:
            json.dump(record, file, indent=1)
            file.flush()
            os.fsync(file.fileno())
        os.replace(new, self.path / IDENTITY)

    def _make_scratch(self) -> None:
        """Make the folder of Y; one that is there must be ours."""
        try:
            os.mkdir(self.scratch, mode=0o700)
        except FileExistsError:
            _require_plain(self.scratch, "where intermediate products go")

    def _require_own(self) -> None:
        """Refuse a folder that no run of ours made."""
        _require_plain(self.path, "where an unfinished run is kept")
        if not (self.path / IDENTITY).is_file() and any(self.path.iterdir()):
            raise ResultError(
                f"{self.path} is in the way, where an unfinished run is kept",
                evidence=[f"it is no folder of such a run: {IDENTITY} is missing"],
                remedy="Move it away, or choose another --out.",
            )

    def _require_same(self) -> None:
        """Refuse to go on with another run; one that kept nothing is discarded."""
        if not self.holds_sums():
            self._remove()
            return
        record = _read_identity(self.path)
        found = list(differences(record["identity"], self.identity))
        if record["scratch"] != str(self.scratch):
            found.append(f"place of scratch: {record['scratch']} when the run began, {self.scratch} now")
        if found:
            raise OtherRunError(
                f"an unfinished run stands at {self.path}, and this is another one",
                evidence=found,
                remedy="Give the command it began with, or add --start-over to discard it.",
            )
        if not self.scratch.is_dir() and saved_in(self.path):
            raise DamagedJournalError(
                f"the intermediate products of the unfinished run at {self.path} are gone",
                evidence=[f"missing: {self.scratch}"],
                remedy="Put them back, or add --start-over.",
            )

    def _remove(self) -> None:
        """Remove scratch and the folder; what says whose it is goes last, for a process may die in between."""
        if self.scratch.is_dir() and not self.scratch.is_symlink():
            shutil.rmtree(self.scratch)
        if not self.path.is_dir():
            return
        for path in self.path.iterdir():
            if path.is_dir() and not path.is_symlink():
                shutil.rmtree(path)
            elif path.name != IDENTITY:
                path.unlink()
        (self.path / IDENTITY).unlink(missing_ok=True)
        self.path.rmdir()


def discard_finished(out: Path) -> None:
    """Remove the folder of a run whose result is in place: its process died between the two.

    Parameters
    ----------
    out : Path
    """
    place = Place.at(out)
    if place.run.is_symlink() or not is_whole(place.out):
        return
    files = [path for path in place.run.rglob("*") if path.is_file()]
    if any(path.lstat().st_mtime_ns > (place.out / "zarr.json").stat().st_mtime_ns for path in files):
        return
    lock = OutputLock(place.lock, place.out)
    with suppress(ResultError):
        lock.acquire()
        try:
            if (place.run / IDENTITY).is_file():
                RunFolder(out, {}, _scratch_of(place.run)).close(keep=False)
            elif place.run.is_dir() and not files:
                place.run.rmdir()
        finally:
            lock.release()


def _scratch_of(path: Path) -> Path | None:
    """The folder in which the run's scratch was made; None for its own."""
    scratch = Path(_read_identity(path)["scratch"])
    return None if scratch.parent == path else scratch.parent


def read_standing(path: Path) -> Standing:
    """Say where the run of an OUT.run stands; changes nothing.

    Parameters
    ----------
    path : Path

    Returns
    -------
    Standing

    Raises
    ------
    DamagedJournalError
        If the folder is not one of an unfinished run, or what it says cannot be read.
    """
    record = _read_identity(path)
    latest: Saved | None = None
    facts: dict[str, Any] = {}
    for each in saved_in(path):
        try:
            said, _ = read_record(each.path)
        except (DamagedRecordError, OSError):
            continue
        latest, facts = each, said
    out = path.with_name(path.name.removesuffix(".run"))
    place = Place.at(out)
    try:
        OutputLock(place.lock, place.out).refuse_if_held()
        running = False
    except ResultError:
        running = True
    run = facts.get("run", {})
    return Standing(
        path,
        record["identity"],
        latest.sweep if latest else 0,
        int(facts.get("waves", 0)),
        int(facts.get("of", 0)),
        int(run.get("bytes_read", 0)),
        float(run.get("seconds", 0.0)),
        run.get("saved"),
        running,
    )


def _read_identity(path: Path) -> dict[str, Any]:
    """What the run is, as it was written when it began."""
    try:
        record: dict[str, Any] = json.loads((path / IDENTITY).read_text())
        if record["format"] != FORMAT or not isinstance(record["identity"], dict):
            raise ValueError(f"format {record['format']}, and {FORMAT} is known here")
        return record
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise DamagedJournalError(
            f"{path} does not say which run it is of",
            evidence=[f"{IDENTITY}: {error}"],
            remedy="Add --start-over to discard it, or choose another --out.",
        ) from error


def _require_plain(path: Path, what: str) -> None:
    """Refuse a link, a file, or another user's folder."""
    found = path.lstat()
    owner = f"it belongs to user {found.st_uid}, this process runs as user {os.geteuid()}"
    kind = f"it is a link to {os.readlink(path)}" if stat.S_ISLNK(found.st_mode) else "it is a file"
    if not stat.S_ISDIR(found.st_mode) or found.st_uid != os.geteuid():
        raise ResultError(
            f"{path} is in the way, {what}",
            evidence=[owner if stat.S_ISDIR(found.st_mode) else kind],
            remedy="Remove it, or choose another place.",
        )

"""OUT.run, the folder of a run that is not finished: made by one run, found again by the same command."""

from __future__ import annotations

import hashlib
import os
import shutil
import stat
import time
from collections.abc import Mapping, Sequence
from contextlib import ExitStack, suppress
from pathlib import Path
from typing import Any

from bigsvd.errors import DamagedJournalError, OtherRunError, ResultError
from bigsvd.factors import OutputLock, Place, is_whole
from bigsvd.journal.identity import IDENTITY, differences, read_identity, write_identity
from bigsvd.journal.journal import PILOT, saved_in


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
    command : sequence of str
        The command line, for whoever finds the run unfinished; empty where there was none.

    Attributes
    ----------
    path : Path
        OUT.run.
    scratch : Path
        Folder of Y, ours alone.
    lock : OutputLock
        Held; the writer of the result takes it over.
    """

    def __init__(
        self, out: Path, identity: Mapping[str, Any], scratch: Path | None, command: Sequence[str] = ()
    ) -> None:
        self.place = Place.at(out)
        self.path = self.place.run
        self.identity, self.command = dict(identity), list(command)
        self.lock = OutputLock(self.place.lock, self.place.out)
        self._stays = False
        chosen = None if scratch is None else scratch.expanduser().resolve()
        self.scratch = self.path / "scratch" if chosen is None else chosen / _scratch_name(self.place.out)

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
                # A run that kept nothing is no loss, whatever it was.
                if start_over or not self.holds_sums():
                    self._remove_scratch_elsewhere()
                    self._remove()
                else:
                    self._require_same()
                    # The result that stands there now, of a deadline perhaps, is not the one this run will end with.
                    self._note(stays=False)
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
        """Keep the folder although a result will be in place, the one that a deadline left time for.

        To be said before that result is installed, lest a process that dies then loses what the run may go on from.
        """
        self._stays = True
        self._note(stays=True)

    def _note(self, *, stays: bool) -> None:
        """Write down what stands at OUT, and whether the run stays whatever comes to stand there."""
        now = {"beside": _stamp(self.place.out), "stays": stays}
        write_identity(self.path, read_identity(self.path) | now)

    def close(self, *, keep: bool) -> None:
        """Let go of the lock; remove everything unless the run is to be gone on with."""
        if not (keep or self._stays):
            with ExitStack() as last:
                # The result is in place: what cannot be removed now is no reason to keep the lock.
                last.callback(self.lock.release)
                self._remove()
            return
        self.lock.release()

    def _make(self) -> None:
        """Make the folder; it says what it is before anything else is in it."""
        os.mkdir(self.path, mode=0o700)
        command = {"words": self.command, "folder": os.getcwd()} if self.command else None
        record = {
            "began": time.time(),
            "scratch": str(self.scratch),
            "command": command,
            "beside": _stamp(self.place.out),
            "identity": self.identity,
        }
        write_identity(self.path, record)

    def _make_scratch(self) -> None:
        """Make the folder of Y; one that is there must be ours."""
        try:
            os.mkdir(self.scratch, mode=0o700)
        except FileExistsError:
            _require_plain(self.scratch, "where intermediate products go")

    def _require_own(self) -> None:
        """Refuse a folder that no run of ours made."""
        _require_plain(self.path, "where an unfinished run is kept")
        # A process that died while it made the folder leaves the file that was to become its identity.
        known = (IDENTITY, f"{IDENTITY}.new")
        if not (self.path / IDENTITY).is_file() and any(path.name not in known for path in self.path.iterdir()):
            raise ResultError(
                f"{self.path} is in the way, where an unfinished run is kept",
                evidence=[f"it is no folder of such a run: {IDENTITY} is missing"],
                remedy="Move it away, or choose another --out.",
            )

    def _require_same(self) -> None:
        """Refuse to go on with another run, or without what this one wrote."""
        record = read_identity(self.path)
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

    def _remove_scratch_elsewhere(self) -> None:
        """Remove the scratch of the run to be discarded, where that is another place than this run's."""
        with suppress(DamagedJournalError, OSError):
            scratch = Path(read_identity(self.path)["scratch"])
            # Only what a run of this very result can have made.
            if scratch.name == _scratch_name(self.place.out) and scratch.lstat().st_uid == os.geteuid():
                shutil.rmtree(scratch)

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

    The result is that of the run if another one, or none, stood there when the run began; times of files would tell
    something else after a clock was set.

    Parameters
    ----------
    out : Path
    """
    place = Place.at(out)
    if not os.path.lexists(place.run) or place.run.is_symlink() or not is_whole(place.out):
        return
    lock = OutputLock(place.lock, place.out)
    with suppress(ResultError):
        lock.acquire()
        try:
            if (place.run / IDENTITY).is_file():
                record = read_identity(place.run)
                if not record.get("stays") and record.get("beside") != _stamp(place.out):
                    RunFolder(out, {}, _scratch_of(place.run)).close(keep=False)
            elif place.run.is_dir() and not any(place.run.iterdir()):
                place.run.rmdir()
        finally:
            lock.release()


def _stamp(out: Path) -> list[int] | None:
    """What tells a result from the one before; None where there is none."""
    try:
        found = (out / "zarr.json").stat()
    except OSError:
        return None
    return [found.st_ino, found.st_size, found.st_mtime_ns]


def _scratch_of(path: Path) -> Path | None:
    """The folder in which the run's scratch was made; None for its own."""
    scratch = Path(read_identity(path)["scratch"])
    return None if scratch.parent == path else scratch.parent


def _scratch_name(out: Path) -> str:
    """Name of a run's scratch in a folder that others may choose as well; results elsewhere may be called the same."""
    return f".{out.name[:64]}.{hashlib.blake2b(os.fsencode(out), digest_size=6).hexdigest()}.scratch"


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

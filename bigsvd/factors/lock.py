"""One run writes one result: a lock file beside it, which the system lets go when the process dies."""

from __future__ import annotations

import errno
import fcntl
import json
import os
import socket
from datetime import UTC, datetime
from pathlib import Path

from bigsvd.errors import ResultError

_NO_LOCKS = (errno.ENOLCK, errno.ENOSYS, errno.EOPNOTSUPP, errno.EINVAL)


class OutputLock:
    """The right to write OUT, held from `acquire` to `release`.

    Parameters
    ----------
    path : Path
        OUT with ``.lock`` added.
    out : Path
        The result, for messages.
    """

    def __init__(self, path: Path, out: Path) -> None:
        self.path, self.out = path, out
        self._handle: int | None = None

    def acquire(self) -> None:
        """Take the lock at once or refuse.

        Raises
        ------
        ResultError
            If another run holds it (names process, host and time), or the lock file is a link or a stranger's.
        """
        while True:
            try:
                handle = os.open(self.path, os.O_RDWR | os.O_CREAT | os.O_NOFOLLOW | os.O_CLOEXEC, 0o600)
            except OSError as error:
                raise ResultError(
                    f"cannot make the lock file of {self.out}: {error.strerror}",
                    evidence=[f"lock file: {self.path}"],
                    remedy="Choose an --out in a folder of your own.",
                ) from error
            try:
                self._take(handle)
                current = _is_current(handle, self.path)
            except BaseException:
                os.close(handle)
                raise
            # The holder before us may have removed the file between our opening and our locking it.
            if current:
                break
            os.close(handle)
        os.ftruncate(handle, 0)
        now = datetime.now(UTC).isoformat(timespec="seconds")
        record = {"pid": os.getpid(), "host": socket.gethostname(), "since": now}
        os.pwrite(handle, json.dumps(record).encode(), 0)
        self._handle = handle

    def release(self) -> None:
        """Remove the lock file and let go."""
        if self._handle is not None:
            self.path.unlink(missing_ok=True)
            os.close(self._handle)
            self._handle = None

    def refuse_if_held(self) -> None:
        """Refuse if another run holds the lock; changes nothing."""
        try:
            handle = os.open(self.path, os.O_RDONLY | os.O_NOFOLLOW | os.O_CLOEXEC)
        except FileNotFoundError:
            return
        except OSError as error:
            raise ResultError(
                f"the lock file of {self.out} cannot be read: {error.strerror}",
                evidence=[f"lock file: {self.path}"],
                remedy="Choose another --out.",
            ) from error
        try:
            self._take(handle)
        finally:
            os.close(handle)

    def _take(self, handle: int) -> None:
        """Lock an open file, or raise with the name of its holder."""
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as error:
            raise self._held_by(_record(handle)) from error
        except OSError as error:
            if error.errno not in _NO_LOCKS and error.errno != errno.EBADF:
                raise
            # A file system without locks: believe the record, unless it names a dead process of this host.
            record = _record(handle)
            if record and not (record["host"] == socket.gethostname() and _ended(int(record["pid"]))):
                raise self._held_by(record, certain=False) from error

    def _held_by(self, record: dict[str, str], *, certain: bool = True) -> ResultError:
        """Say who writes the result; where the system keeps no locks, the file may have outlived its process."""
        holder = "process {pid} on {host}, since {since}".format(**record) if record else "process unknown"
        evidence = [holder, f"lock file: {self.path}"]
        if certain:
            remedy = "Wait for it to end, or choose another --out."
        else:
            evidence.append("this file system keeps no locks, so nothing tells whether that process is still there")
            remedy = (
                f'If it is not, remove the file: rm "{self.path}". Else wait for it to end, or choose another --out.'
            )
        return ResultError(f"another run is writing {self.out}", evidence=evidence, remedy=remedy)


def _record(handle: int) -> dict[str, str]:
    """Read who holds the lock; empty where that was not written yet."""
    try:
        record = json.loads(os.pread(handle, 4096, 0))
        return {name: str(record[name]) for name in ("pid", "host", "since")}
    except (ValueError, KeyError, TypeError):
        return {}


def _is_current(handle: int, path: Path) -> bool:
    """Whether the open file is still the one of that name."""
    try:
        there, mine = os.stat(path, follow_symlinks=False), os.fstat(handle)
    except FileNotFoundError:
        return False
    return (there.st_dev, there.st_ino) == (mine.st_dev, mine.st_ino)


def _ended(pid: int) -> bool:
    """Whether a process of this host is gone."""
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return True
    except PermissionError:
        return False
    return False

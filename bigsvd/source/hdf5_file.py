"""An HDF5 file opened for reading, and what it means when that fails."""

from __future__ import annotations

import errno
import os
import re
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from typing import Any

from bigsvd.errors import BigsvdError, DamagedSourceError, NoMatrixError, SourceError
from bigsvd.source.persist import PersistentError, persist, unreadable
from bigsvd.units import show_count

# No locks on this file system, or none on a device that may only be read: ENOLCK, ENOSYS, EOPNOTSUPP, ENOTSUPP of NFS,
# EROFS.
_NO_LOCKS = (errno.ENOLCK, errno.ENOSYS, errno.EOPNOTSUPP, 524, errno.EROFS)
_TRUNCATED = re.compile(r"eof = (\d+).*stored_eof = (\d+)")


def open_hdf5(path: str) -> Any:
    """Open an HDF5 file read-only.

    Locks are taken where the file system knows them; where it has none, the file is read without, and a change is
    noticed by its size and time. The chunk cache is off: chunks are read whole and once.
    """
    import h5py

    def opened() -> Any:
        try:
            return h5py.File(path, "r", locking="best-effort", rdcc_nbytes=0)
        except OSError as error:
            if "unable to lock file" not in str(error):
                raise
            if _lock_errno(error) in _NO_LOCKS:
                return h5py.File(path, "r", locking=False, rdcc_nbytes=0)
            # A writer's lock does not pass in seconds.
            raise _why_not_opened(path, error) from error

    try:
        file = persist(opened)
    except BigsvdError:
        raise
    except PersistentError as error:
        raise unreadable(path, [], error) from error
    except OSError as error:
        raise _why_not_opened(path, error) from error
    if file.mode != "r":
        # The library joins all handles of one process; what the writing one still holds back is not in the file.
        file.close()
        raise SourceError(
            f"{path} is open for writing in this very process",
            evidence=["what was written and not yet flushed cannot be read from the file"],
            remedy='Close it first, or open it with h5py.File(path, "r").',
        )
    return file


def register_plugins() -> None:
    """Give the library the filters of hdf5plugin, where that is installed; known chains are decoded without them."""
    with suppress(ImportError):
        import hdf5plugin  # noqa: F401  registers its filters


@contextmanager
def library_errors_named(name: str) -> Iterator[None]:
    """Turn what the library raises about a file's own structure into an error that names the file."""
    try:
        yield
    except BigsvdError:
        raise
    except Exception as error:  # h5py raises OSError, RuntimeError, KeyError, ValueError, TypeError, as it comes
        raise DamagedSourceError(
            f"{name}: the structure of the HDF5 file cannot be read there",
            evidence=[f"the library says: {error}"],
            remedy="Copy or download the file again, or write it again from its origin.",
        ) from error


def _lock_errno(error: OSError) -> int:
    """Why a lock was refused, which some versions of h5py tell in the text only."""
    found = re.search(r"errno = (\d+)", str(error))
    return int(found[1]) if found else error.errno or 0


def _why_not_opened(path: str, error: OSError) -> SourceError:
    text = str(error)
    truncated = _TRUNCATED.search(text)
    if truncated:
        found, needed = int(truncated[1]), int(truncated[2])
        return DamagedSourceError(
            f"{path} is cut short: {found / needed:.1%} of it is there",
            evidence=[f"{show_count(found)} bytes found, {show_count(needed)} bytes when it was written"],
            remedy="Copy or download the file again.",
        )
    if isinstance(error, FileNotFoundError):
        return NoMatrixError(f"{path} does not exist", remedy="Check the path.")
    if error.errno in (errno.EACCES, errno.EPERM):
        return SourceError(
            f"{path} may not be read by this user",
            evidence=[text],
            remedy="Ask its owner for read permission, or copy it to where you may read it.",
        )
    if error.errno in (errno.EAGAIN, errno.EWOULDBLOCK) or "unable to lock file" in text:
        return SourceError(
            f"{path} is locked: another program has it open for writing",
            evidence=[text],
            remedy="Close it there, or work on a copy of the file. If the lock is left over from a program that is"
            " gone, put HDF5_USE_FILE_LOCKING=FALSE before the command.",
        )
    if "already open for" in text:
        return DamagedSourceError(
            f"{path} is marked as open for writing: its writer is still at work, or crashed and left it incomplete",
            evidence=[text],
            remedy="If no program writes to it any more, write the file again; clearing the mark with h5clear does not"
            " bring back what was never written.",
        )
    return DamagedSourceError(
        f"{path} begins like an HDF5 file but cannot be opened",
        evidence=[text, f"{show_count(os.path.getsize(path))} bytes in the file"],
        remedy="Copy or download the file again.",
    )

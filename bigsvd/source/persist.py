"""Trying again what a network file system may have refused for a moment; never for long, and never guessing."""

from __future__ import annotations

import errno
import os
import re
import time
from collections.abc import Callable, Sequence
from typing import TypeVar

from bigsvd.errors import BigsvdError, UnreadableSourceError

T = TypeVar("T")

# What passes when a server restarts, a route changes or a lock is released.
TRANSIENT = frozenset(
    getattr(errno, name)
    for name in (
        *("EIO", "EAGAIN", "EINTR", "ETIMEDOUT", "ESTALE", "ENETDOWN", "ENETUNREACH", "ENETRESET", "ECONNRESET"),
        *("ECONNABORTED", "ECONNREFUSED", "EHOSTDOWN", "EHOSTUNREACH", "ENOTCONN", "ENOLINK", "EREMOTEIO", "ECOMM"),
    )
    if hasattr(errno, name)
)
_REFUSED = (errno.EACCES, errno.EPERM, errno.EMFILE, errno.ENFILE)
# Seconds before the second to the last attempt: 4.3 in all.
PAUSES = (0.1, 0.3, 0.9, 3.0)
_IN_TEXT = re.compile(r"errno = (\d+)")


class PersistentError(OSError):
    """An error of the kind that passes, which did not."""


def transient(error: BaseException | None) -> OSError | None:
    """The error of the file system behind an error, if it may pass; None where there is none.

    The HDF5 library tells its number in the text only.
    """
    while error is not None:
        if isinstance(error, PersistentError | BigsvdError):
            return None
        if isinstance(error, OSError):
            found = _IN_TEXT.search(str(error)) if error.errno is None else None
            number = int(found[1]) if found else error.errno
            if number in TRANSIENT:
                return error if error.errno is not None else OSError(number, os.strerror(number or 0))
        error = error.__cause__
    return None


def refusal(error: BaseException | None) -> OSError | None:
    """The refusal of the file system behind an error: one that did not pass, or a permission; else None."""
    while error is not None:
        if isinstance(error, PersistentError) or (isinstance(error, OSError) and error.errno in _REFUSED):
            return error
        error = error.__cause__
    return None


def unreadable(name: str, place: Sequence[str], why: OSError) -> UnreadableSourceError:
    """Say what the file system keeps back; nothing is put in its place."""
    passing = isinstance(why, PersistentError)
    found = [line for line in place if str(why) not in line]
    return UnreadableSourceError(
        f"{name} cannot be read: the system does not give its bytes",
        evidence=[*found, f"the system says: {why}"],
        remedy="See to the device or the network, then run the same command again."
        if passing
        else "See to the permissions or the number of open files, then run the same command again.",
    )


def persist(action: Callable[[], T], again: Callable[[OSError], None] | None = None) -> T:
    """Do something, and again after growing pauses where the file system refuses for a reason that may pass.

    Parameters
    ----------
    action : callable
        What to do; it must bear being done twice.
    again : callable, optional
        What to do before each further attempt, such as opening the file anew; takes the error.

    Raises
    ------
    PersistentError
        If the last attempt fails for such a reason, too; says how many there were.
    """
    for number, pause in enumerate((*PAUSES, None), 1):
        try:
            return action()
        except Exception as error:
            refused = transient(error)
            if refused is None:
                raise
            if pause is None:
                words = f"{refused.strerror or refused}; tried {number} times in {sum(PAUSES):.0f} s"
                raise PersistentError(refused.errno, words, refused.filename) from error
            found = refused
        time.sleep(pause)
        if again is not None:
            again(found)
    raise AssertionError("the last attempt returns or raises")

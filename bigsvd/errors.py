"""Every error a caller can meet, as one tree.

    BigsvdError
    ├── OptionError          (ValueError)  an option is out of range or contradicts another
    │   └── MemoryCeilingError             the plan does not fit --memory
    ├── SourceError          (OSError)     the input cannot be used
    │   ├── NoMatrixError                  no such file, or no matrix under that path
    │   ├── SeveralMatricesError           the choice must be made by the user
    │   ├── UnsupportedMatrixError         1-D, empty, text, object type, unknown codec
    │   ├── DamagedSourceError             bytes that do not decode, absent chunks
    │   ├── OutsideError                   a link leads out of the folder of the file, and links are not followed
    │   ├── UnreadableSourceError          a device, a network or a permission keeps bytes back
    │   └── SourceChangedError             the file is not the one the run began with
    ├── DeadlineError        (TimeoutError) --finish-by came before anything was certified
    ├── NonFiniteError       (ValueError)  NaN or infinity in the matrix
    └── ResultError          (OSError)     the result store cannot be written or opened
        ├── ResultExistsError
        ├── IncompleteResultError
        ├── DamagedResultError
        ├── DiskFullError              a device has not the room, or takes no more
        ├── OtherRunError              an unfinished run of something else stands there
        └── DamagedJournalError        an unfinished run that cannot be gone on with

A run that ends short of its tolerance is a verdict in the certificate, not an error.
"""

from __future__ import annotations

import unicodedata
from collections.abc import Iterable


def printable(text: str) -> str:
    r"""Show what a terminal would not print, or would obey, by its number: controls, marks of direction, broken bytes.

    >>> printable("tide\x1b[31m"), printable("a\u202eb"), printable("Gezeiten 潮")
    ('tide\\x1b[31m', 'a\\u202eb', 'Gezeiten 潮')
    """
    if text.isprintable():
        return text
    return "".join(map(_shown, text))


def _shown(letter: str) -> str:
    """One letter, or its number; blanks of every width stay."""
    if letter.isprintable() or unicodedata.category(letter) == "Zs":
        return letter
    number = ord(letter)
    return f"\\x{number:02x}" if number < 256 else f"\\u{number:04x}" if number < 65536 else f"\\U{number:08x}"


class BigsvdError(Exception):
    """Base of all errors raised on purpose.

    Parameters
    ----------
    problem : str
        What was asked against what is needed, one sentence.
    evidence : iterable of str
        Values, units and places that show it, one line each.
    remedy : str
        One thing the user can type.
    """

    def __init__(self, problem: str, *, evidence: Iterable[str] = (), remedy: str = "") -> None:
        # Names from a file may hold whatever its writer liked, such as what a terminal takes for orders.
        self.problem = printable(problem)
        self.evidence = tuple(map(printable, evidence))
        self.remedy = printable(remedy)
        lines = [self.problem, *(f"    {line}" for line in self.evidence)]
        if remedy:
            lines.append(self.remedy)
        super().__init__("\n".join(lines))


class OptionError(BigsvdError, ValueError):
    """An option is out of range, or contradicts another or the matrix."""


class MemoryCeilingError(OptionError):
    """The least that the plan needs is more than the memory ceiling."""


class SourceError(BigsvdError, OSError):
    """The input cannot be used."""


class NoMatrixError(SourceError):
    """No such file, or no matrix under the given path."""


class SeveralMatricesError(SourceError):
    """Several matrices would do; the user must name one."""


class UnsupportedMatrixError(SourceError):
    """The dataset is not a numeric matrix, or its encoding is not known here."""


class OutsideError(SourceError):
    """A link leads out of the folder of the file, and links are not followed.

    Attributes
    ----------
    files : tuple of str
        Where it leads.
    """

    files: tuple[str, ...] = ()


class DamagedSourceError(SourceError):
    """Stored bytes are absent or do not decode."""


class UnreadableSourceError(SourceError):
    """The system does not give the bytes: a device, a network or a permission is at fault, not what is stored."""


class SourceChangedError(SourceError):
    """The input is no longer the one the run began with."""


class NonFiniteError(BigsvdError, ValueError):
    """The matrix holds NaN or infinity."""


class DeadlineError(BigsvdError, TimeoutError):
    """The time given was over before the first sweep was."""


class ResultError(BigsvdError, OSError):
    """The result store cannot be written or opened."""


class ResultExistsError(ResultError):
    """Something already stands where the result should go."""


class IncompleteResultError(ResultError):
    """The store was never finished."""


class DamagedResultError(ResultError):
    """A part of the store is missing or does not match its checksum."""


class DiskFullError(ResultError):
    """A device has not the room that the run needs, or took no more while it was at work."""


class OtherRunError(ResultError):
    """An unfinished run of another input, option, plan or version stands where this one would be kept."""


class DamagedJournalError(ResultError):
    """An unfinished run cannot be gone on with: a part of it is missing or cannot be read."""

"""Names that the user gives: a list in the same file, in another, a text file, or an .npy file of text."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from bigsvd.errors import DamagedSourceError, NoMatrixError, OptionError, SourceError
from bigsvd.source import Access, FileStamp, MatrixSpec, Names, Source, digest, find_names, names_to_text
from bigsvd.units import shell_word, show_count

# A line longer than this is no name, and would be held whole.
LONGEST_LINE = 2**24
_AXES = ("rows", "columns")
_OPTIONS = ("--row-names", "--column-names")
_REMEDY = (
    "Give a list inside the matrix's own file by its path, one in another as FILE:PATH, a text file with a name a line,"
    " or an .npy file of text."
)


@dataclass(frozen=True)
class TextNames:
    """A text file with one name a line.

    Attributes
    ----------
    stamp : FileStamp
        Of the file when its lines were counted.
    """

    stamp: FileStamp

    @contextmanager
    def opened(self) -> Iterator[Any]:
        """Open the file; see `NameStore`."""
        self.stamp.require_unchanged()
        with open(self.stamp.path, "rb") as file:
            yield lambda start, stop: [
                line.rstrip(b"\r\n").removeprefix(b"" if at else b"\xef\xbb\xbf").decode("utf-8", "surrogateescape")
                for at, line in zip(range(start, stop), _lines(file, self.stamp.path), strict=False)
            ]


@dataclass(frozen=True)
class NpyNames:
    """An .npy file of text or numbers; objects in it are refused, since unpickling runs what the writer liked."""

    stamp: FileStamp

    @contextmanager
    def opened(self) -> Iterator[Any]:
        """Map the file; see `NameStore`."""
        self.stamp.require_unchanged()
        values = _npy(self.stamp.path)
        yield lambda start, stop: names_to_text(values[start:stop])


class NamedSource:
    """A source whose axes have the names that the user gave.

    Parameters
    ----------
    source : Source
    rows, columns : Names or None
        None leaves what the file itself holds.
    stamps : tuple
        What identifies the names.
    """

    def __init__(self, source: Source, rows: Names | None, columns: Names | None, stamps: tuple[Any, ...]) -> None:
        self.source, self.rows, self.columns, self.stamps = source, rows, columns, stamps

    @property
    def spec(self) -> MatrixSpec:
        """That of the source, with these names."""
        spec = self.source.spec
        return replace(
            spec, row_names=self.rows or spec.row_names, column_names=self.columns or spec.column_names,
            fingerprint=spec.fingerprint and digest(spec.fingerprint, *self.stamps),
        )  # fmt: skip

    def __repr__(self) -> str:
        return f"NamedSource({self.source!r})"

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        """Read entries; see `Source.read`."""
        self.source.read(rows, columns, out)

    def close(self) -> None:
        """Release the file. Reading again opens it again."""
        self.source.close()

    def __getattr__(self, name: str) -> Any:
        """What a source may offer beside the protocol: `announce`, `require_complete`, the path of its file."""
        if name == "source" or name.startswith("__"):
            raise AttributeError(name)
        return getattr(self.source, name)


def name_axes(source: Source, row_names: str | None, column_names: str | None, access: Access) -> Source:
    """Give the axes of a matrix the names that the user asks for.

    Parameters
    ----------
    source : Source
    row_names, column_names : str or None
        As for `Reading`.
    access : Access

    Returns
    -------
    Source
        The same where neither is given.

    Raises
    ------
    OptionError
        If there are not as many names as rows or columns.
    SourceError
        If there is no list of names at such a place.
    """
    if row_names is None and column_names is None:
        return source
    own = getattr(source, "path", None)
    found: list[Names | None] = [None, None]
    stamps: list[Any] = []
    for axis, place in enumerate((row_names, column_names)):
        if place is not None:
            found[axis] = names = given_names(os.fspath(place), own, access, _OPTIONS[axis])
            _require_count(names, axis, source.spec)
            stamps += [_OPTIONS[axis], names, *_stamp_of_file(str(place), own)]
    return NamedSource(source, found[0], found[1], tuple(stamps))


def given_names(place: str, own: str | None, access: Access, option: str) -> Names:
    """Find the names at a place, and count them; those of a text file are counted by its lines.

    Parameters
    ----------
    place : str
        Path inside the matrix's own file, ``FILE:PATH``, a text file, or an .npy file.
    own : str or None
        The matrix's own file.
    access : Access
    option : str
        For messages.
    """
    if own is not None:
        try:
            return find_names(own, place, access)
        except NoMatrixError:
            # Nothing there under this path: it may be a file.
            pass
    path = os.path.abspath(os.path.expanduser(place))
    if os.path.isfile(path):
        return _of_file(path, option)
    file, _, inside = place.rpartition(":")
    if file and os.path.exists(os.path.expanduser(file)):
        return find_names(os.path.abspath(os.path.expanduser(file)), inside, access).called(place)
    looked = [f"no file {path}"]
    if own is not None:
        looked.insert(0, f"nothing under that path in {own}")
    raise OptionError(f"{option} {shell_word(place)} leads nowhere", evidence=looked, remedy=_REMEDY)


def _stamp_of_file(place: str, own: str | None) -> list[FileStamp]:
    """State of another file of matrices that holds names."""
    file = os.path.abspath(os.path.expanduser(place.rpartition(":")[0]))
    return [FileStamp.of(file)] if ":" in place and file != own and os.path.exists(file) else []


def _of_file(path: str, option: str) -> Names:
    """Names in a file of their own."""
    try:
        with open(path, "rb") as file:
            head = file.read(8)
        stamp = FileStamp.of(path)
        if head.startswith(b"\x93NUMPY"):
            return Names(len(_npy(path)), path, NpyNames(stamp))
        if head.startswith((b"\x89HDF", b"PK\x03\x04", b"\x1f\x8b")):
            kind = "packed by gzip: unpack it first" if head.startswith(b"\x1f") else "no text: name the list in it"
            raise OptionError(f"{option} {path}: the file is {kind}", remedy=_REMEDY)
        with open(path, "rb") as file:
            return Names(sum(1 for _ in _lines(file, path)), path, TextNames(stamp))
    except OSError as error:
        if isinstance(error, SourceError):
            raise
        raise SourceError(f"{path} cannot be read", evidence=[str(error)], remedy="Check its permissions.") from error


def _lines(file: Any, path: str) -> Iterator[bytes]:
    """Lines of a file, none longer than what a name may have."""
    while line := file.readline(LONGEST_LINE):
        if len(line) == LONGEST_LINE:
            raise DamagedSourceError(
                f"{path} holds a line of more than {show_count(LONGEST_LINE)} bytes: no list of names", remedy=_REMEDY
            )
        yield line


def _npy(path: str) -> Any:
    """Map an .npy file of one axis."""
    try:
        values = np.load(path, mmap_mode="r", allow_pickle=False)
    except ValueError as error:
        raise OptionError(f"{path} holds no names that can be read", evidence=[str(error)], remedy=_REMEDY) from error
    if values.ndim != 1 or values.dtype.kind not in "biufSUM":
        raise OptionError(
            f"{path} holds no list of names: {values.ndim}-D, {values.dtype}",
            remedy="Save one axis of text, such as np.save(path, np.array(names)).",
        )
    return values


def _require_count(names: Names, axis: int, spec: MatrixSpec) -> None:
    """Refuse names that are more or fewer than the axis has places."""
    side, other = spec.shape[axis], spec.shape[1 - axis]
    if names.count == side:
        return
    turned = f"They fit the {_AXES[1 - axis]}: give them to {_OPTIONS[1 - axis]}."
    raise OptionError(
        f"{_OPTIONS[axis]}: {names.words} holds {show_count(names.count)} names, and {spec.name} has"
        f" {show_count(side)} {_AXES[axis]}",
        remedy=turned if names.count == other else f"Give {show_count(side)} names, or leave {_OPTIONS[axis]} out.",
    )

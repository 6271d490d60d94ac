"""Names of the rows or columns of a matrix: where they stand and how many, read in blocks once they are needed."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager
from dataclasses import dataclass, replace
from typing import Any, Protocol, runtime_checkable

import numpy as np

from bigsvd.errors import DamagedSourceError
from bigsvd.units import show_count

# Names of a block: few at first, since their length is not known, then as many as make about so many letters.
FIRST_BLOCK, MOST_BLOCK, BLOCK_LETTERS = 64, 16_384, 2**20
# Distinct values of a categorical column, which are held while its codes are read.
MOST_CATEGORIES, MOST_CATEGORY_LETTERS = 100_000, 2**24

Read = Callable[[int, int], list[str]]


class NameStore(Protocol):
    """An address from which names are read."""

    def opened(self) -> AbstractContextManager[Read]:
        """Open it; yields what reads the names from one number up to another, asked for in order and without gaps."""
        ...


@runtime_checkable
class ValueStore(Protocol):
    """A store that may hold numbers, which names are written from."""

    def values(self) -> np.ndarray | None:
        """What is stored, where that is a list of numbers; None for everything else."""
        ...


@dataclass(frozen=True)
class Names:
    """Names of one axis, not read yet; cheap to pickle.

    Attributes
    ----------
    count : int
        How many.
    words : str
        Where they stand, for people.
    held : int
        Names that reading decodes together, beside the block that is handed out.
    """

    count: int
    words: str
    _store: NameStore
    held: int = 0

    def blocks(self) -> Iterator[list[str]]:
        """Read them in order, some thousands at a time; bytes that are no UTF-8 come as lone surrogates.

        Yields
        ------
        list of str

        Raises
        ------
        SourceError
            If what holds them cannot be read, changed, or ends too early.
        """
        start, size = 0, FIRST_BLOCK
        with self._store.opened() as read:
            while start < self.count:
                block = read(start, min(start + size, self.count))
                if len(block) != min(size, self.count - start):
                    raise DamagedSourceError(
                        f"{self.words} ends after {show_count(start + len(block))} names of {show_count(self.count)}",
                        remedy="Write the names again.",
                    )
                yield block
                start += len(block)
                letters = sum(map(len, block)) // len(block) + 1
                size = max(1, min(4 * size, MOST_BLOCK, BLOCK_LETTERS // letters))

    def values(self) -> np.ndarray | None:
        """All of them as they are stored, where they are numbers; None where they are text."""
        return self._store.values() if isinstance(self._store, ValueStore) else None

    def called(self, words: str) -> Names:
        """The same names, said to stand elsewhere."""
        return replace(self, words=words)


def to_text(values: Any, *, padded: bool = False, dates: str = "") -> list[str]:
    """Turn stored values of any kind into text.

    Parameters
    ----------
    values : ndarray, shape (count,)
        Bytes, text, numbers or bools.
    padded : bool
        Whether blanks at the end fill up a fixed length.
    dates : str
        Unit, where whole numbers count time since 1970.

    Examples
    --------
    >>> to_text(np.array([b"tide", b"G\\xe4rten"])), to_text(np.array([0.1, 7], np.float32))
    (['tide', 'G\\udce4rten'], ['0.1', '7.0'])
    """
    array = np.asarray(values)
    if dates:
        return [str(value) for value in array.astype(f"M8[{dates}]")]
    found = [
        value.decode("utf-8", "surrogateescape") if isinstance(value, bytes) else "" if value is None else str(value)
        for value in array.reshape(-1)
    ]
    return [text.rstrip(" ") for text in found] if padded else found


def showable(name: str) -> str:
    r"""A name as it is kept: bytes that are no UTF-8 by their numbers, everything else as it is.

    >>> showable("G\udce4rten")
    'G\\xe4rten'
    """
    # A surrogate made by decoding stands for one byte; others that a writer left are no text either.
    return "".join(
        f"\\x{ord(letter) - 0xDC00:02x}" if 0xDC80 <= ord(letter) <= 0xDCFF
        else f"\\u{ord(letter):04x}" if 0xD800 <= ord(letter) <= 0xDFFF
        else letter
        for letter in name
    )  # fmt: skip


def repeated(names: Names) -> set[int]:
    """Hashes of the names that occur more than once; 8 bytes a name are held, three times while they are sorted."""
    hashes = np.empty(names.count, np.int64)
    filled = 0
    for block in names.blocks():
        hashes[filled : filled + len(block)] = [hash(name) for name in block]
        filled += len(block)
    values, times = np.unique(hashes, return_counts=True)
    return set(values[times > 1].tolist())

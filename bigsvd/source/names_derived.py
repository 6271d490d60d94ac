"""Names of an axis of which only some lines are taken, or that is put together from several files."""

from __future__ import annotations

from collections.abc import Generator, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import islice

import numpy as np

from bigsvd.source.names import Names, Read


@dataclass(frozen=True, eq=False)
class TakenNames:
    """Some of the names of an axis.

    Attributes
    ----------
    names : Names
        Of all lines.
    numbers : ndarray of int64
        Which of them, in increasing order.
    """

    names: Names
    numbers: np.ndarray

    @contextmanager
    def opened(self) -> Iterator[Read]:
        """Read all of them in order and hand out some; see `NameStore`."""
        found = self._picked()
        try:
            yield lambda start, stop: list(islice(found, stop - start))
        finally:
            found.close()

    def _picked(self) -> Generator[str, None, None]:
        first = taken = 0
        for block in self.names.blocks():
            last = int(np.searchsorted(self.numbers, first + len(block)))
            yield from (block[number - first] for number in self.numbers[taken:last].tolist())
            first, taken = first + len(block), last


@dataclass(frozen=True)
class JoinedNames:
    """Names of one axis after the other."""

    parts: tuple[Names, ...]

    @contextmanager
    def opened(self) -> Iterator[Read]:
        """Read them part by part; see `NameStore`."""
        found = (name for part in self.parts for block in part.blocks() for name in block)
        try:
            yield lambda start, stop: list(islice(found, stop - start))
        finally:
            found.close()


def take_names(names: Names | None, numbers: np.ndarray) -> Names | None:
    """Names of some lines.

    Parameters
    ----------
    names : Names or None
    numbers : ndarray of int
        Lines in increasing order.

    Returns
    -------
    Names or None
    """
    if names is None:
        return None
    return Names(len(numbers), names.words, TakenNames(names, np.asarray(numbers, np.int64)), names.held)


def join_names(parts: Sequence[Names | None]) -> Names | None:
    """Names of an axis put together from several files; None where one of them has none.

    Parameters
    ----------
    parts : sequence of Names or None
        In the order in which the files are joined.

    Returns
    -------
    Names or None
    """
    known = [part for part in parts if part is not None]
    if not known or len(known) < len(parts):
        return None
    words = " and ".join(dict.fromkeys(part.words for part in known))
    return Names(sum(part.count for part in known), words, JoinedNames(tuple(known)), max(part.held for part in known))

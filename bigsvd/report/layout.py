"""Plain text laid out in columns, labelled paragraphs and wrapped lines: no colours, no boxes, nothing cut off."""

from __future__ import annotations

import textwrap
import unicodedata
from collections.abc import Iterable, Sequence

from bigsvd.errors import printable

GAP = "  "


def cells(text: str) -> int:
    """Count the terminal cells that a text takes.

    >>> cells("σ₁ ± 2"), cells("潮")
    (6, 2)
    """
    wide = sum(unicodedata.east_asian_width(letter) in "WF" for letter in text)
    return len(text) + wide - sum(unicodedata.combining(letter) > 0 for letter in text)


def table(header: Sequence[str], rows: Iterable[Sequence[str]], sides: str) -> list[str]:
    """Lay out rows under a header.

    Parameters
    ----------
    header : sequence of str
        Empty strings all over leave the header out.
    rows : iterable of sequences of str
        A row of one cell is a remark across all columns.
    sides : str
        ``l`` or ``r`` for every column.

    Returns
    -------
    list of str

    Examples
    --------
    >>> table(["rank", "state"], [["1", "resolved"], ["10", "open"]], "rl")
    ['rank  state', '   1  resolved', '  10  open']
    """
    lines = [list(header), *([printable(cell) for cell in row] for row in rows)]
    full = [line for line in lines if len(line) == len(sides)]
    widths = [max(cells(line[column]) for line in full) for column in range(len(sides))]
    laid = []
    for line in lines:
        if len(line) == len(sides):
            line = [_pad(cell, width, side) for cell, width, side in zip(line, widths, sides, strict=True)]
        laid.append(GAP.join(line).rstrip())
    return laid if any(header) else laid[1:]


def labelled(pairs: Iterable[tuple[str, str]], width: int, indent: int = 0) -> list[str]:
    """Lay out paragraphs with a label in front of each, wrapped beside it; a label that recurs is said once.

    >>> labelled([("axis", "panels are rows"), ("route", "krylov")], 80)
    ['axis   panels are rows', 'route  krylov']
    """
    pairs = list(pairs)
    room = max((cells(label) for label, _ in pairs), default=0)
    lines = []
    before = None
    for label, text in pairs:
        front = " " * indent + _pad(label if label != before else "", room, "l") + GAP
        lines += wrap(text, width, first=front, rest=" " * (indent + room) + GAP)
        before = label
    return lines


def wrap(text: str, width: int, first: str = "", rest: str | None = None) -> list[str]:
    """Break a paragraph at blanks; words longer than the width, such as paths, stay whole."""
    rest = first if rest is None else rest
    return textwrap.wrap(
        printable(text),
        max(width, 40),
        initial_indent=first,
        subsequent_indent=rest,
        break_long_words=False,
        break_on_hyphens=False,
    ) or [first.rstrip()]


def _pad(text: str, width: int, side: str) -> str:
    """Fill up with blanks to so many terminal cells."""
    blanks = " " * (width - cells(text))
    return blanks + text if side == "r" else text + blanks

"""Markdown tables that read in a terminal too."""

from __future__ import annotations

from collections.abc import Sequence


def table(headings: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    """Lines of a Markdown table, columns aligned; all but the first to the right."""
    widths = [max(len(row[i]) for row in (headings, *rows)) for i in range(len(headings))]

    def line(cells: Sequence[str]) -> str:
        first = cells[0].ljust(widths[0])
        return f"| {' | '.join([first, *(cell.rjust(w) for cell, w in zip(cells[1:], widths[1:], strict=True))])} |"

    rule = [("-" * w) if i == 0 else f"{'-' * (w - 1)}:" for i, w in enumerate(widths)]
    return [line(headings), line(rule), *(line(row) for row in rows)]

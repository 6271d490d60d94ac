"""A matrix without some of its rows or columns."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from bigsvd.source import MatrixSpec, Side, Source, require_rectangle, take_names, tile_bytes, tiles

Span = tuple[int, int]


def runs_of(numbers: np.ndarray) -> tuple[Span, ...]:
    """Runs of neighbours in ascending numbers, each the first and one past the last.

    >>> runs_of(np.array([2, 3, 4, 9]))
    ((2, 5), (9, 10))
    """
    if not len(numbers):
        return ()
    breaks = np.flatnonzero(np.diff(numbers) != 1)
    firsts = numbers[np.concatenate([[0], breaks + 1])]
    lasts = numbers[np.concatenate([breaks, [len(numbers) - 1]])]
    return tuple((int(first), int(last) + 1) for first, last in zip(firsts, lasts, strict=True))


def file_places(side: Side, lines: np.ndarray) -> np.ndarray:
    """Places in file order, counted among all lines of a side, of some of them."""
    return np.asarray(side.ranks(0, side.size)[lines])


class LeftOutSource:
    """Reads the rows or columns that are kept, as if the others were not there.

    Parameters
    ----------
    inner : Source
    spec : MatrixSpec
        Of the inner source, with what is known of missing entries.
    axis : int
        Stored axis along which lines are left out.
    kept : ndarray of int
        The lines that are kept, ascending.
    """

    def __init__(self, inner: Source, spec: MatrixSpec, axis: int, kept: np.ndarray) -> None:
        self.inner, self.axis, self.kept = inner, axis, kept
        shape, chunks = list(spec.shape), list(spec.chunks)
        shape[axis] = len(kept)
        # Where lines are missing, a chunk holds fewer; one at the edge of two panels is decoded for both.
        chunks[axis] = min(chunks[axis], shape[axis])
        names, edges, unfolding = [spec.row_names, spec.column_names], list(spec.edges), spec.unfolding
        places = kept
        if unfolding is not None:
            # Names stand in the order of the file.
            places = np.sort(file_places(unfolding.side(axis), kept))
            unfolding = unfolding.only(axis, kept)
            if chunks[axis] > 1 and unfolding.side(axis).tiles > 1:
                edges[axis] = tuple(unfolding.side(axis).edges.tolist())
                chunks[axis] = unfolding.side(axis).unit
        names[axis] = take_names(names[axis], places)
        self.spec = replace(
            spec, row_names=names[0], column_names=names[1], shape=(shape[0], shape[1]), chunks=(chunks[0], chunks[1]),
            edges=(edges[0], edges[1]), unfolding=unfolding,
            decode_bytes=spec.decode_bytes + tile_bytes(inner.spec), held_bytes=spec.held_bytes + kept.nbytes,
        )  # fmt: skip

    def __repr__(self) -> str:
        return f"LeftOutSource({self.inner!r}, {('rows', 'columns')[self.axis]})"

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Read the rectangle, counted in lines that are kept, tile by tile; see `Source.read`."""
        require_rectangle(self.spec, rows, columns, out)
        if out.size == 0:
            return
        start = (rows, columns)[self.axis][0]
        for tile in tiles(self.inner.spec, *self._around(rows, columns)):
            along, across = tile[self.axis], tile[1 - self.axis]
            first, stop = np.searchsorted(self.kept, along)
            first, stop = max(int(first), start), min(int(stop), (rows, columns)[self.axis][1])
            if first >= stop:
                continue
            values = np.empty([span[1] - span[0] for span in tile], self.spec.dtype)
            self.inner.read(tile[0], tile[1], values)
            here = slice(first - start, stop - start)
            beside = slice(*(edge - (rows, columns)[1 - self.axis][0] for edge in across))
            picked = np.take(values, self.kept[first:stop] - along[0], axis=self.axis)
            out[(here, beside) if self.axis == 0 else (beside, here)] = picked

    def _around(self, rows: Span, columns: Span) -> tuple[Span, Span]:
        """The rectangle of the inner source that holds a rectangle."""
        first, stop = (rows, columns)[self.axis]
        along = int(self.kept[first]), int(self.kept[stop - 1]) + 1
        return (along, columns) if self.axis == 0 else (rows, along)

    def announce(self, rows: Span, columns: Span) -> None:
        """Have the system fetch a rectangle that will be read soon, where the inner source can."""
        announce: Any = getattr(self.inner, "announce", None)
        if announce is not None and rows[0] < rows[1] and columns[0] < columns[1]:
            announce(*self._around(rows, columns))

    def close(self) -> None:
        """Release the file."""
        self.inner.close()

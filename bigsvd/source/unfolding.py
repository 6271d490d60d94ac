"""Rows and columns as stand-ins for several axes of an array, run through tile by tile so that chunks stay whole.

One side of the matrix, its rows or its columns, stands for a few axes of the array. Along each of them the array is
cut, into chunks where it is stored in chunks. A *tile* is one cut of every axis; the side runs through all entries of
the first tile, then of the second, and so on (*tile order*). A chunk is then a rectangle of the matrix, of whatever
shape it is. *File order* is that of the array itself, its last axis running fastest. Pure arithmetic: nothing is read.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from bigsvd.units import show_count

Span = tuple[int, int]
Box = tuple[Span, ...]


@dataclass(frozen=True, eq=False)
class Side:
    """Rows or columns of an unfolded array.

    Attributes
    ----------
    cuts : tuple of ndarray
        For every axis that the side stands for, where its pieces begin, from 0, and the end.
    chosen : ndarray of bool or None
        Shape of these axes: entries that are part of the matrix; None for all. Tiles without any are left out.
    edges : ndarray of int64, shape (tiles + 1,)
        Where the tiles begin along the side, and the end.

    Examples
    --------
    >>> side = Side((np.array([0, 2, 3]), np.array([0, 2, 4])))
    >>> side.edges
    array([ 0,  4,  8, 10, 12])
    >>> side.file_order(0, 8)
    array([0, 1, 4, 5, 2, 3, 6, 7])
    """

    cuts: tuple[np.ndarray, ...]
    chosen: np.ndarray | None = None
    edges: np.ndarray = field(init=False)
    _tiles: np.ndarray | None = field(init=False)

    def __post_init__(self) -> None:
        if self.chosen is None:
            counts = np.ones((), np.int64)
            for cuts in self.cuts:
                counts = np.multiply.outer(counts, np.diff(cuts))
        else:
            counts = self.chosen
            for axis, cuts in enumerate(self.cuts):
                counts = np.add.reduceat(counts, cuts[:-1], axis=axis, dtype=np.int64)
        flat = counts.reshape(-1)
        tiles = None if flat.all() else np.flatnonzero(flat)
        object.__setattr__(self, "_tiles", tiles)
        edges = np.concatenate(([0], np.cumsum(flat if tiles is None else flat[tiles])))
        object.__setattr__(self, "edges", edges.astype(np.int64))

    def __reduce__(self) -> tuple[Any, ...]:
        return Side, (self.cuts, self.chosen)

    @property
    def lengths(self) -> tuple[int, ...]:
        """Entries along every axis."""
        return tuple(int(cuts[-1]) for cuts in self.cuts)

    @property
    def size(self) -> int:
        """Entries along the side."""
        return int(self.edges[-1])

    @property
    def tiles(self) -> int:
        """Number of tiles."""
        return len(self.edges) - 1

    @property
    def largest(self) -> tuple[int, ...]:
        """Longest piece of every axis."""
        return tuple(int(np.diff(cuts).max()) for cuts in self.cuts)

    @property
    def unit(self) -> int:
        """Entries of the largest tile."""
        return int(np.diff(self.edges).max())

    @property
    def even(self) -> bool:
        """Whether all tiles but the last have as many entries, and the last no more."""
        sizes = np.diff(self.edges)
        return bool((sizes[:-1] == sizes[0]).all() and sizes[-1] <= sizes[0])

    @property
    def in_file_order(self) -> bool:
        """Whether tile order and file order are the same."""
        single = True
        for cuts in self.cuts:
            if len(cuts) > 2 and not single:
                return False
            single &= bool((np.diff(cuts) == 1).all())
        return True

    def kept(self, values: np.ndarray) -> np.ndarray:
        """Of values for every cut of every axis, those of the tiles."""
        flat = values.reshape(-1)
        return flat if self._tiles is None else flat[self._tiles]

    def spans(self, tile: int) -> Box:
        """Where a tile lies along every axis."""
        number = tile if self._tiles is None else int(self._tiles[tile])
        place = np.unravel_index(number, [len(cuts) - 1 for cuts in self.cuts])
        return tuple((int(cuts[at]), int(cuts[at + 1])) for cuts, at in zip(self.cuts, place, strict=True))

    def touched(self, start: int, stop: int) -> Iterator[tuple[int, int, int]]:
        """Tiles that a range of the side touches, and from where to where within each."""
        if start >= stop:
            return
        first = int(np.searchsorted(self.edges, start, "right")) - 1
        last = int(np.searchsorted(self.edges, stop, "left"))
        for tile in range(first, last):
            begin, end = int(self.edges[tile]), int(self.edges[tile + 1])
            yield tile, max(start, begin) - begin, min(stop, end) - begin

    def part(self, tile: int, start: int, stop: int) -> tuple[Box, slice | np.ndarray | None]:
        """The smallest box that holds entries start … stop of a tile.

        Returns
        -------
        box : tuple of (int, int)
            A span for every axis.
        pick : slice, ndarray of int or None
            Which entries of the box, its last axis running fastest, these are; None for all of them.
        """
        spans = self.spans(tile)
        sides = [end - begin for begin, end in spans]
        if self.chosen is None:
            first, last, wanted = start, stop - 1, None
        else:
            wanted = np.flatnonzero(self.chosen[tuple(slice(*span) for span in spans)])[start:stop]
            first, last = int(wanted[0]), int(wanted[-1])
        low, high = np.unravel_index(first, sides), np.unravel_index(last, sides)
        # What lies between two places varies in the first axis where they differ, and in all behind it.
        differs = next((axis for axis, (a, b) in enumerate(zip(low, high, strict=True)) if a != b), len(sides) - 1)
        box = tuple(
            (begin + int(a), begin + int(b) + 1) if axis <= differs else (begin, end)
            for axis, ((begin, end), a, b) in enumerate(zip(spans, low, high, strict=True))
        )
        before = first - first % math.prod(sides[differs + 1 :])
        size = math.prod(end - begin for begin, end in box)
        if wanted is None:
            return box, None if stop - start == size else slice(start - before, stop - before)
        return box, None if len(wanted) == size else wanted - before

    def file_order(self, start: int, stop: int) -> np.ndarray:
        """Places in the array, in file order, of entries start … stop; int64, over all axes of the side."""
        if self.in_file_order and self.chosen is None:
            return np.arange(start, stop)
        found = []
        for tile, begin, end in self.touched(start, stop):
            box, pick = self.part(tile, begin, end)
            flat = np.zeros((), np.int64)
            for (low, high), length in zip(box, self.lengths, strict=True):
                flat = np.add.outer(flat * length, np.arange(low, high))
            found.append(flat.reshape(-1) if pick is None else flat.reshape(-1)[pick])
        return np.concatenate(found) if found else np.zeros(0, np.int64)

    def ranks(self, start: int, stop: int) -> np.ndarray:
        """Places of entries start … stop in file order, counted among those of the side; int64."""
        places = self.file_order(start, stop)
        if self.chosen is None:
            return places
        return np.asarray((np.cumsum(self.chosen.reshape(-1)) - 1)[places])

    def only(self, kept: np.ndarray) -> Side:
        """The same side with some of its entries.

        Parameters
        ----------
        kept : ndarray of int
            Their numbers along the side, ascending; in the new side they follow each other as here.

        Examples
        --------
        >>> side = Side((np.array([0, 2, 3]), np.array([0, 2, 4]))).only(np.array([1, 4, 9]))
        >>> side.edges, side.file_order(0, 3)
        (array([0, 1, 2, 3]), array([1, 2, 9]))
        """
        chosen = np.zeros(math.prod(self.lengths), np.bool_)
        chosen[self.file_order(0, self.size)[kept]] = True
        return Side(self.cuts, chosen.reshape(self.lengths))


@dataclass(frozen=True, eq=False)
class Unfolding:
    """How the rows and columns of a matrix stand for the axes of an array.

    Attributes
    ----------
    names : tuple of str
        What every axis of the array is called.
    row_axes, column_axes : tuple of int
        Axes that each side stands for, the last running fastest.
    rows, columns : Side
    samples_are_rows : bool
    starts, steps : tuple of int
        Which part of the array is taken, with the lengths of the sides: first place and step along every axis.
    coordinates : tuple of (ndarray or None)
        Labels along every axis that are numbers, as the file has them, of the part that is taken.
    """

    names: tuple[str, ...]
    row_axes: tuple[int, ...]
    column_axes: tuple[int, ...]
    rows: Side
    columns: Side
    samples_are_rows: bool
    starts: tuple[int, ...]
    steps: tuple[int, ...]
    coordinates: tuple[np.ndarray | None, ...] = ()

    @property
    def samples(self) -> Side:
        """The side that holds the samples."""
        return self.rows if self.samples_are_rows else self.columns

    @property
    def features(self) -> Side:
        """The side that holds the features."""
        return self.columns if self.samples_are_rows else self.rows

    @property
    def sample_axes(self) -> tuple[int, ...]:
        """Axes that the samples stand for."""
        return self.row_axes if self.samples_are_rows else self.column_axes

    @property
    def feature_axes(self) -> tuple[int, ...]:
        """Axes that the features stand for."""
        return self.column_axes if self.samples_are_rows else self.row_axes

    @property
    def lengths(self) -> tuple[int, ...]:
        """Entries taken along every axis of the array."""
        found = dict(zip(self.row_axes, self.rows.lengths, strict=True))
        found |= dict(zip(self.column_axes, self.columns.lengths, strict=True))
        return tuple(found[axis] for axis in range(len(self.names)))

    def side(self, axis: int) -> Side:
        """Rows (0) or columns (1)."""
        return (self.rows, self.columns)[axis]

    def only(self, axis: int, kept: np.ndarray) -> Unfolding:
        """The same with some of its rows (axis 0) or columns (1); see `Side.only`."""
        side = self.side(axis).only(kept)
        return replace(self, rows=side) if axis == 0 else replace(self, columns=side)

    def place(self, row: int, column: int) -> str:
        """Name an entry of the matrix by where it lies in the array, counting from 0."""
        at = self._at(0, row) | self._at(1, column)
        return ", ".join(f"{self.names[axis]} {show_count(at[axis])}" for axis in sorted(at))

    def line(self, axis: int, number: int) -> str:
        """Name a row (axis 0) or a column (1) by where it lies in the array, counting from 0."""
        return ", ".join(f"{self.names[one]} {show_count(at)}" for one, at in sorted(self._at(axis, number).items()))

    def _at(self, axis: int, number: int) -> dict[int, int]:
        """Places along the axes that a row or a column stands for."""
        axes, side = (self.row_axes, self.column_axes)[axis], self.side(axis)
        flat = int(side.file_order(number, number + 1)[0])
        positions = np.unravel_index(flat, side.lengths)
        return {
            one: self.starts[one] + int(position) * self.steps[one]
            for one, position in zip(axes, positions, strict=True)
        }

    def facts(self) -> dict[str, Any]:
        """Which axes became what, and which part of them, for records."""
        return {
            "words": self.words(),
            "sample_axes": [self.names[axis] for axis in self.sample_axes],
            "feature_axes": [self.names[axis] for axis in self.feature_axes],
            "axes": [
                {"name": name, "start": start, "step": step, "taken": length}
                for name, start, step, length in zip(self.names, self.starts, self.steps, self.lengths, strict=True)
            ],
            "masked": self.features.chosen is not None,
            "samples_left_out": 0 if self.samples.chosen is None else int((~self.samples.chosen).sum()),
        }

    def words(self) -> str:
        """Which axes became samples, and which features.

        For example ``20,000 samples (axis time) × 262,144 features (y 512 × x 512)``.
        """
        samples = self._words(self.samples, self.sample_axes, alone="axis ")
        features = self._words(self.features, self.feature_axes)
        count = show_count(self.features.size)
        if self.features.chosen is not None:
            count += f" of {show_count(self.features.chosen.size)}"
        rows = show_count(self.samples.size)
        if self.samples.chosen is not None:
            rows += f" of {show_count(self.samples.chosen.size)}"
        return f"{rows} samples ({samples}) × {count} features ({features})"

    def tile_words(self, axis: int) -> str:
        """In what the array is read along rows (0) or columns (1): ``in tiles of 32 × 32``; empty for single lines."""
        pieces = self.side(axis).largest
        if len(self.side(axis).edges) == 2 or math.prod(pieces) == 1:
            return ""
        return f"in {'tiles' if len(pieces) > 1 else 'pieces'} of {' × '.join(map(show_count, pieces))}"

    def _words(self, side: Side, axes: tuple[int, ...], alone: str = "") -> str:
        if len(axes) == 1:
            name = self.names[axes[0]]
            return name if name.startswith("axis ") else f"{alone or 'axis '}{name}"
        return " × ".join(
            f"{self.names[axis]} {show_count(length)}" for axis, length in zip(axes, side.lengths, strict=True)
        )

"""From the order in which a matrix is swept to the order of the file, and back, for the entries of one side."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np

from bigsvd.source import MatrixSpec, Side
from bigsvd.sweep import Scratch

# Lines written or read at a time.
LINES = 8192


class FileOrder:
    """Where the lines of one axis of the swept matrix stand in the order of the file.

    Parameters
    ----------
    spec : MatrixSpec
    axis : int
        Rows (0) or columns (1).

    Notes
    -----
    Memory: 8 bytes for each entry of the axes that the side stands for where there is a mask, and while whole vectors
    are put into order.
    """

    def __init__(self, spec: MatrixSpec, axis: int) -> None:
        self.side: Side | None = None if spec.unfolding is None else spec.unfolding.side(axis)
        self.size = spec.shape[axis]
        self.same = self.side is None or self.side.in_file_order
        self._before: np.ndarray | None = None

    def ranks(self, start: int, stop: int) -> np.ndarray:
        """Places in file order of lines start … stop, counted among those that are taken; shape (lines,)."""
        if self.same or self.side is None:
            return np.arange(start, stop)
        if self.side.chosen is None:
            return self.side.ranks(start, stop)
        places = self.side.file_order(start, stop)
        if self._before is None:
            self._before = np.cumsum(self.side.chosen.reshape(-1)) - 1
        return np.asarray(self._before[places])

    def restore(self, values: np.ndarray) -> np.ndarray:
        """Values for every line, in file order; shape (lines,)."""
        if self.same:
            return values
        restored = np.empty_like(values)
        restored[self.ranks(0, self.size)] = values
        return restored

    def swept(self, values: np.ndarray) -> np.ndarray:
        """Values in file order, brought into the order in which the matrix is swept; shape (lines, …)."""
        return values if self.same else values[self.ranks(0, self.size)]

    def blocks(self, vectors: np.ndarray) -> Iterator[tuple[int, np.ndarray]]:
        """Yield (first line, lines) of vectors in memory, in file order; shape (lines, k)."""
        if self.same:
            yield 0, vectors
            return
        lines = np.empty(self.size, np.int64)
        lines[self.ranks(0, self.size)] = np.arange(self.size)
        for start in range(0, self.size, LINES):
            yield start, vectors[lines[start : start + LINES]]


def order_bytes(spec: MatrixSpec) -> int:
    """What putting the vectors of a matrix into file order holds, at most."""
    if spec.unfolding is None:
        return 0
    sides = [spec.unfolding.side(axis) for axis in (0, 1)]
    return max(16 * max(side.size, 0 if side.chosen is None else side.chosen.size) for side in sides)


class Sorter:
    """Takes lines in the order in which the matrix is swept to a file, and gives them in file order.

    Memory holds a block of lines, however long the side is.

    Parameters
    ----------
    order : FileOrder
    folder : Path
        For the file.
    columns : int
    dtype : numpy.dtype
        float64 or complex128.
    """

    def __init__(self, order: FileOrder, folder: Path, columns: int, dtype: np.dtype) -> None:
        self._order = order
        self._scratch = Scratch(folder, order.size, dtype)
        self._block = self._scratch.add_block(columns)

    def put(self, start: int, lines: np.ndarray) -> None:
        """Take lines from `start` on, as they are swept."""
        ranks = self._order.ranks(start, start + len(lines))
        ascending = np.argsort(ranks)
        ranks, lines = ranks[ascending], lines[ascending]
        ends = np.flatnonzero(np.diff(ranks) != 1) + 1
        for first, last in zip((0, *ends), (*ends, len(ranks)), strict=True):
            self._scratch.write(self._block, int(ranks[first]), lines[first:last])

    def blocks(self) -> Iterator[tuple[int, np.ndarray]]:
        """Yield (first line, lines) in file order, once all were taken."""
        for start in range(0, self._order.size, LINES):
            yield start, self._scratch.read(start, min(start + LINES, self._order.size))

    def close(self) -> None:
        """Remove the file."""
        self._scratch.close()

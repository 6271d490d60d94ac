"""Lines on their way into a triangle: gathered beside earlier columns and a column of ones, then folded."""

from __future__ import annotations

import numpy as np

from bigsvd.plan import fold_lines
from bigsvd.sweep.events import Stopwatch
from bigsvd.sweep.folding import fold, fold_upon
from bigsvd.sweep.scratch import Scratch


class Gatherer:
    """Gathers lines and keeps the triangular factor of all that were gathered.

    Parameters
    ----------
    columns : int
        Columns of the lines that are handed in.
    dtype : numpy.dtype
        Double.
    watch : Stopwatch
    ones : bool
        Whether a column of ones comes first.
    scratch : Scratch or None
        Where the earlier columns of the same lines lie, those that its map combines; None for none.
    blocks : int
        How many blocks of scratch they lie in.
    by_products : bool
        Whether products may fold; otherwise reflections always do.
    """

    def __init__(
        self,
        columns: int,
        dtype: np.dtype,
        watch: Stopwatch,
        *,
        ones: bool,
        scratch: Scratch | None = None,
        blocks: int = 0,
        by_products: bool = False,
    ) -> None:
        self._scratch = scratch
        self._blocks = blocks
        self._map = scratch.map if scratch is not None else np.zeros((0, 0), dtype)
        self._ones = ones
        self._by_products = by_products
        self._watch = watch
        self.columns = int(ones) + self._map.shape[1] + columns
        self._rows = np.empty((self.columns + fold_lines(self.columns), self.columns), dtype)
        self._filled = 0
        self._triangle: np.ndarray | None = None

    def add(self, start: int, values: np.ndarray) -> None:
        """Gather lines start … of the matrix, shape (lines, columns)."""
        done = 0
        while done < len(values):
            count = min(len(self._rows) - self._filled, len(values) - done)
            rows = self._rows[self._filled : self._filled + count]
            column = int(self._ones)
            rows[:, :column] = 1.0
            earlier = self._map.shape[1]
            if earlier and self._scratch is not None:
                stored = self._scratch.read(start + done, start + done + count, self._blocks)
                self._watch.start("fold")
                np.matmul(stored, self._map, out=rows[:, column : column + earlier])
                column += earlier
            rows[:, column:] = values[done : done + count]
            self._filled += count
            done += count
            if self._filled == len(self._rows):
                self._fold()

    def triangle(self) -> np.ndarray:
        """Triangular factor of everything gathered, shape (columns, columns); zeros for nothing."""
        if self._filled > (0 if self._triangle is None else self.columns):
            self._fold()
            self._watch.stop()
        if not self._filled:
            return np.zeros((self.columns, self.columns), self._rows.dtype)
        return self._rows[: self.columns].copy()

    def _fold(self) -> None:
        """Replace the gathered lines by their triangular factor."""
        self._watch.start("fold")
        rows = self._rows[: self._filled]
        if self._triangle is None or not self._by_products:
            self._triangle = fold([rows])
        else:
            self._triangle = fold_upon(self._triangle, rows[self.columns :])
        self._rows[: self.columns] = self._triangle
        self._filled = self.columns
        self._watch.start("scratch")

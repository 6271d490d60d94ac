"""Missing entries counted by row and column, and features summed over the entries that are there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

Span = tuple[int, int]


@dataclass(frozen=True, eq=False)
class TileCount:
    """What one tile of the matrix holds.

    Attributes
    ----------
    rows, columns : ndarray
        Missing entries per row and per column of the tile.
    sums : ndarray
        Sum per feature of the entries that are there, in double.
    infinite : int
    first_infinite : (int, int) or None
        Row and column in the tile.
    """

    rows: np.ndarray
    columns: np.ndarray
    sums: np.ndarray
    infinite: int = 0
    first_infinite: tuple[int, int] | None = None


def count_tile(values: np.ndarray, feature_axis: int) -> TileCount:
    """Count what is missing in a tile.

    Parameters
    ----------
    values : ndarray, shape (rows, columns)
        Missing entries are NaN; overwritten.
    feature_axis : int
        Stored axis that holds the features.

    Returns
    -------
    TileCount
    """
    wide = np.dtype(np.complex128 if values.dtype.kind == "c" else np.float64)
    infinite = np.isinf(values)
    count, first = int(np.count_nonzero(infinite)), None
    if count:
        row, column = np.argwhere(infinite)[0]
        first = int(row), int(column)
    missing = np.isnan(values, out=infinite)
    rows, columns = np.count_nonzero(missing, axis=1), np.count_nonzero(missing, axis=0)
    values[missing] = 0
    with np.errstate(all="ignore"):
        sums = np.add.reduce(values, axis=1 - feature_axis, dtype=wide)
    return TileCount(rows, columns, sums, count, first)


class Census:
    """The counts of all tiles, added up in the order in which they are given.

    Parameters
    ----------
    shape : (int, int)
        Of the matrix.
    feature_axis : int
        Stored axis that holds the features.
    dtype : numpy.dtype
        Of its entries.

    Attributes
    ----------
    rows, columns : ndarray, shape (m,) and (n,)
        Missing entries per row and per column.
    infinite : int
    first_infinite : (int, int) or None
        The first by row, then column.
    """

    def __init__(self, shape: tuple[int, int], feature_axis: int, dtype: np.dtype) -> None:
        self.shape, self.feature_axis = shape, feature_axis
        self.rows, self.columns = np.zeros(shape[0], np.int64), np.zeros(shape[1], np.int64)
        self.infinite = 0
        self.first_infinite: tuple[int, int] | None = None
        self._sums = np.zeros(shape[feature_axis], np.complex128 if dtype.kind == "c" else np.float64)

    @staticmethod
    def bytes(shape: tuple[int, int], dtype: np.dtype) -> int:
        """What it holds."""
        return 8 * sum(shape) + (16 if dtype.kind == "c" else 8) * max(shape)

    def add(self, rows: Span, columns: Span, tile: TileCount) -> None:
        """Add the counts of a tile."""
        self.rows[rows[0] : rows[1]] += tile.rows
        self.columns[columns[0] : columns[1]] += tile.columns
        first, stop = (rows, columns)[self.feature_axis]
        self._sums[first:stop] += tile.sums
        self.infinite += tile.infinite
        if tile.first_infinite is not None:
            place = rows[0] + tile.first_infinite[0], columns[0] + tile.first_infinite[1]
            self.first_infinite = min(self.first_infinite or place, place)

    @property
    def entries(self) -> int:
        """Missing entries in all."""
        return int(self.rows.sum())

    @property
    def present(self) -> np.ndarray:
        """Entries that are there, per feature."""
        missing = (self.rows, self.columns)[self.feature_axis]
        present: np.ndarray = self.shape[1 - self.feature_axis] - missing
        return present

    def means(self) -> np.ndarray:
        """Mean of every feature over the entries that are there, in double; NaN where there are none."""
        with np.errstate(all="ignore"):
            means: np.ndarray = self._sums / np.where(self.present > 0, self.present, np.nan)
        return means

"""What is done to the panels of a segment by one worker, their zeros left out; means are subtracted from products."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from bigsvd.plan import MEASURED_COLUMNS
from bigsvd.prepare import LineStatistics, Preparation, absent_per_column, add_up, pieces, sparse_statistics
from bigsvd.sweep.segment import Segment

if TYPE_CHECKING:
    from scipy.sparse import csr_array

# Rows of AᴴY that are prepared at a time.
_ROWS = 2048


class SparseSegment(Segment):
    """The sums of one segment, whose panels come without their zeros.

    Statistics and energy are sums over the stored entries, prepared, and as many times what a zero becomes as there
    are zeros: all terms are of the size of the prepared entries, and nothing cancels. Products are those of the stored
    entries, less what their mean contributes (`bigsvd.prepare.implicit`); docs/method.md bounds the rounding.
    """

    def _make_buffers(self) -> None:
        """Sums of AᴴY lie so that sparse products are added as they come."""
        task = self.task
        assert task.kind == "basis"
        self.unit_lines = task.reader.geometry.unit_lines
        if task.block is not None:
            self.sums.products = np.zeros((self.across, task.block.shape[1]), task.wide).T

    def _stored(self, panel: Any) -> tuple[np.ndarray, ...]:
        """Values, places and pointers."""
        return panel.data, panel.indices, panel.indptr

    def _lines(self, panel: Any) -> Any:
        """A sparse panel comes lines first."""
        return panel

    def _some(self, lines: Any, first: int, stop: int) -> Any:
        """Lines first … stop of a panel; only their pointers are copied."""
        from scipy.sparse import csr_array

        pointers = lines.indptr[first : stop + 1]
        stored = slice(int(pointers[0]), int(pointers[-1]))
        shape = (len(pointers) - 1, self.across)
        return csr_array((lines.data[stored], lines.indices[stored], pointers - pointers[0]), shape=shape)

    def _take_unit(self, unit: Any, start: int, *, measure: bool) -> None:
        """Take sums of a few lines, multiply them and add up."""
        task = self.task
        self.watch.start("convert")
        statistics = self._statistics(unit)
        energy, cancelled = self._add_sums(unit, statistics), self._cancelled(unit, statistics)
        if not self._add_energy(energy, unit, start, measure=measure, cancelled=cancelled):
            return
        if task.implicit is None:
            return
        matrix = _with_values(unit, unit.data.astype(task.dtype, copy=False))
        turned = matrix.tocsc().T
        self.watch.start("products")
        tall = self._multiply(matrix, task.implicit.scaled, task.implicit.constant, statistics)
        left = self._left(tall, statistics).astype(task.dtype)
        fresh = turned @ left
        weight = self._weight(left, statistics)
        assert self.sums.products is not None
        for first in range(0, self.across, _ROWS):
            rows = slice(first, first + _ROWS)
            self.sums.products.T[rows] += self._prepared(fresh[rows], rows, weight)
        if measure:
            self._measure_unit(unit, statistics, tall, fresh, weight)
        self._keep_tall(tall, start)

    # ------------------------------------------------------------------------------------------------------ products
    def _multiply(
        self, matrix: csr_array, columns: np.ndarray, constant: np.ndarray | None, statistics: LineStatistics | None
    ) -> np.ndarray:
        """Y = AB of some lines, in double; `columns` and `constant` as in `ImplicitBlock`."""
        tall = (matrix @ columns).astype(self.task.wide, copy=False)
        if statistics is None:
            return tall if constant is None else np.subtract(tall, constant, out=tall)
        if constant is not None:
            tall -= np.multiply.outer(statistics.mean, constant)
        tall *= self._line_scale(statistics)[:, None]
        return tall

    def _left(self, tall: np.ndarray, statistics: LineStatistics | None) -> np.ndarray:
        """What the stored entries are multiplied with from the left, conjugate: Y, or DY where features are lines."""
        if statistics is not None:
            tall = tall * self._line_scale(statistics)[:, None]
        return tall.conj() if tall.dtype.kind == "c" else tall

    def _weight(self, left: np.ndarray, statistics: LineStatistics | None) -> np.ndarray:
        """How often the mean of every feature is in the products, Yᴴ1; (DY)ᴴμ where features are lines; (width,)."""
        if statistics is None:
            return left.sum(axis=0, dtype=self.task.wide)
        return statistics.mean @ left.astype(self.task.wide, copy=False)

    def _prepared(self, fresh: np.ndarray, rows: slice, weight: np.ndarray) -> np.ndarray:
        """Some rows of AᵀȲ in double, from those of the stored entries."""
        preparation = self.task.preparation
        part = fresh.astype(self.task.wide)
        if not preparation.across_features:
            return part - weight if preparation.center else part
        if preparation.shift is not None:
            part -= np.multiply.outer(preparation.shift[rows], weight)
        if preparation.inverse_scale is not None:
            part *= preparation.inverse_scale[rows, None]
        return part

    def _line_scale(self, statistics: LineStatistics) -> np.ndarray:
        """Factors of lines that are features; zero where a constant line is centred, which is then zero exactly."""
        preparation = self.task.preparation
        scale = statistics.inverse_scale if preparation.scale else np.ones(len(statistics.mean))
        return np.where(statistics.constant, 0.0, scale) if preparation.center else scale

    def _measure_unit(
        self, unit: Any, statistics: LineStatistics | None, tall: np.ndarray, fresh: np.ndarray, weight: np.ndarray
    ) -> None:
        """Recompute a unit in double, a few columns at a time, and add up the differences."""
        task, rounding = self.task, self.sums.rounding
        assert task.block is not None
        assert rounding is not None
        rounding[0] += 1
        matrix = _with_values(unit, unit.data.astype(task.wide, copy=False))
        turned = matrix.tocsc().T
        inverse = task.preparation.inverse_scale if task.preparation.across_features else None
        whole = slice(0, self.across)
        for first in range(0, task.block.shape[1], MEASURED_COLUMNS):
            some = slice(first, first + MEASURED_COLUMNS)
            columns = task.block[:, some].astype(task.wide)
            if inverse is not None:
                columns *= inverse[:, None]
            exact = self._multiply(matrix, columns, self._constant(columns), statistics)
            left = self._left(exact, statistics)
            product = self._prepared(fresh[:, some], whole, weight[some])
            product -= self._prepared(turned @ left, whole, self._weight(left, statistics))
            rounding[1, some] += (np.abs(tall[:, some] - exact) ** 2).sum(axis=0)
            rounding[2, some] += (np.abs(product) ** 2).sum(axis=0)

    def _constant(self, columns: np.ndarray) -> np.ndarray | None:
        """`ImplicitBlock.constant` of columns in double."""
        preparation = self.task.preparation
        if preparation.across_features:
            return None if preparation.shift is None else preparation.shift @ columns
        return columns.sum(axis=0) if preparation.center else None

    # ---------------------------------------------------------------------------------------------------------- sums
    def _of_lines(self, unit: Any) -> LineStatistics:
        """Statistics of every line."""
        return sparse_statistics(unit, scale=self.task.preparation.scale)

    def _cancelled(self, unit: csr_array, statistics: LineStatistics | None) -> float:
        """Energy of what is subtracted from the products of some lines."""
        preparation = self.task.preparation
        if not preparation.center:
            return 0.0
        if statistics is not None:
            return self.across * float(_squares(statistics.mean * self._line_scale(statistics)).sum())
        if preparation.shift is None:
            return 0.0
        zero = _prepare_columns(np.zeros(self.across, self.task.wide), preparation, slice(None))
        return unit.shape[0] * float(_squares(zero).sum())

    def _add_sums(self, unit: csr_array, statistics: LineStatistics | None) -> float:
        """Add sums by column; return the energy."""
        task = self.task
        if statistics is not None:
            return self._line_energy(unit, statistics) if task.add_energy else 0.0
        if task.learn and task.preparation.about is not None:
            # Features that are scaled but not centred: squares about their mean.
            self._column_sums(unit, self.learning)
            return self._column_sums(unit, task.preparation, energy_alone=True)
        return self._column_sums(unit, task.preparation)

    def _column_sums(self, unit: csr_array, preparation: Preparation, *, energy_alone: bool = False) -> float:
        """Add sums of lines and squares to those of the segment, in double; return the energy."""
        sums, across = self.sums, self.across
        line_sum = np.zeros(across, self.task.wide) if sums.line_sum is not None and not energy_alone else None
        square_sum = np.zeros(across) if sums.square_sum is not None and not energy_alone else None
        energy = 0.0
        if line_sum is None and square_sum is None and not self.task.add_energy:
            return energy
        for first, stop in pieces(unit.indptr):
            stored = slice(int(unit.indptr[first]), int(unit.indptr[stop]))
            places = unit.indices[stored]
            entries = _prepare_columns(unit.data[stored].astype(self.task.wide), preparation, places)
            squares = _squares(entries)
            energy += float(np.add.reduce(squares))
            if line_sum is not None:
                line_sum += add_up(places, entries, across)
            if square_sum is not None:
                square_sum += add_up(places, squares, across)
        if preparation.shift is not None:
            absent = absent_per_column(unit)
            zero = _prepare_columns(np.zeros(across, self.task.wide), preparation, slice(None))
            energy += float(np.add.reduce(absent * _squares(zero)))
            if line_sum is not None:
                line_sum += absent * zero
            if square_sum is not None:
                square_sum += absent * _squares(zero)
        for total, more in ((sums.line_sum, line_sum), (sums.square_sum, square_sum)):
            if total is not None and more is not None:
                total += more
        return energy

    def _line_energy(self, unit: csr_array, statistics: LineStatistics) -> float:
        """Energy of lines that are features."""
        scale = self._line_scale(statistics)
        mean = statistics.mean if self.task.preparation.center else np.zeros_like(statistics.mean)
        per_line = np.diff(unit.indptr)
        energy = float(np.add.reduce((self.across - per_line) * _squares(mean * scale)))
        for first, stop in pieces(unit.indptr):
            inside = np.repeat(np.arange(first, stop), per_line[first:stop])
            entries = unit.data[int(unit.indptr[first]) : int(unit.indptr[stop])] - mean[inside]
            entries *= scale[inside]
            energy += float(np.add.reduce(_squares(entries)))
        return energy

    def _extremes(self, lines: Any) -> tuple[np.ndarray, np.ndarray]:
        """Smallest and largest entries per column, zeros among them where a line stores nothing."""
        absent = absent_per_column(lines) > 0
        parts = (lines.data.real, lines.data.imag) if lines.dtype.kind == "c" else (lines.data,)
        found = [_extremes_of(part, lines.indices, absent) for part in parts]
        return np.concatenate([low for low, _ in found]), np.concatenate([high for _, high in found])

    def _values(self, unit: Any) -> np.ndarray:
        """What is stored of a unit."""
        return np.asarray(unit.data)

    def _bad_places(self, unit: Any) -> np.ndarray:
        """Line and place across of every entry that is not finite, shape (entries, 2)."""
        bad = np.flatnonzero(~np.isfinite(unit.data))
        return np.column_stack([np.searchsorted(unit.indptr, bad, side="right") - 1, unit.indices[bad]])

    def finish(self) -> Any:
        """Hand over the sums; finite energies do not tell whether products of a large mean overflowed on the way."""
        if self.sums.products is not None and not np.isfinite(self.sums.products.sum()):
            self.sums.overflow = True
        return super().finish()


def _with_values(lines: csr_array, values: np.ndarray) -> csr_array:
    """The same places with other values; nothing is copied."""
    from scipy.sparse import csr_array

    return csr_array((values, lines.indices, lines.indptr), shape=lines.shape)


def _prepare_columns(entries: np.ndarray, preparation: Preparation, places: np.ndarray | slice) -> np.ndarray:
    """Centre and scale entries of these columns, in place."""
    if preparation.shift is not None:
        entries -= preparation.shift[places]
    if preparation.inverse_scale is not None:
        entries *= preparation.inverse_scale[places]
    return entries


def _squares(entries: np.ndarray) -> np.ndarray:
    """|entries|², in double."""
    return entries.real**2 + entries.imag**2 if entries.dtype.kind == "c" else entries**2


def _extremes_of(values: np.ndarray, places: np.ndarray, absent: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Smallest and largest value at every place, or zero where it is absent and nothing goes beyond."""
    if values.dtype.kind == "f":
        ends = np.inf, -np.inf
    elif values.dtype.kind == "b":
        ends = True, False
    else:
        ends = np.iinfo(values.dtype).max, np.iinfo(values.dtype).min
    low, high = (np.full(len(absent), end, values.dtype) for end in ends)
    np.minimum.at(low, places, values)
    np.maximum.at(high, places, values)
    zero = values.dtype.type(0)
    return np.where(absent, np.minimum(low, zero), low), np.where(absent, np.maximum(high, zero), high)

"""What is done to the panels of a segment by one worker: converted, multiplied, summed and folded, zeros included."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from bigsvd.plan import UNIT_LINES, tile_columns
from bigsvd.prepare import LineStatistics, Preparation, line_statistics, prepare_unit
from bigsvd.sweep.events import Stopwatch
from bigsvd.sweep.folding import add_gram
from bigsvd.sweep.gathering import Gatherer
from bigsvd.sweep.partial import Partial
from bigsvd.sweep.task import SweepTask

# Single-precision sums run over at most this many terms before they are added up in double.
SINGLE_TERMS = 512
EXACT_INTEGERS = 2**53


class Segment:
    """The sums and buffers of one segment, whose panels come with their zeros.

    Parameters
    ----------
    task : SweepTask
    """

    def __init__(self, task: SweepTask) -> None:
        self.task = task
        self.across = task.reader.geometry.across
        self.raw = task.reader.buffer()
        # Deviations learnt in a sweep define the matrix for the rest of the run: in double, about a first mean.
        self.learning = task.preparation.about_mean()
        self.sums = Partial(ledger=[])
        self.watch = Stopwatch()
        if task.line_features:
            self.sums.line_mean, self.sums.line_inverse_scale, self.sums.line_constant = [], [], []
        elif task.add_lines:
            self.sums.line_sum = np.zeros(self.across, task.wide)
        if task.learn:
            self.sums.square_sum = np.zeros(self.across)
        if task.kind == "gram":
            self.sums.gram = np.zeros((self.across, self.across), task.wide, order="F")
        if task.block is not None:
            self.sums.products = np.zeros((task.block.shape[1], self.across), task.wide)
            if task.sampled:
                self.sums.rounding = np.zeros((3, task.block.shape[1]))
                self.sums.unit_energies = np.zeros(4) if task.add_energy else None
        self.gatherer = self._make_gatherer()
        self._make_buffers()

    def _make_buffers(self) -> None:
        """Memory that every unit uses again."""
        task = self.task
        self.unit_lines = UNIT_LINES
        self.tile = tile_columns(self.across)
        self.work = np.empty(UNIT_LINES * self.tile, task.dtype)
        if task.block is not None:
            self.product = np.empty(task.block.shape[1] * self.tile, task.dtype)
            # Double multiplies faster with the long side first (76 against 61 GF a core), single does not (137, 144).
            self.turned = np.ascontiguousarray(task.block.T) if task.dtype == task.wide else None

    def _make_gatherer(self) -> Gatherer | None:
        """What folds the lines, or their products with earlier ones; None where nothing is folded."""
        task = self.task
        if task.kind == "fold":
            # Of the matrix itself the small values are wanted: reflections alone.
            return Gatherer(self.across, task.wide, self.watch, ones=task.ones)
        if task.scratch is None or task.block is None:
            return None
        return Gatherer(
            task.block.shape[1], task.wide, self.watch, ones=task.ones, scratch=task.scratch, blocks=task.target,
            by_products=True,
        )  # fmt: skip

    def take(self, panel: int, *, last: bool) -> None:
        """Read one panel and add it to the sums; `last` where no other follows."""
        task, reader = self.task, self.task.reader
        self.watch.start("read")
        raw = reader.fetch(panel, self.raw)
        if not last:
            reader.announce(panel + 1)
        self.watch.start("convert")
        assert self.sums.ledger is not None
        self.sums.ledger.append(sum(map(_word_sum, self._stored(raw))) % 2**64)
        lines = self._lines(raw)
        start = reader.geometry.edges[panel]
        if task.only_count.is_set():
            self._count_bad(lines, start)
            return
        if task.add_energy and raw.dtype.kind in "iu" and raw.dtype.itemsize == 8:
            values = self._stored(raw)[0]
            self.sums.beyond |= bool(values.max(initial=0) > EXACT_INTEGERS or values.min(initial=0) < -EXACT_INTEGERS)
        if task.learn:
            self._keep_extremes(*self._extremes(lines))
        for offset in range(0, lines.shape[0], self.unit_lines):
            unit = self._some(lines, offset, offset + self.unit_lines)
            self._take_unit(unit, start + offset, measure=offset == 0 and panel in task.sampled)
        self.watch.stop()

    def _stored(self, panel: Any) -> tuple[np.ndarray, ...]:
        """Everything that is stored of a panel: its values, and what places them."""
        return (panel,)

    def _lines(self, panel: Any) -> Any:
        """A panel, lines first."""
        return panel if self.task.reader.geometry.axis == 0 else panel.T

    def _some(self, lines: Any, first: int, stop: int) -> Any:
        """Lines first … stop of a panel, not copied."""
        return lines[first:stop]

    def _take_unit(self, unit: Any, start: int, *, measure: bool) -> None:
        """Convert a few lines, multiply them and add up."""
        task, sums = self.task, self.sums
        self.watch.start("convert")
        statistics = self._statistics(unit)
        energy, tall, tile = 0.0, None, None
        learns_apart = task.learn and (task.dtype != task.wide or task.preparation.about is not None)
        if learns_apart:
            for columns, wide_tile in self._tiles(unit, statistics, task.wide, self.learning):
                self._tile_sums(wide_tile, columns)
        for columns, tile in self._tiles(unit, statistics, task.dtype):
            if not learns_apart:
                self._tile_sums(tile, columns)
            if task.add_energy:
                energy += float(_squares(tile).sum())
            if task.block is not None:
                self.watch.start("products")
                part = self._first_product(tile, columns)
                tall = part if tall is None else np.add(tall, part, out=tall)
                self.watch.start("convert")
        if not self._add_energy(energy, unit, start, measure=measure):
            return
        if task.kind == "fold":
            assert self.gatherer is not None
            self.gatherer.add(start, self._whole(unit, statistics))
        elif task.kind == "gram":
            self.watch.start("products")
            assert sums.gram is not None
            add_gram(sums.gram, self._whole(unit, statistics))
        elif tall is not None:
            self.watch.start("products")
            # A single tile is still there; several are converted anew, for memory holds one.
            self._second_product(unit, statistics, tall, tile if self.across <= self.tile else None)
            if measure:
                self._measure(unit, statistics, tall)
            self._keep_tall(tall, start)

    def _add_energy(self, energy: float, unit: Any, start: int, *, measure: bool, cancelled: float = 0.0) -> bool:
        """Add the energy of a unit; False where it is not finite, or overflows the working precision.

        `cancelled` is what implicit centring subtracts from its products, see `Partial`.
        """
        # Every entry of the products is at most the energy, so this tells overflow before it happens.
        if not energy < np.finfo(self.task.dtype).max:
            self._not_finite(unit, start)
            return False
        sums = self.sums
        sums.energy += energy
        sums.cancelled += cancelled
        sums.lines += unit.shape[0]
        if sums.unit_energies is not None:
            energy += 4 * cancelled
            sums.unit_energies += (1.0, energy**2, energy * measure, energy**2 * measure)
        return True

    def _keep_tall(self, tall: np.ndarray, start: int) -> None:
        """Write lines of Y, and fold them."""
        task = self.task
        if task.scratch is not None:
            self.watch.start("scratch")
            task.scratch.write(task.target, start, tall)
            assert self.gatherer is not None
            self.gatherer.add(start, tall)

    def _statistics(self, unit: Any) -> LineStatistics | None:
        """Statistics of lines that are whole features."""
        if not self.task.line_features:
            return None
        statistics = self._of_lines(unit)
        sums = self.sums
        assert sums.line_mean is not None
        assert sums.line_inverse_scale is not None
        assert sums.line_constant is not None
        sums.line_mean.append(statistics.mean)
        sums.line_inverse_scale.append(statistics.inverse_scale)
        sums.line_constant.append(statistics.constant)
        return statistics

    def _of_lines(self, unit: Any) -> LineStatistics:
        """Statistics of every line."""
        task = self.task
        return line_statistics(unit, scale=task.preparation.scale, rest=task.dtype == task.wide)

    def _tiles(
        self,
        unit: np.ndarray,
        statistics: LineStatistics | None,
        dtype: np.dtype,
        preparation: Preparation | None = None,
    ) -> Iterator[tuple[slice, np.ndarray]]:
        """Yield (columns, converted tile) across a unit, in the working buffer or where it lies already."""
        preparation = preparation or self.task.preparation
        if unit.dtype == dtype and preparation.changes_nothing:
            for first in range(0, self.across, self.tile):
                columns = slice(first, min(first + self.tile, self.across))
                yield columns, unit[:, columns]
            return
        work = self.work if dtype == self.task.dtype else np.empty(UNIT_LINES * self.tile, dtype)
        for first in range(0, self.across, self.tile):
            columns = slice(first, min(first + self.tile, self.across))
            width = columns.stop - first
            flat = work[: len(unit) * width]
            by_lines = self.task.reader.geometry.axis == 0
            tile = flat.reshape(len(unit), width) if by_lines else flat.reshape(width, len(unit)).T
            prepare_unit(unit, preparation, statistics, columns, tile)
            yield columns, tile

    def _whole(self, unit: np.ndarray, statistics: LineStatistics | None) -> np.ndarray:
        """All columns of a unit, converted."""
        if self.across <= self.tile:
            return next(iter(self._tiles(unit, statistics, self.task.dtype)))[1]
        return np.concatenate([tile.copy() for _, tile in self._tiles(unit, statistics, self.task.dtype)], axis=1)

    def _tile_sums(self, tile: np.ndarray, columns: slice) -> None:
        """Add the sum of lines and squares of a tile."""
        sums = self.sums
        if sums.line_sum is not None:
            sums.line_sum[columns] += np.add.reduce(tile, axis=0, dtype=self.task.wide)
        if sums.square_sum is not None:
            sums.square_sum[columns] += _squares(tile)

    def _first_product(self, tile: np.ndarray, columns: slice) -> np.ndarray:
        """Y = A·B of a tile, in double; sums of single precision are added up in double."""
        task = self.task
        assert task.block is not None
        if self.turned is not None:
            return np.matmul(self.turned[:, columns], tile.T).T
        total = np.zeros((len(tile), task.block.shape[1]), task.wide)
        block = task.block[columns]
        for first in range(0, tile.shape[1], SINGLE_TERMS):
            total += tile[:, first : first + SINGLE_TERMS] @ block[first : first + SINGLE_TERMS]
        return total

    def _second_product(
        self, unit: np.ndarray, statistics: LineStatistics | None, tall: np.ndarray, tile: np.ndarray | None
    ) -> None:
        """Z += AᴴY, held as its conjugate transpose."""
        left = np.ascontiguousarray(tall.conj().T, dtype=self.task.dtype)
        if tile is not None:
            self._add_product(left, tile, slice(0, self.across))
            return
        for columns, again in self._tiles(unit, statistics, self.task.dtype):
            self._add_product(left, again, columns)

    def _add_product(self, left: np.ndarray, tile: np.ndarray, columns: slice) -> None:
        """Add Yᴴ times a tile to the sums in double, through a buffer that is used again."""
        assert self.sums.products is not None
        product = self.product[: len(left) * tile.shape[1]].reshape(len(left), tile.shape[1])
        np.matmul(left, tile, out=product)
        np.add(self.sums.products[:, columns], product, out=self.sums.products[:, columns])

    def _measure(self, unit: np.ndarray, statistics: LineStatistics | None, tall: np.ndarray) -> None:
        """Recompute a unit in double and add up the differences."""
        task = self.task
        assert task.block is not None
        assert self.sums.rounding is not None
        self.sums.rounding[0] += 1
        if self.across <= self.tile:
            # One tile: the product that was just added up still lies in its buffer.
            wide_tile = next(iter(self._tiles(unit, statistics, task.wide)))[1]
            exact = wide_tile @ task.block.astype(task.wide)
            self.sums.rounding[1] += _column_squares((tall - exact).T)
            product = self.product[: exact.shape[1] * self.across].reshape(exact.shape[1], self.across)
            self.sums.rounding[2] += _column_squares(product - exact.conj().T @ wide_tile)
            return
        exact = np.zeros(tall.shape, task.wide)
        for columns, tile in self._tiles(unit, statistics, task.wide):
            exact += tile @ task.block[columns].astype(task.wide)
        self.sums.rounding[1] += _column_squares((tall - exact).T)
        single = np.ascontiguousarray(tall.conj().T, dtype=task.dtype)
        narrow = self._tiles(unit, statistics, task.dtype)
        for (_, tile), (_, wide_tile) in zip(narrow, self._tiles(unit, statistics, task.wide), strict=True):
            self.sums.rounding[2] += _column_squares(single @ tile - exact.conj().T @ wide_tile)

    def _extremes(self, lines: Any) -> tuple[np.ndarray, np.ndarray]:
        """Smallest and largest stored entries per column."""
        if lines.dtype.kind == "c":
            lines = np.concatenate([lines.real, lines.imag], axis=1)
        return lines.min(axis=0), lines.max(axis=0)

    def _keep_extremes(self, low: np.ndarray, high: np.ndarray) -> None:
        """Combine them with those of earlier panels."""
        sums = self.sums
        if sums.lowest is None or sums.highest is None:
            sums.lowest, sums.highest = low, high
        else:
            np.minimum(sums.lowest, low, out=sums.lowest)
            np.maximum(sums.highest, high, out=sums.highest)

    def _not_finite(self, unit: Any, start: int) -> None:
        """Tell true NaN and infinity from squares that overflow."""
        if self._count_bad(unit, start):
            self.task.only_count.set()
        else:
            self.sums.overflow = True

    def _count_bad(self, unit: Any, start: int) -> int:
        """Count entries that are not finite and keep the first."""
        if unit.dtype.kind not in "fc":
            return 0
        places = self._bad_places(unit)
        count = len(places)
        if count:
            places[:, 0] += start
            self.sums.count_bad(places, self.across)
            self.sums.infinite += int(np.count_nonzero(np.isinf(self._values(unit))))
            if self.task.reader.geometry.axis == 1:
                places = places[:, ::-1]
            order = np.lexsort((places[:, 1], places[:, 0]))[0]
            place = (int(places[order, 0]), int(places[order, 1]))
            self.sums.first_bad = min(self.sums.first_bad or place, place)
        return count

    def _values(self, unit: Any) -> np.ndarray:
        """What is stored of a unit."""
        return np.asarray(unit)

    def _bad_places(self, unit: Any) -> np.ndarray:
        """Line and place across of every entry that is not finite, shape (entries, 2)."""
        return np.argwhere(~np.isfinite(unit))

    def finish(self) -> Partial:
        """Fold what is left and hand over the sums."""
        if self.gatherer is not None:
            self.sums.triangle = self.gatherer.triangle()
        return self.sums


def _squares(tile: np.ndarray) -> np.ndarray:
    """Sum of |entries|² per column, squared and summed in double whatever the working precision."""
    parts = (tile.real, tile.imag) if tile.dtype.kind == "c" else (tile,)
    sums = [np.einsum("ij,ij->j", part, part, dtype=np.float64, casting="unsafe") for part in parts]
    return np.asarray(sums[0] if len(sums) == 1 else sums[0] + sums[1])


def _column_squares(rows: np.ndarray) -> np.ndarray:
    """Squared norm of every row."""
    return np.einsum("ij,ij->i", rows.real, rows.real) + np.einsum("ij,ij->i", rows.imag, rows.imag)


def _word_sum(raw: np.ndarray) -> int:
    """Sum of the stored 64-bit words modulo 2⁶⁴, whatever their order; the odd bytes at the end count as one word."""
    flat = raw.reshape(-1).view(np.uint8)
    whole = len(flat) // 8 * 8
    total = int(np.add.reduce(flat[:whole].view(np.uint64), dtype=np.uint64))
    return (total + int.from_bytes(flat[whole:].tobytes(), "little")) % 2**64

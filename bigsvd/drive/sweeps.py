"""The sweeps of one run: what is read, prepared, checked, and learnt of means and scales on the way."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from itertools import pairwise
from pathlib import Path

import numpy as np

from bigsvd.certify import SumDepth, gamma
from bigsvd.errors import NonFiniteError, OptionError, SourceChangedError
from bigsvd.journal import Journal
from bigsvd.plan import Plan, fold_lines
from bigsvd.prepare import Preparation
from bigsvd.randomness import draw_without_repeat
from bigsvd.solve import Learnt, Pilot, first_statistics, in_range, learn, take_pilot
from bigsvd.source import Source
from bigsvd.sweep import Control, Engine, PanelReader, Partial, Scratch, SweepTask, worst
from bigsvd.units import show_count

# Panels whose first unit is recomputed in double, to measure rounding in single.
ROUNDING_PANELS = 8
STREAM_ROUNDING = 3
# Ratio of the largest to the smallest change of scale above which a first sweep is made again.
MOST_SCALE_SPREAD = 1e4
# Entries of the fold below this, where the energy is zero, are those of a matrix whose squares vanished.
VANISHING = 1e-150


class OverflowInSingleError(Exception):
    """Squares of finite entries overflow single precision: the sweep must be made again in double."""


@dataclass(eq=False)
class Sweeps:
    """Reads the matrix, as often as it is asked to.

    Attributes
    ----------
    source : Source
    plan : Plan
    control : Control
    scratch_folder : Path
    journal : Journal or None
        Then `scratch_folder` is this run's alone.
    made : int
        Sweeps made so far.
    energy, energy_rounding : float
        ‖A‖²_F of the prepared matrix, and a bound of its rounding.
    cancelled : float
        Bound of what products without zeros have beyond ‖A‖_F in their terms, in the present sweep: 2·‖1μᵀD‖_F.
    learnt : Learnt or None
        Statistics of features that lie across the sweep.
    line_mean, line_inverse : ndarray, shape (lines,), or None
        Statistics of features that are lines.
    remarks : list of str
        What the sweeps found worth saying.
    """

    source: Source
    plan: Plan
    control: Control
    scratch_folder: Path
    journal: Journal | None = None
    made: int = 0
    energy: float = 0.0
    energy_rounding: float = 0.0
    cancelled: float = 0.0
    learnt: Learnt | None = None
    line_mean: np.ndarray | None = None
    line_inverse: np.ndarray | None = None
    line_constant: int = 0
    remarks: list[str] = field(default_factory=list)
    _ledger: list[int] | None = field(default=None, repr=False)
    _unit_energies: np.ndarray | None = field(default=None, repr=False)
    _energies_in: np.dtype | None = field(default=None, repr=False)

    def __post_init__(self) -> None:
        complex_entries = self.plan.spec.dtype.kind == "c"
        self.wide = np.dtype(np.complex128 if complex_entries else np.float64)
        self.single = np.dtype(np.complex64 if complex_entries else np.float32)
        self.work: np.dtype = self.wide
        self.scratch = Scratch(self.scratch_folder, self.plan.geometry.lines, self.wide, own=self.journal is not None)
        self.engine = Engine(self.plan.workers)
        self.reader = PanelReader(self.source, self.plan.geometry, self.control, keep=self.plan.resident)
        self.across_features = self.plan.geometry.lines_are_samples
        self.preparation = Preparation(self.across_features, self.plan.centred, self.plan.scaled)

    @property
    def ones(self) -> bool:
        """Whether sweeps carry a column of ones to centre exactly."""
        return self.across_features and self.plan.centred

    @property
    def in_single(self) -> bool:
        """Whether products are made in single precision."""
        return self.work == self.single

    @property
    def units(self) -> int:
        """Units of a whole sweep."""
        geometry = self.plan.geometry
        return sum(-(-(stop - start) // geometry.unit_lines) for start, stop in pairwise(geometry.edges))

    def take_mean(self) -> None:
        """Hold one panel for the first sweep, and take a first mean and scale from it."""
        panel = self.plan.pilot_panels[0]
        self.control.begin("pilot", self.reader.decoded(panel))
        self.reader.hold(panel)
        held = self.reader.peek(panel)
        if self.across_features:
            lines = held.T if isinstance(held, np.ndarray) and self.plan.geometry.axis == 1 else held
            self.preparation = first_statistics(lines, self.preparation, self.work)

    def take_pilot(self, directions: int, *, may_be_single: bool) -> Pilot:
        """Read the sample and solve it; later sweeps start from its mean and scales."""
        plan = self.plan
        kept = None if self.journal is None else self.journal.pilot(self.preparation)
        if kept is not None:
            self.preparation = kept.preparation
            return kept
        panels = [self.reader.decoded(panel) for panel in plan.pilot_panels]
        self.control.begin("pilot", sum(panels))
        pilot = take_pilot(
            PanelReader(self.source, plan.geometry, self.control, keep=True),
            self.engine, plan.pilot_panels, plan.leaves,
            self.preparation, directions=directions, may_be_single=may_be_single, seed=plan.request.seed,
        )  # fmt: skip
        self.preparation = pilot.preparation
        if self.journal is not None:
            self.journal.keep_pilot(pilot)
        return pilot

    def sweep(self, kind: str, block: np.ndarray | None) -> tuple[Partial, Learnt | None]:
        """Read the whole matrix once.

        Parameters
        ----------
        kind : str
            ``basis``, ``gram`` or ``fold``.
        block : ndarray, shape (across, b), or None
            Columns to multiply, in working precision.

        Returns
        -------
        sums : Partial
        learnt : Learnt or None
            Statistics of features that lie across the sweep, as this sweep found them.

        Raises
        ------
        NonFiniteError, SourceChangedError
        OverflowInSingleError
            After which the caller asks again in double.
        """
        plan = self.plan
        first = self.learnt is None and self.line_mean is None
        # Energy and means stay what the first sweep found: the ledger shows that its words were read again.
        fresh = self._energies_in is None or self._energies_in != self.work
        self.made += 1
        width = 0 if block is None else block.shape[1]
        words = f"{self.scratch.map.shape[1]} + {width} columns" if width else "the whole spectrum"
        self.control.begin("sweep", plan.spec.decoded_bytes, self.made, words)
        sampled: frozenset[int] = frozenset()
        if self.in_single:
            count = min(ROUNDING_PANELS, plan.geometry.panels)
            sampled = frozenset(draw_without_repeat(plan.request.seed, STREAM_ROUNDING, plan.geometry.panels, count))
        target = self.scratch.add_block(width) if block is not None else 0
        task = SweepTask(
            self.reader, self.preparation, self.work, kind, block,
            scratch=self.scratch if block is not None else None, target=target, ones=self.ones, add_energy=fresh,
            add_lines=fresh and self.across_features and (plan.centred or (plan.scaled and first)),
            learn=first and self.across_features and plan.scaled,
            line_features=not self.across_features and (plan.centred or plan.scaled), sampled=sampled,
        )  # fmt: skip
        keeper = None
        if self.journal is not None:
            keeper = self.journal.next_sweep(self.scratch.flush, self.scratch.last_mark if block is not None else "")
        sums = self.engine.sweep(task, plan.waves, keeper)
        # What follows until the next stage is small and dense, and runs in the caller alone.
        self.control.account("certificate")
        self._refuse_change(sums)
        self._refuse_bad(sums)
        if not fresh:
            self._known_energies(sums)
        sums.level_rounding()
        self.cancelled = 2 * float(np.sqrt(sums.cancelled))
        if sums.overflow:
            self._give_up_single(block is not None)
        learnt = self._take_statistics(sums) if fresh else self._known_statistics()
        self._refuse_range(sums)
        if learnt is not None and learnt.column_scale is not None and _spread(learnt.column_scale) > MOST_SCALE_SPREAD:
            # Re-expressing what was multiplied in such coordinates would lose figures; the statistics are exact now.
            self.remarks.append("one more sweep: the pilot's scales were far from those of the whole matrix")
            if block is not None:
                self.scratch.drop_last_block()
            return self.sweep(kind, block)
        return sums, learnt

    def _refuse_range(self, sums: Partial) -> None:
        """Refuse a matrix whose energy squared leaves the range of double precision."""
        # Squares below 1e-323 vanish, as in a matrix of zeros; the fold squares nothing. Rounding of it is larger.
        folded = np.zeros(1) if sums.triangle is None else np.abs(sums.triangle[self.ones :, self.ones :])
        largest = float(folded.max(initial=0.0))
        if not in_range(self.energy) or (self.energy == 0 and 0 < largest < VANISHING):
            raise OptionError(
                f"{self.plan.spec.name}: entries are so large or small that double precision cannot hold their powers",
                evidence=[f"‖A‖_F = {np.sqrt(self.energy) or largest:.3g}; handled are 1e-50 to 1e50"],
                remedy="Multiply the matrix by a power of two, which changes no figure, then run again.",
            )

    def _refuse_bad(self, sums: Partial) -> None:
        """Refuse a matrix that holds NaN or infinity, with places."""
        if not sums.bad:
            return
        row, column = sums.first_bad or (0, 0)
        what = "value is" if sums.bad == 1 else "values are"
        place = f"row {show_count(row)}, column {show_count(column)}"
        if self.plan.spec.unfolding is not None:
            place = self.plan.spec.unfolding.place(row, column)
        raise NonFiniteError(
            f"{self.plan.spec.name}: {show_count(sums.bad)} {what} NaN or infinite, and a decomposition needs numbers",
            evidence=[
                f"first at {place} (counted from 0)",
                *_bad_lines(sums, self.plan),
                *_decoded_words(self.plan),
            ],
            remedy="Replace the infinite values in the file: they do not count as missing."
            if sums.infinite
            else "Add --missing mean, which fills in the mean of each feature, or --missing drop-rows or drop-columns,"
            " which leave out the rows or columns that have any.",
        )

    def _refuse_change(self, sums: Partial) -> None:
        """Refuse a file that changed under the run: the words of a panel are not those of the first sweep."""
        if self._ledger is not None and sums.ledger != self._ledger:
            pairs = zip(self._ledger, sums.ledger or [], strict=True)
            changed = [panel for panel, (before, now) in enumerate(pairs) if before != now]
            rows, columns = self.plan.geometry.rectangle(changed[0])
            raise SourceChangedError(
                f"{self.plan.spec.name} changed under the run: sweep {self.made} read other values than sweep 1",
                evidence=[
                    f"{len(changed)} of {len(self._ledger)} panels differ, the first at rows"
                    f" {rows[0]:,}–{rows[1] - 1:,}, columns {columns[0]:,}–{columns[1] - 1:,}"
                ],
                remedy="Make sure that nothing writes to the file, then run again.",
            )
        if self._ledger is None and sums.beyond:
            self.remarks.append("integers beyond 2⁵³ were rounded to double precision")
        self._ledger = sums.ledger

    def _give_up_single(self, scratched: bool) -> None:
        """Drop what overflowed; in double nothing can be done."""
        if scratched:
            self.scratch.drop_last_block()
        if self.in_single:
            self.work = self.wide
            raise OverflowInSingleError
        raise OptionError(
            f"{self.plan.spec.name}: squares of its entries overflow double precision",
            remedy="Multiply the matrix by a power of two such as 2**-500, then run again.",
        )

    def _known_energies(self, sums: Partial) -> None:
        """Complete the sums of a sweep that did not take energies."""
        sums.energy, sums.unit_energies = self.energy, self._unit_energies
        sums.overflow = sums.products is not None and not np.all(np.isfinite(sums.products))

    def _known_statistics(self) -> Learnt | None:
        """What is known of means and scales, against the preparation that was used."""
        if self.learnt is None:
            return None
        used, found = self.preparation, self.learnt
        offset = np.zeros_like(found.mean)
        if used.center and used.shift is not None:
            # The shift is representable in the working precision; the rest of the mean is left.
            offset = found.mean - used.shift
            if used.inverse_scale is not None:
                offset *= used.inverse_scale
        return replace(found, offset=offset, column_scale=None, energy=self.energy, swept_energy=self.energy)

    def _take_statistics(self, sums: Partial) -> Learnt | None:
        """Keep what this sweep says of means and scales; later sweeps are prepared with it."""
        first = self.learnt is None and self.line_mean is None
        depth = self.depth(1)
        per_sum = gamma(depth.unit_lines + depth.additions + 4, complex_entries=depth.complex_entries)
        if self.in_single:
            # Summed in double; the entries were rounded to single when they were prepared.
            per_sum += 4 * 2.0**-24
        self.energy_rounding = per_sum * sums.energy
        if self.cancelled and not self.across_features:
            # The error of a mean enters the energy squared.
            self.energy_rounding += (gamma(depth.across, complex_entries=depth.complex_entries) * self.cancelled) ** 2
        self._energies_in, self._unit_energies = self.work, sums.unit_energies
        if self.across_features:
            learnt = learn(sums, self.preparation)
            self.energy = learnt.energy
            # A mean summed again, in double, is the better one; deviations define the matrix and stay.
            self.learnt = learnt if first or self.learnt is None else replace(self.learnt, mean=learnt.mean)
            if self.plan.centred or self.plan.scaled:
                self.preparation = self.preparation.learnt(learnt.mean, learnt.inverse_scale, self.work)
            return learnt
        self.energy = sums.energy
        if first and sums.line_mean and sums.line_inverse_scale and sums.line_constant:
            self.line_mean = np.concatenate(sums.line_mean)
            self.line_inverse = np.concatenate(sums.line_inverse_scale)
            self.line_constant = int(np.concatenate(sums.line_constant).sum())
        return None

    def depth(self, columns: int) -> SumDepth:
        """How the sums of a sweep that folds so many columns are nested."""
        plan, edges = self.plan, self.plan.geometry.edges
        runs = [edges[first : stop + 1] for wave in plan.waves for first, stop in wave]
        longest = max(run[-1] - run[0] for run in runs)
        unit_lines = plan.geometry.unit_lines
        units = max(sum(-(-(stop - start) // unit_lines) for start, stop in pairwise(run)) for run in runs)
        levels = int(np.ceil(np.log2(max(2, *map(len, plan.waves))))) + len(plan.waves)
        # Means that are subtracted from products are sums across as well.
        implicit_means = plan.geometry.sparse and plan.centred and not self.across_features
        return SumDepth(
            across=(2 if implicit_means else 1) * plan.geometry.across, unit_lines=unit_lines,
            additions=units + levels, fold_rows=longest,
            fold_columns=columns, folds_within=-(-longest // fold_lines(columns)), folds=levels,
            complex_entries=self.wide.kind == "c",
        )  # fmt: skip

    def feature_statistics(self) -> tuple[np.ndarray, np.ndarray, int]:
        """Mean and inverse scale of every feature in units of the file, and how many features are constant."""
        features = self.plan.features
        mean, inverse, constant = np.zeros(features), np.ones(features), 0
        if self.across_features and self.learnt is not None:
            mean, constant = self.learnt.mean, self.learnt.constant
            if self.plan.scaled and self.learnt.inverse_scale is not None:
                inverse = self.learnt.inverse_scale
        elif self.line_mean is not None and self.line_inverse is not None:
            mean, inverse, constant = self.line_mean, self.line_inverse, self.line_constant
        return (mean if self.plan.centred else np.zeros(features)), inverse, constant

    def close(self) -> None:
        """End the workers."""
        self.engine.close()


def _bad_lines(sums: Partial, plan: Plan) -> list[str]:
    """How many rows and columns hold NaN or infinity, and which hold most."""
    assert sums.worst_lines is not None
    assert sums.bad_across is not None
    columns = np.flatnonzero(sums.bad_across)
    across = worst(None, np.stack([columns, sums.bad_across[columns]], axis=1))
    assert across is not None
    found = [(sums.bad_lines, sums.worst_lines), (len(columns), across)]
    if plan.geometry.axis == 1:
        found.reverse()
    said = []
    for axis, (count, lines) in enumerate(found):
        name = ("row", "column")[axis]
        if plan.spec.unfolding is not None:
            most = "; ".join(f"{plan.spec.unfolding.line(axis, int(line))} ({show_count(int(n))})" for line, n in lines)
            said.append(f"in {show_count(count)} of {show_count(plan.spec.shape[axis])} {name}s; most at {most}")
            continue
        most = ", ".join(f"{show_count(int(line))} ({show_count(int(held))})" for line, held in lines)
        said.append(f"in {show_count(count)} of {show_count(plan.spec.shape[axis])} {name}s; most in {name} {most}")
    if sums.infinite:
        said.append(f"{show_count(sums.bad - sums.infinite)} are NaN, {show_count(sums.infinite)} infinite")
    return said


def _decoded_words(plan: Plan) -> list[str]:
    """Where NaN may come from, if not from the file."""
    decoded = plan.spec.decoded
    return [f"NaN also stands for what is missing by attributes of the file: {decoded}"] if decoded else []


def _spread(scale: np.ndarray) -> float:
    """Ratio of the largest to the smallest entry."""
    return float(scale.max() / scale.min())

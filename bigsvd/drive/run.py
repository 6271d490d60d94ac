"""One decomposition from plan to evidence: pilot, sweeps, certificate after every sweep, growth, restart, stop."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from bigsvd.certify import (
    CHAIN_FAILURE,
    Certificate,
    ChainState,
    Evidence,
    SumDepth,
    WholeSpectrum,
    certify,
    chain_bound,
    energy_bound,
    fold_rounding,
    gamma,
    gram_rounding,
    measured_rounding,
    product_rounding,
    rounding_limited,
    tall_rounding,
)
from bigsvd.errors import NonFiniteError, OptionError, SourceChangedError
from bigsvd.plan import UNIT_LINES, Plan, Widths, crowd_reach, krylov_widths
from bigsvd.prepare import Preparation
from bigsvd.randomness import draw_without_repeat
from bigsvd.solve import (
    Learnt,
    Ritz,
    State,
    carry_chains,
    correct_gram,
    correct_products,
    first_statistics,
    from_gram,
    from_triangle,
    gaussian_directions,
    grow_block,
    learn,
    start_block,
    take_pilot,
)
from bigsvd.source import Source
from bigsvd.sweep import Control, Engine, PanelReader, Partial, Scratch, SweepTask
from bigsvd.units import show_count

# Panels whose first unit is recomputed in double, to measure rounding in single.
ROUNDING_PANELS = 8
STREAM_ROUNDING = 3
# Rounding above this share of the tolerance: double.
ROUNDING_SHARE = 0.25
# Below this ratio of the last wanted to the first value, values of a Gram matrix have lost half their figures: fold instead.
GRAM_RATIO = 1e-6
# Rank that --variance starts with, before it is known how many are needed.
FIRST_GUESS = 50


@dataclass(eq=False)
class Outcome:
    """What a run leaves in memory and scratch when it stops.

    Attributes
    ----------
    plan : Plan
    state : State
    ritz : Ritz
    evidence : Evidence
    certificate : Certificate
    scratch : Scratch
    mean, inverse_scale : ndarray, shape (features,)
        Statistics of the features, in units of the file.
    constant : int
        Constant features.
    sweeps : int
    precision : str
    remarks : tuple of str
    """

    plan: Plan
    state: State
    ritz: Ritz
    evidence: Evidence
    certificate: Certificate
    scratch: Scratch
    mean: np.ndarray
    inverse_scale: np.ndarray
    constant: int
    sweeps: int
    precision: str
    remarks: tuple[str, ...] = ()


def run(source: Source, plan: Plan, control: Control, scratch_folder: Path) -> Outcome:
    """Decompose a matrix as planned, up to its certificate.

    Parameters
    ----------
    source : Source
    plan : Plan
    control : Control
        Counts bytes, reports progress, carries a wish to stop.
    scratch_folder : Path
        Where the tall products are kept; the caller closes `Outcome.scratch`.

    Returns
    -------
    Outcome

    Raises
    ------
    NonFiniteError
        If the matrix holds NaN or infinity.
    SourceChangedError
        If a panel differs from what it was in an earlier sweep.
    """
    current = _Run(source, plan, control, scratch_folder)
    try:
        return current.go()
    except BaseException:
        current.scratch.close()
        raise
    finally:
        current.engine.close()


@dataclass(eq=False)
class _Run:
    """The state of one run."""

    source: Source
    plan: Plan
    control: Control
    scratch_folder: Path
    sweeps: int = 0
    energy: float = 0.0
    energy_rounding: float = 0.0
    tall_error: float = 0.0
    whole: WholeSpectrum | None = None
    whole_missed: float = float("inf")
    chains_made: int = 0
    rounding_how: str = "proved"
    learnt: Learnt | None = None
    ledger: list[int] | None = None
    line_mean: np.ndarray | None = None
    line_inverse: np.ndarray | None = None
    line_constant: int = 0
    remarks: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        plan, spec = self.plan, self.plan.spec
        complex_entries = spec.dtype.kind == "c"
        self.wide = np.dtype(np.complex128 if complex_entries else np.float64)
        self.single = np.dtype(np.complex64 if complex_entries else np.float32)
        self.work = self.wide
        self.scratch = Scratch(self.scratch_folder, plan.geometry.lines, self.wide)
        self.engine = Engine(plan.workers)
        self.reader = PanelReader(self.source, plan.geometry, self.control, keep=plan.resident)
        self.across_features = plan.geometry.lines_are_samples
        self.preparation = Preparation(self.across_features, plan.centred, plan.scaled)
        self.state = State.empty(plan.geometry.across, plan.widths.limit, self.wide)
        self.rank = plan.rank if plan.request.variance is None else min(plan.rank, FIRST_GUESS)

    @property
    def ones(self) -> bool:
        """Whether sweeps carry a column of ones to centre exactly."""
        return self.across_features and self.plan.centred

    def go(self) -> Outcome:
        """Sweep until the certificate is good enough, or nothing more can be gained."""
        block = self._first_block()
        while True:
            self._basis_sweep(block)
            ritz = self.state.ritz()
            evidence = self._evidence(ritz)
            reached = self._settle_rank(evidence)
            request = self.plan.request
            certificate = certify(
                evidence, min(self.rank, len(evidence.theta)), crowd_reach(self.rank), request.tolerance, strict=request.strict
            )
            if self._finished(evidence, certificate, reached):
                break
            next_block = self._next_block(ritz, evidence, certificate)
            if not next_block.shape[1]:
                break
            block = next_block
        if not reached:
            certificate = self._share_not_reached(certificate)
        return self._outcome(ritz, evidence, certificate)

    def _first_block(self) -> np.ndarray:
        """The columns that the first basis sweep multiplies, by route."""
        start = None
        if self.plan.pilot_panels:
            if self.plan.mean_only:
                self._take_mean()
            else:
                start = self._take_pilot()
        if self.plan.route == "krylov":
            widths = self._widths()
            if start is None:
                start = gaussian_directions(self.plan.geometry.across, widths.start, self.plan.request.seed, self.wide)
            block = start_block(start, self.state, widths.test, self.plan.request.seed)
            self.chains_made = len(self.state.chains)
            return block
        return self._whole_spectrum()

    def _widths(self) -> Widths:
        """Widths for the rank wanted now, within the limit that memory was planned for."""
        planned = self.plan.widths
        if self.plan.request.variance is None:
            return planned
        widths = krylov_widths(self.rank, self.plan.geometry.across)
        room = planned.limit
        keep = min(widths.keep, max(1, room // 2))
        grow = min(widths.grow, max(1, room - keep - 2 * widths.test))
        return Widths(min(widths.start, planned.start), widths.test, grow, keep, room)

    def _take_mean(self) -> None:
        """Hold one panel for the first sweep, and take a first mean and scale from it."""
        panel = self.plan.pilot_panels[0]
        self.control.begin("pilot", self.reader.decoded(panel))
        self.reader.hold(panel)
        held = self.reader.peek(panel)
        if self.across_features:
            self.preparation = first_statistics(held if self.plan.geometry.axis == 0 else held.T, self.preparation, self.wide)

    def _take_pilot(self) -> np.ndarray | None:
        """Read the sample; learn a first mean, the precision, and directions."""
        plan = self.plan
        size = sum(plan.geometry.edges[p + 1] - plan.geometry.edges[p] for p in plan.pilot_panels) * plan.geometry.across
        self.control.begin("pilot", size * plan.spec.dtype.itemsize)
        reader = PanelReader(self.source, plan.geometry, self.control, keep=True)
        krylov = plan.route == "krylov"
        allowed = plan.may_be_single and plan.request.precision != "double"
        pilot = take_pilot(
            reader, self.engine, plan.pilot_panels, plan.leaves, self.preparation,
            directions=self._widths().start if krylov else 0, may_be_single=allowed, seed=plan.request.seed,
        )  # fmt: skip
        self.preparation = pilot.preparation
        if pilot.directions is None:
            return None
        if allowed and not pilot.single_fits:
            self.remarks.append("double precision: squares of the entries would overflow or vanish in single")
        if allowed and pilot.single_fits:
            fits = plan.request.precision == "single" or self._single_is_enough(pilot.theta, pilot.energy, pilot.rounding)
            self.work = self.single if fits else self.wide
        return pilot.directions

    def _single_is_enough(self, theta: np.ndarray, energy: float, rounding: np.ndarray | None) -> bool:
        """Whether rounding measured on the pilot stays below a quarter of the tolerance for every wanted component."""
        if rounding is None:
            return False
        tall, product = measured_rounding(rounding, self._units())
        wanted = theta[: self.rank]
        # Values near the noise of the sample cannot be told from it: the precision is decided by those above it.
        wanted = wanted[wanted > np.sqrt(energy) * 1e-7]
        if not len(wanted):
            return False
        width = 2 * (product[: len(wanted)] / wanted / np.sqrt(2) + tall) / wanted
        return bool(np.max(width) <= ROUNDING_SHARE * self.plan.request.tolerance)

    def _units(self) -> int:
        """Units of a whole sweep."""
        edges = self.plan.geometry.edges
        return sum(-(-(b - a) // UNIT_LINES) for a, b in zip(edges, edges[1:], strict=False))

    def _sweep(self, kind: str, block: np.ndarray | None) -> Partial:
        """Read the whole matrix once."""
        plan = self.plan
        first = self.sweeps == 0
        self.sweeps += 1
        self.control.begin("sweep", plan.spec.decoded_bytes, self.sweeps, f"{self.state.width} + {0 if block is None else block.shape[1]} columns")
        sampled: frozenset[int] = frozenset()
        if self.work == self.single:
            count = min(ROUNDING_PANELS, plan.geometry.panels)
            sampled = frozenset(draw_without_repeat(plan.request.seed, STREAM_ROUNDING, plan.geometry.panels, count))
        target = self.scratch.add_block(block.shape[1]) if block is not None else 0
        task = SweepTask(
            self.reader, self.preparation, self.work, kind, block,
            scratch=self.scratch if block is not None else None, target=target, ones=self.ones,
            add_lines=self.across_features and (plan.centred or plan.scaled),
            learn=first and self.across_features and plan.scaled,
            line_features=not self.across_features and (plan.centred or plan.scaled), sampled=sampled,
        )  # fmt: skip
        sums = self.engine.sweep(task, plan.waves)
        self._check(sums)
        return sums

    def _check(self, sums: Partial) -> None:
        """Refuse what is not finite, and a file that changed under the run."""
        if sums.bad:
            row, column = sums.first_bad or (0, 0)
            what = "value is" if sums.bad == 1 else "values are"
            raise NonFiniteError(
                f"{self.plan.spec.name}: {show_count(sums.bad)} {what} NaN or infinite; a decomposition needs finite numbers",
                evidence=[f"first at row {show_count(row)}, column {show_count(column)} (counted from 0)"],
                remedy="Replace or drop them in the file, then run again.",
            )
        if self.ledger is not None and sums.ledger != self.ledger:
            changed = [panel for panel, pair in enumerate(zip(self.ledger, sums.ledger or [], strict=True)) if pair[0] != pair[1]]
            rows, columns = self.plan.geometry.rectangle(changed[0])
            raise SourceChangedError(
                f"{self.plan.spec.name} changed while it was being read: sweep {self.sweeps} read other values than sweep 1",
                evidence=[f"{len(changed)} panels differ, the first at rows {rows[0]:,}–{rows[1] - 1:,}, columns {columns[0]:,}–{columns[1] - 1:,}"],
                remedy="Make sure that nothing writes to the file, then run again.",
            )
        self.ledger = sums.ledger

    def _take_statistics(self, sums: Partial) -> Learnt | None:
        """Keep what this sweep says of means and scales; later sweeps are prepared with it."""
        first = self.learnt is None and self.line_mean is None
        learnt: Learnt | None = None
        if self.across_features:
            learnt = learn(sums, self.preparation)
            self.energy = learnt.energy
            if first or learnt.column_scale is not None:
                self.learnt = learnt
            if self.plan.centred or self.plan.scaled:
                self.preparation = self.preparation.learnt(learnt.mean, learnt.inverse_scale, self.work)
        else:
            self.energy = sums.energy
            if first and sums.line_mean is not None and sums.line_inverse_scale is not None and sums.line_constant is not None:
                self.line_mean = np.concatenate(sums.line_mean)
                self.line_inverse = np.concatenate(sums.line_inverse_scale)
                self.line_constant = int(np.concatenate(sums.line_constant).sum())
        depth = self._depth(1)
        per_sum = gamma(depth.unit_lines + depth.additions + 4, complex_entries=depth.complex_entries)
        if self.work == self.single:
            per_sum = 2 * UNIT_LINES * 2.0**-24
        self.energy_rounding = per_sum * sums.energy
        return learnt

    def _basis_sweep(self, block: np.ndarray) -> None:
        """Multiply a block, and add it to the basis with everything that follows from it."""
        multiplied = np.ascontiguousarray(block, dtype=self.work)
        sums = self._sweep("basis", multiplied)
        if sums.overflow:
            self.scratch.drop_last_block()
            if self.work == self.wide:
                raise OptionError(
                    f"{self.plan.spec.name}: squares of its entries overflow double precision",
                    remedy="Multiply the matrix by a power of two such as 2**-500 first.",
                )
            self.remarks.append("double precision: squares of some entries overflow single")
            self.work, self.ledger = self.wide, None
            self._basis_sweep(block)
            return
        learnt = self._take_statistics(sums)
        assert sums.products is not None
        assert sums.triangle is not None
        products = np.ascontiguousarray(sums.products.conj().T)
        used = multiplied.astype(self.wide)
        column_scale = None
        if learnt is not None:
            products = correct_products(products, used, learnt, sums.lines, centred=self.ones)
            column_scale = learnt.column_scale
        frobenius = float(np.sqrt(sums.energy))
        depth = self._depth(sums.triangle.shape[0])
        if self.work == self.single:
            self.rounding_how = "measured"
            assert sums.rounding is not None
            tall, error = measured_rounding(sums.rounding, self._units())
        else:
            tall = tall_rounding(depth, frobenius, used.shape[1])
            # ‖y_j‖² is the diagonal of BᴴZ.
            norms = np.sqrt(np.abs(np.einsum("ij,ij->j", used.conj(), products)))
            error = product_rounding(depth, frobenius, norms)
        if column_scale is not None:
            error = error / column_scale.min()
        exact = self.work == self.wide and column_scale is None
        growth = self.state.absorb(used, products, sums.triangle, self.scratch, error, centred=self.ones, exact=exact)
        self.tall_error = float(np.hypot(self.tall_error, tall * growth)) + gamma(depth.fold_columns * 2) * frobenius
        carry_chains(self.state, self.energy, self.plan.request.seed, column_scale)

    def _depth(self, columns: int) -> SumDepth:
        """How the sums of a sweep are nested."""
        plan = self.plan
        edges = plan.geometry.edges
        longest = max(edges[stop] - edges[first] for wave in plan.waves for first, stop in wave)
        units = max(
            sum(-(-(edges[p + 1] - edges[p]) // UNIT_LINES) for p in range(first, stop))
            for wave in plan.waves
            for first, stop in wave
        )
        levels = int(np.ceil(np.log2(max(2, plan.leaves)))) + len(plan.waves)
        return SumDepth(
            across=plan.geometry.across, unit_lines=UNIT_LINES, additions=units + levels, fold_rows=longest,
            fold_columns=columns, folds=levels, complex_entries=self.wide.kind == "c",
        )  # fmt: skip

    def _whole_spectrum(self) -> np.ndarray:
        """Sweep for the whole spectrum; return the leading right vectors, whose sweep closes the route."""
        plan = self.plan
        use_gram = plan.route == "gram"
        sums = self._sweep("gram" if use_gram else "fold", None)
        if sums.overflow:
            raise OptionError(f"{plan.spec.name}: squares of its entries overflow double precision", remedy="Scale the matrix first.")
        learnt = self._take_statistics(sums)
        frobenius = float(np.sqrt(sums.energy))
        if use_gram:
            assert sums.gram is not None
            error = gram_rounding(self._depth(plan.geometry.across), frobenius)
            gram = correct_gram(sums.gram, learnt, sums.lines, centred=self.ones) if learnt is not None else sums.gram
            if learnt is not None and learnt.column_scale is not None:
                error /= float(learnt.column_scale.min()) ** 2
            value, vectors = from_gram(gram)
            error += gamma(10.0 * plan.geometry.across) * float(value[0]) ** 2
            # |a² − b²| ≤ e gives |a − b| ≤ min(e/a, √e).
            errors = error / np.maximum(value, np.sqrt(error)) if error > 0 else np.zeros(len(value))
            self.whole = WholeSpectrum(value, errors, float("inf"))
            rank = min(plan.rank, plan.geometry.lines, len(value))
            if value[rank - 1] < GRAM_RATIO * value[0] and plan.request.route == "auto":
                self.remarks.append("small values are wanted: a fold by QR followed the sums of AᴴA")
                self.whole = None
                self.plan = replace(plan, route="tsqr", waves=plan.waves)
                return self._whole_spectrum()
        else:
            assert sums.triangle is not None
            error = fold_rounding(self._depth(sums.triangle.shape[0]), frobenius)
            if learnt is not None and learnt.column_scale is not None:
                error /= float(learnt.column_scale.min())
            value, vectors = from_triangle(sums.triangle, learnt, centred=self.ones)
            error += gamma(10.0 * plan.geometry.across) * float(value[0])
            self.whole = WholeSpectrum(value, np.full(len(value), error), error)
        if plan.request.variance is not None:
            self._settle_rank_from(value)
        width = min(plan.widths.start, plan.geometry.across)
        rest = float(value[width]) if width < len(value) else 0.0
        slack = error if not use_gram else 0.0
        self.whole_missed = float(np.sqrt(rest**2 + 2 * error)) if use_gram else rest + slack
        return np.ascontiguousarray(vectors[:, :width])

    def _settle_rank_from(self, value: np.ndarray) -> None:
        """Rank for the wanted share, from a whole spectrum."""
        share = np.cumsum(value**2) / max(self.energy, np.finfo(float).tiny)
        enough = np.flatnonzero(share >= float(self.plan.request.variance or 1.0))
        self.rank = min(self.plan.rank, int(enough[0]) + 1) if len(enough) else self.plan.rank

    def _settle_rank(self, evidence: Evidence) -> bool:
        """With --variance: how many components the share needs; False while they are not all in the basis."""
        wanted = self.plan.request.variance
        if wanted is None:
            return True
        lower = np.maximum(evidence.theta - evidence.value_rounding, 0.0)
        share = np.cumsum(lower**2) / max(self.energy, np.finfo(float).tiny)
        # The last figures of a share of one cannot be reached in rounded sums.
        enough = np.flatnonzero(share >= wanted * (1 - 1e-9))
        if len(enough) and enough[0] < self.plan.rank:
            self.rank = int(enough[0]) + 1
            return True
        if self.plan.route == "krylov":
            self.rank = min(self.plan.rank, max(2 * self.rank, FIRST_GUESS))
        else:
            self.rank = self.plan.rank
        return False

    def _evidence(self, ritz: Ritz) -> Evidence:
        """Everything the certificate rests on."""
        state, theta = self.state, ritz.theta
        top = float(theta[0]) if len(theta) else 0.0
        defect = state.basis_defect()
        depth = self._depth(state.triangle.shape[0])
        value_rounding = self.tall_error + defect * top + tall_rounding(depth, top * np.sqrt(len(theta)), 1)
        weights = np.abs(ritz.rotation)
        if self.rounding_how == "measured":
            product = np.sqrt((weights**2).T @ state.product_error**2)
        else:
            product = weights.T @ state.product_error
        product = product + (2 * defect + gamma(2.0 * state.width + 4, complex_entries=depth.complex_entries)) * top**2
        missed, how, probability = self._missed(theta, value_rounding)
        return Evidence(
            theta, ritz.residual_gram, value_rounding, product, self.rounding_how, missed, how, probability, self.energy, self.whole
        )

    def _missed(self, theta: np.ndarray, value_rounding: float) -> tuple[float, str, float]:
        """The best bound on what lies outside the basis."""
        if self.state.width >= self.state.across:
            return 0.0, "the basis spans the whole space", 0.0
        # Deterministic bounds first: of equal ones, the stronger statement is kept.
        best = energy_bound(self.energy, theta, self.energy_rounding, value_rounding), "energy that the factors leave", 0.0
        if self.whole_missed < best[0]:
            best = self.whole_missed, "next value of the whole spectrum", 0.0
        for chain in self.state.chains:
            bound = chain_bound(
                ChainState(chain.power, chain.log_norm, chain.lost, chain.vectors, self.wide.kind == "c", chain.shrink)
            )
            if bound < best[0]:
                how = f"{chain.vectors} Gaussian test vectors, power {chain.power} of AᴴA"
                best = bound, how, self.chains_made * CHAIN_FAILURE
        return best

    def _finished(self, evidence: Evidence, certificate: Certificate, reached: bool) -> bool:
        """Whether to stop here."""
        if self.state.width >= self.state.across and (self.work == self.wide or certificate.tolerance_met):
            return True
        if self.sweeps >= self.plan.request.max_sweeps:
            return True
        if not reached:
            return bool(self.state.width >= self.state.across)
        if certificate.tolerance_met:
            # A single block Krylov sweep ends a run only when it proves the order of all it calls resolved: a direction that
            # the pilot missed shows in the second.
            certain = self.whole is not None or self.sweeps > 1 or bool(np.all(certificate.index_proved))
            return certain
        return self.work == self.wide and rounding_limited(evidence, certificate)

    def _next_block(self, ritz: Ritz, evidence: Evidence, certificate: Certificate) -> np.ndarray:
        """The columns of the next sweep; restarts or goes over to double where needed."""
        widths, seed = self._widths(), self.plan.request.seed
        proved = bool(np.all(certificate.index_proved))
        if self.work == self.single and self._rounding_too_large(evidence, certificate):
            return self._go_over_to_double(ritz, widths)
        tests = 0 if proved else widths.test
        if self.state.width + widths.grow + 2 * tests > min(widths.limit, self.state.across) and self.state.width > widths.keep:
            keep = min(widths.keep, self.state.width)
            self.state.restart(keep, ritz, self.scratch)
            ritz = Ritz(ritz.theta[:keep], np.eye(keep, dtype=self.wide), ritz.residual_gram[:keep, :keep])
            tests = widths.test
        block = grow_block(
            self.state, ritz, count=widths.grow, tests=tests, limit=widths.limit, seed=seed, sweep=self.sweeps
        )
        self.chains_made += 1 if tests else 0
        return block

    def _rounding_too_large(self, evidence: Evidence, certificate: Certificate) -> bool:
        """Whether single precision spends more than its share of the tolerance on a component that is still open."""
        if self.plan.request.precision == "single":
            return False
        waiting = certificate.state != 0
        theta = np.maximum(evidence.theta[: certificate.rank], np.finfo(float).tiny)
        width = 2 * (evidence.product_rounding[: certificate.rank] / theta / np.sqrt(2) + evidence.value_rounding) / theta
        return bool(np.any(width[waiting] > ROUNDING_SHARE * self.plan.request.tolerance))

    def _go_over_to_double(self, ritz: Ritz, widths: Widths) -> np.ndarray:
        """Begin again in double from the present Ritz vectors and their residuals."""
        self.remarks.append(f"double precision from sweep {self.sweeps + 1} on: rounding in single exceeds a quarter of the tolerance")
        keep = min(widths.keep, self.state.width)
        grow = min(widths.grow, widths.limit - keep - widths.test, self.state.across - keep)
        vectors = self.state.used @ ritz.rotation[:, :keep]
        residuals = self.state.residuals(ritz, np.arange(min(grow, self.state.width)))
        norms = np.linalg.norm(residuals, axis=0)
        residuals = residuals[:, norms > 0]
        self.state.forget(self.scratch)
        self.work, self.rounding_how, self.tall_error = self.wide, "proved", 0.0
        block = start_block(np.hstack([vectors, residuals]), self.state, widths.test, self.plan.request.seed, self.sweeps)
        self.chains_made += 1
        return block

    def _share_not_reached(self, certificate: Certificate) -> Certificate:
        """Say that --variance was not reached."""
        share = certificate.captured_share
        words = f"{certificate.rank} components capture {share:.4f} of the variance, short of {self.plan.request.variance:g}"
        return replace(certificate, tolerance_met=False, verdict=f"{certificate.verdict}; {words}")

    def _outcome(self, ritz: Ritz, evidence: Evidence, certificate: Certificate) -> Outcome:
        """Collect what the caller needs."""
        features = self.plan.features
        if self.across_features:
            assert self.learnt is not None
            mean, constant = self.learnt.mean, self.learnt.constant
            inverse = self.learnt.inverse_scale if self.plan.scaled and self.learnt.inverse_scale is not None else np.ones(features)
        else:
            mean = self.line_mean if self.line_mean is not None else np.zeros(features)
            inverse = self.line_inverse if self.line_inverse is not None else np.ones(features)
            constant = self.line_constant
        if not self.plan.centred:
            mean = np.zeros(features)
        return Outcome(
            self.plan, self.state, ritz, evidence, certificate, self.scratch, mean, inverse, constant,
            self.sweeps, "single" if self.work == self.single else "double", tuple(self.remarks),
        )  # fmt: skip

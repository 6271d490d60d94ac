"""One decomposition from plan to evidence: pilot, sweeps, certificate after every sweep, growth, restart, stop."""

from __future__ import annotations

import time
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from bigsvd.certify import (
    Certificate,
    Evidence,
    certify,
    crowded,
    rounding_limited,
)
from bigsvd.drive.deadline import Deadline
from bigsvd.drive.outcome import Answer, Outcome
from bigsvd.drive.precision import rounding_too_large, single_is_enough
from bigsvd.drive.proof import Proof
from bigsvd.drive.sweeps import OverflowInSingleError, Sweeps
from bigsvd.drive.whole import gram_is_enough, sweep_fold, sweep_gram
from bigsvd.errors import DeadlineError
from bigsvd.journal import Journal
from bigsvd.plan import Plan, Widths, crowd_reach, krylov_widths
from bigsvd.solve import (
    Aside,
    Pilot,
    Ritz,
    State,
    carry_chains,
    correct_products,
    expected_sweeps,
    gaussian_directions,
    grow_block,
    start_block,
)
from bigsvd.source import Source
from bigsvd.sweep import Control, OutOfTimeError
from bigsvd.units import show_bytes, show_seconds

# Rank that --variance starts with, before it is known how many are needed.
FIRST_GUESS = 50


def run(
    source: Source,
    plan: Plan,
    control: Control,
    scratch_folder: Path,
    journal: Journal | None = None,
    deadline: Deadline | None = None,
) -> Outcome:
    """Decompose a matrix as planned, up to its certificate.

    Parameters
    ----------
    source : Source
    plan : Plan
    control : Control
        Counts bytes, reports progress, carries a wish to stop.
    scratch_folder : Path
        Where the tall products are kept; the caller closes `Outcome.scratch`.
    journal : Journal, optional
        Keeps what the sweeps add up, and knows what an earlier process added up.
    deadline : Deadline, optional
        When it comes, what the last whole sweep certified is the outcome.

    Returns
    -------
    Outcome

    Raises
    ------
    NonFiniteError
        If the matrix holds NaN or infinity.
    SourceChangedError
        If a panel differs from what it was in an earlier sweep.
    DeadlineError
        If the time is over before anything is certified.
    """
    sweeps = Sweeps(source, plan, control, scratch_folder, journal)
    control.read_until = None if deadline is None else deadline.read_until
    try:
        return _Run(plan, sweeps, deadline).go()
    except BaseException:
        sweeps.scratch.close()
        raise
    finally:
        control.read_until = None
        sweeps.close()


@dataclass(eq=False)
class _Run:
    """The state of one run."""

    plan: Plan
    sweeps: Sweeps
    deadline: Deadline | None = None
    remarks: list[str] = field(default_factory=list)
    answer: Answer | None = None
    aside: Aside | None = None
    expected_sweeps: int | None = None

    def __post_init__(self) -> None:
        plan = self.plan
        self.next_block = np.zeros((0, 0), self.sweeps.wide)
        self.state = State.empty(plan.geometry.across, plan.widths.limit, self.sweeps.wide)
        self.proof = Proof(self.sweeps, self.state)
        self.rank = plan.rank if plan.request.variance is None else min(plan.rank, FIRST_GUESS)

    def go(self) -> Outcome:
        """Sweep until the certificate is good enough, nothing more can be gained, or the time is over."""
        try:
            self.next_block = self._first_block()
            while True:
                columns, began = self.next_block.shape[1], time.perf_counter()
                self._sweep_basis()
                self.aside = None
                reached = self._certify()
                assert self.answer is not None
                if self._finished(self.answer.evidence, self.answer.certificate, reached):
                    break
                answer, single = self.answer, self.sweeps.in_single
                self.next_block = self._next_block(answer.ritz, answer.evidence, answer.certificate)
                if not self.next_block.shape[1]:
                    break
                # In double a column costs about twice as much.
                ratio = self.next_block.shape[1] / columns * (2 if single and not self.sweeps.in_single else 1)
                seconds = (time.perf_counter() - began) * max(0.5, ratio)
                if self.deadline is not None and not self.deadline.allows(seconds):
                    return self._out_of_time()
        except OutOfTimeError:
            return self._out_of_time()
        certificate = self.answer.certificate
        return self._outcome(certificate if reached else self._share_not_reached(certificate))

    def _certify(self) -> bool:
        """Take the step after a sweep; returns whether the rank that --variance needs is known."""
        ritz = self.state.ritz()
        evidence = self.proof.evidence(ritz)
        reached = self._settle_rank(evidence)
        rank = min(self.rank, len(evidence.theta))
        request = self.plan.request
        certificate = certify(evidence, rank, crowd_reach(rank), request.tolerance, strict=request.strict)
        self.answer = Answer(ritz, evidence, certificate, self.sweeps.made, self._precision())
        self.sweeps.control.tell(f"after sweep {self.sweeps.made}: {certificate.verdict}")
        return reached

    def _precision(self) -> str:
        """Of the products of the present sweep."""
        return "single" if self.sweeps.in_single else "double"

    def _outcome(self, certificate: Certificate, *, out_of_time: bool = False) -> Outcome:
        """What the run leaves, by its last answer."""
        assert self.answer is not None
        answer = self.answer
        mean, inverse, constant = self.sweeps.feature_statistics()
        return Outcome(
            self.plan, self.state, answer.ritz, answer.evidence, certificate, self.sweeps.scratch, mean, inverse,
            constant, answer.sweeps, answer.precision, (*self.sweeps.remarks, *self.remarks), out_of_time,
            self.expected_sweeps,
        )  # fmt: skip

    def _out_of_time(self) -> Outcome:
        """Go back to what the last whole sweep certified."""
        if self.answer is None:
            reserve = self.deadline.reserve if self.deadline is not None else 0.0
            raise DeadlineError(
                f"{self.plan.spec.name}: the time given was over before the first sweep was, so nothing is certified",
                evidence=[
                    f"{show_bytes(self.sweeps.control.bytes_read)} were read",
                    f"the last {show_seconds(reserve)} were set aside for checks and writing",
                ],
                remedy="Give a later --finish-by.",
            )
        scratch = self.sweeps.scratch
        if self.aside is not None:
            self.answer = replace(self.answer, ritz=self.state.take_back(self.aside, scratch))
        if scratch.stored > scratch.map.shape[0]:
            scratch.leave_last_block()
        certificate = self.answer.certificate
        words = f"stopped at the deadline after sweep {self.answer.sweeps}; {certificate.verdict}"
        return self._outcome(replace(certificate, tolerance_met=False, verdict=words), out_of_time=True)

    def _first_block(self) -> np.ndarray:
        """The columns that the first basis sweep multiplies, by route."""
        plan, seed = self.plan, self.plan.request.seed
        start = None
        if plan.mean_only and plan.may_be_single and plan.request.precision == "single":
            self.sweeps.work = self.sweeps.single
        if plan.pilot_panels:
            if plan.mean_only:
                self.sweeps.take_mean()
            else:
                start = self._take_pilot()
        if plan.route != "krylov":
            return self._whole_spectrum()
        widths = self._widths()
        if start is None:
            start = gaussian_directions(plan.geometry.across, widths.start, seed, self.sweeps.wide)
        block = start_block(start, self.state, widths.test, seed)
        self.proof.chains_made = len(self.state.chains)
        return block

    def _widths(self) -> Widths:
        """Widths for the rank wanted now, within the limit that memory was planned for."""
        planned = self.plan.widths
        if self.plan.request.variance is None:
            return planned
        widths = krylov_widths(self.rank, self.plan.geometry.across, profile=planned.profile)
        keep = min(widths.keep, max(1, planned.limit // 2))
        grow = min(widths.grow, max(1, planned.limit - keep - 2 * widths.test))
        return Widths(min(widths.start, planned.start), widths.test, grow, keep, planned.limit)

    def _take_pilot(self) -> np.ndarray | None:
        """Solve the sample; settle the precision, and return the first directions."""
        asked = self.plan.request.precision
        allowed = self.plan.may_be_single and asked != "double"
        pilot = self.sweeps.take_pilot(self._widths().start, may_be_single=allowed)
        if allowed and not pilot.single_fits and pilot.directions is not None:
            self.remarks.append("double precision: squares of the entries would overflow or vanish in single")
        elif allowed and pilot.directions is not None:
            request, units = self.plan.request, self.sweeps.units
            if asked == "single" or single_is_enough(
                pilot, self.rank, units, request.tolerance, strict=request.strict
            ):  # fmt: skip
                self.sweeps.work = self.sweeps.single
        if self.plan.route == "krylov" and pilot.directions is not None:
            self._expect(pilot)
        return pilot.directions

    def _expect(self, pilot: Pilot) -> None:
        """Say how many sweeps the sample lets expect."""
        request, rank = self.plan.request, min(self.rank, len(pilot.theta))
        # Neighbours in a bulk are bounded, not told apart.
        apart = rank if request.strict else rank - int(np.sum(crowded(pilot.theta, rank, crowd_reach(rank))))
        found = None if request.variance is not None else expected_sweeps(pilot, apart, request.tolerance)
        if found is not None and found <= request.max_sweeps:
            self.expected_sweeps = max(found, request.least_sweeps)
            count = "1 sweep" if self.expected_sweeps == 1 else f"{self.expected_sweeps} sweeps"
            self.sweeps.control.tell(f"after the pilot: {count} expected")

    def _sweep_basis(self) -> None:
        """Multiply the next block, and add it to the basis with everything that follows from it."""
        sweeps = self.sweeps
        multiplied = np.ascontiguousarray(self.next_block, dtype=sweeps.work)
        # Only the copy that is multiplied lives through the sweep.
        self.next_block = np.zeros((0, 0), sweeps.wide)
        rounded = sweeps.in_single
        try:
            sums, learnt = sweeps.sweep("basis", multiplied)
        except OverflowInSingleError:
            self.remarks.append("double precision: squares of some entries overflow single")
            multiplied = multiplied.astype(sweeps.work)
            sums, learnt = sweeps.sweep("basis", multiplied)
        assert sums.products is not None
        assert sums.triangle is not None
        products = np.ascontiguousarray(sums.products.conj().T)
        used = multiplied.astype(sweeps.wide)
        column_scale = None
        if learnt is not None:
            products = correct_products(products, used, learnt, sums.lines, centred=sweeps.ones)
            column_scale = learnt.column_scale
        error, tall = self.proof.sweep_rounding(sums, used)
        if column_scale is not None:
            error = error / column_scale.min()
        exact = not rounded and column_scale is None
        growth = self.state.absorb(
            used, products, sums.triangle, sweeps.scratch, error, centred=sweeps.ones, exact=exact
        )  # fmt: skip
        self.proof.count_rounding(sums, tall * growth, growth)
        carry_chains(
            self.state,
            sweeps.energy + sweeps.energy_rounding,
            self.plan.request.seed,
            column_scale,
            measured=self.proof.measured,
        )

    def _whole_spectrum(self) -> np.ndarray:
        """Sweep for the whole spectrum; return the leading right vectors, whose sweep closes the route."""
        plan = self.plan
        if plan.route == "gram":
            self.proof.whole = sweep_gram(self.sweeps)
            if plan.request.route == "auto" and not gram_is_enough(
                self.proof.whole, min(plan.rank, plan.geometry.lines)
            ):
                self.remarks.append("small values are wanted: a fold by QR followed the sums of AᴴA")
                self.proof.whole = sweep_fold(self.sweeps)
        else:
            self.proof.whole = sweep_fold(self.sweeps)
        if plan.request.variance is not None:
            share = np.cumsum(self.proof.whole.spectrum.value**2) / max(self.sweeps.energy, np.finfo(float).tiny)
            enough = np.flatnonzero(share >= plan.request.variance)
            self.rank = min(plan.rank, int(enough[0]) + 1) if len(enough) else plan.rank
        width = min(plan.widths.start, plan.geometry.across)
        return np.ascontiguousarray(self.proof.whole.vectors[:, :width])

    def _settle_rank(self, evidence: Evidence) -> bool:
        """With --variance: how many components the share needs; False while they are not all in the basis."""
        wanted = self.plan.request.variance
        if wanted is None:
            return True
        if self.sweeps.energy == 0:
            # Of no variance at all one component captures any share.
            self.rank = 1
            return True
        lower = np.maximum(evidence.theta - evidence.value_rounding, 0.0)
        share = np.cumsum(lower**2) / self.sweeps.energy
        # The last figures of a share of one cannot be reached in rounded sums.
        enough = np.flatnonzero(share >= wanted * (1 - 1e-9))
        if len(enough) and enough[0] < self.plan.rank:
            self.rank = int(enough[0]) + 1
            return True
        grown = max(2 * self.rank, FIRST_GUESS) if self.plan.route == "krylov" else self.plan.rank
        self.rank = min(self.plan.rank, grown)
        return False

    def _finished(self, evidence: Evidence, certificate: Certificate, reached: bool) -> bool:
        """Whether to stop here."""
        full = self.state.width >= self.state.across
        if self.sweeps.made < self.plan.request.least_sweeps and not full:
            return False
        if self.sweeps.made >= self.plan.request.max_sweeps:
            return True
        if not reached:
            return full
        if certificate.tolerance_met:
            # A single block Krylov sweep ends a run only when it proves the order of all it calls resolved: a direction
            # that the pilot missed shows in the second.
            return (
                self.proof.whole is not None or self.sweeps.made > 1 or full or bool(np.all(certificate.index_proved))
            )
        if self.sweeps.in_single and self.plan.request.precision != "single":
            # Double may still do better.
            return False
        return full or rounding_limited(evidence, certificate)

    def _next_block(self, ritz: Ritz, evidence: Evidence, certificate: Certificate) -> np.ndarray:
        """The columns of the next sweep; restarts or goes over to double where needed."""
        widths, state = self._widths(), self.state
        asked = self.plan.request.precision
        if self.sweeps.in_single and asked != "single" and rounding_too_large(evidence, certificate):
            return self._go_over_to_double(ritz, widths)
        tests = 0 if np.all(certificate.index_proved) else widths.test
        room = min(widths.limit, state.across)
        if state.width + widths.grow + 2 * tests > room and state.width > widths.keep:
            keep = min(widths.keep, state.width)
            state.restart(keep, ritz, self.sweeps.scratch)
            self.proof.keep_ritz_vectors(keep)
            ritz = Ritz(ritz.theta[:keep], np.eye(keep, dtype=self.sweeps.wide), ritz.residual_gram[:keep, :keep])
            assert self.answer is not None
            self.answer = replace(self.answer, ritz=ritz)
            tests = widths.test
        block = grow_block(
            state, ritz, count=widths.grow, tests=tests, limit=widths.limit, seed=self.plan.request.seed,
            sweep=self.sweeps.made,
        )  # fmt: skip
        self.proof.chains_made += 1 if tests else 0
        return block

    def _go_over_to_double(self, ritz: Ritz, widths: Widths) -> np.ndarray:
        """Begin again in double from the present Ritz vectors and their residuals."""
        sweeps, state = self.sweeps, self.state
        self.remarks.append(
            f"double precision from sweep {sweeps.made + 1} on: rounding in single exceeds a quarter of the tolerance"
        )
        keep, rank = min(widths.keep, state.width), min(self.rank, state.width)
        room = min(widths.limit, state.basis.shape[1]) - rank - keep - widths.test
        grow = max(0, min(widths.grow, room, state.across - keep, state.width))
        vectors = state.used @ ritz.rotation[:, :keep]
        residuals = state.residuals(ritz, np.arange(grow))
        residuals = residuals[:, np.linalg.norm(residuals, axis=0) > 0]
        self.aside = state.set_aside(rank, ritz, sweeps.scratch, next_width=keep + residuals.shape[1] + widths.test)
        state.forget(sweeps.scratch)
        sweeps.work = sweeps.wide
        self.proof.begin_again()
        block = start_block(
            np.hstack([vectors, residuals]), state, widths.test, self.plan.request.seed, sweep=sweeps.made
        )  # fmt: skip
        self.proof.chains_made += 1
        return block

    def _share_not_reached(self, certificate: Certificate) -> Certificate:
        """Say that --variance was not reached."""
        words = (
            f"{certificate.rank} components capture {certificate.captured_share:.4f} of the variance,"
            f" short of {self.plan.request.variance:g}"
        )
        return replace(certificate, tolerance_met=False, verdict=f"{certificate.verdict}; {words}")

"""What is provable as a run goes on: rounding, test vectors, whole spectra, ends that earlier sweeps proved."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from bigsvd.certify import (
    CHAIN_FAILURE,
    ChainState,
    Evidence,
    chain_bound,
    energy_bound,
    gamma,
    index_bounds,
    measured_rounding,
    product_rounding,
    tall_rounding,
    triangle_rounding,
    upper_ends,
)
from bigsvd.drive.sweeps import Sweeps
from bigsvd.drive.whole import WholeSweep
from bigsvd.solve import Ritz, State
from bigsvd.sweep import Partial


@dataclass(eq=False)
class Proof:
    """Gathers the evidence for the certificate.

    Attributes
    ----------
    sweeps : Sweeps
    state : State
    whole : WholeSweep or None
        Of a route that computed the whole spectrum.
    chains_made : int
        Chains of test vectors so far; each may fail.
    measured : bool
        Rounding was measured, not bounded by the worst case.
    tall_error, fold_error : float
        Bounds of the rounding of Y, and of its last fold.
    relied : bool
        Whether anything proved so far rests on test vectors.
    proved_ends : ndarray, shape (any,)
        Upper ends by index that earlier sweeps proved; facts about the matrix, whatever the basis.
    own_ends : ndarray, shape (L + 1,)
        Those that the present basis proves alone.
    left_out : float
        Bound of ‖A(I − VVᴴ)‖ for the Ritz vectors V that the last restart kept.
    """

    sweeps: Sweeps
    state: State
    whole: WholeSweep | None = None
    chains_made: int = 0
    measured: bool = False
    tall_error: float = 0.0
    fold_error: float = 0.0
    relied: bool = False
    proved_ends: np.ndarray = field(default_factory=lambda: np.zeros(0))
    own_ends: np.ndarray = field(default_factory=lambda: np.zeros(0))
    left_out: float = float("inf")

    def sweep_rounding(self, sums: Partial, used: np.ndarray) -> tuple[np.ndarray, float]:
        """Rounding of a sweep's products.

        Parameters
        ----------
        sums : Partial
        used : ndarray, shape (across, b)
            The columns multiplied.

        Returns
        -------
        error : ndarray, shape (b,)
            Bound of the error of each column of the products.
        tall : float
            Bound of ‖ΔY‖_F.
        """
        if self.sweeps.in_single:
            self.measured = True
            assert sums.rounding is not None
            tall, error = measured_rounding(sums.rounding, self.sweeps.units)
            return error, tall
        assert sums.triangle is not None
        frobenius = float(np.sqrt(sums.energy)) + self.sweeps.cancelled
        depth = self.sweeps.depth(sums.triangle.shape[0])
        # Norms of the columns as they were swept, means included.
        norms = np.linalg.norm(sums.triangle[:, -used.shape[1] :], axis=0)
        # The correction for the mean errs by the rounding of δ, twice.
        mean = 2 * gamma(depth.unit_lines + depth.additions + 4, complex_entries=depth.complex_entries) * sums.energy
        return product_rounding(depth, frobenius, norms) + mean, tall_rounding(depth, frobenius, used.shape[1])

    def count_rounding(self, sums: Partial, tall: float, growth: float) -> None:
        """Add the rounding of a sweep's Y, and replace that of the fold: every sweep folds all of Y anew."""
        assert sums.triangle is not None
        self.tall_error = float(np.hypot(self.tall_error, tall))
        depth = self.sweeps.depth(sums.triangle.shape[0])
        # The column of ones errs by itself: the bound of a fold holds column by column.
        columns = sums.triangle[:, int(self.sweeps.ones) :]
        self.fold_error = triangle_rounding(depth, float(np.linalg.norm(columns))) * growth

    def begin_again(self) -> None:
        """Forget the rounding of columns that were dropped, and what rests on it: measured is less than proved."""
        self.measured, self.tall_error = False, 0.0
        self.proved_ends = np.zeros(0)
        self.left_out = float("inf")

    def keep_ritz_vectors(self, keep: int) -> None:
        """Note a restart: the recursion bounds what is left out, the complement of the kept Ritz vectors."""
        self.left_out = float(self.own_ends[keep])

    def evidence(self, ritz: Ritz) -> Evidence:
        """Everything the certificate rests on, after a Rayleigh–Ritz step."""
        state, theta, sweeps = self.state, ritz.theta, self.sweeps
        top = float(theta[0]) if len(theta) else 0.0
        defect = state.basis_defect()
        depth = sweeps.depth(state.triangle.shape[0])
        value_rounding = self.tall_error + self.fold_error + defect * top
        weights = np.abs(ritz.rotation)
        if self.measured:
            product = np.sqrt((weights**2).T @ state.product_error**2)
        else:
            product = weights.T @ state.product_error
        formed = gamma(2.0 * state.width + 4, complex_entries=depth.complex_entries)
        missed, how, probability = self._missed(theta, value_rounding)
        product = product + (2 * defect + formed) * top**2
        how_rounded = "measured" if self.measured else "proved"
        spectrum = None if self.whole is None else self.whole.spectrum
        found = Evidence(
            theta,
            ritz.residual_gram,
            value_rounding,
            product,
            how_rounded,
            missed,
            how,
            probability,
            sweeps.energy,
            spectrum,
        )
        self.own_ends = index_bounds(found)
        ends = upper_ends(found, self.proved_ends, self.own_ends)
        self.proved_ends = np.concatenate([ends, self.proved_ends[len(ends) :]])
        return replace(found, ends=ends)

    def _missed(self, theta: np.ndarray, value_rounding: float) -> tuple[float, str, float]:
        """The best bound on what lies outside the basis."""
        if self.state.width >= self.state.across:
            return 0.0, "the basis spans the whole space", self.chains_made * CHAIN_FAILURE if self.relied else 0.0
        # Deterministic bounds first: of equal ones, the stronger statement is kept.
        left = energy_bound(self.sweeps.energy, theta, self.sweeps.energy_rounding, value_rounding)
        best = left, "energy that the factors leave"
        if self.whole is not None and not self.state.restarts:
            # A restart keeps Ritz vectors of a larger space, of which the whole spectrum says nothing.
            next_value = self.whole.missed(min(self.sweeps.plan.widths.start, self.state.across))
            if next_value < best[0]:
                best = next_value, "next value of the whole spectrum"
        if self.left_out < best[0]:
            best = self.left_out, "what the last restart left out"
        for chain in self.state.chains:
            bound = chain_bound(
                ChainState(
                    chain.power, chain.log_norm, chain.lost, chain.vectors, self.sweeps.wide.kind == "c", chain.shrink
                )
            )
            if bound < best[0]:
                best = bound, f"{chain.vectors} Gaussian test vectors, power {chain.power} of AᴴA"
                self.relied = True
        # Ends proved in an earlier sweep may rest on test vectors even where the present bound does not.
        return *best, self.chains_made * CHAIN_FAILURE if self.relied else 0.0

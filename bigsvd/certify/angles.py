"""How far vectors can be from the true ones: Davis–Kahan with proved gaps, for single vectors or for ties."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bigsvd.certify.evidence import Evidence

# Neighbours are tied when the bound of either's own vector exceeds this sine; a tie speaks of their joint subspace.
TIED_SINE = 0.5


@dataclass(frozen=True, eq=False)
class Angles:
    """Angle bounds of the k leading components, for left and right vectors alike.

    Attributes
    ----------
    bound : ndarray, shape (k,)
        Radians; NaN where there is none.
    first, last : ndarray of int, shape (k,)
        The components (from 0) of the tie that the bound speaks of.
    """

    bound: np.ndarray
    first: np.ndarray
    last: np.ndarray


def bound_angles(evidence: Evidence, upper: np.ndarray, rank: int) -> Angles:
    """Bound the angles between Ritz vectors and true singular vectors.

    For components a … b with γ = min(lower_{a−1}² − θ_a², θ_b² − u_{b+1}²) > 0,

        ‖sin Θ(V)‖ ≤ ‖S_{a…b}‖ / γ      (Davis and Kahan, SIAM J. Numer. Anal. 7 (1970), on AᴴA)
        ‖sin Θ(U)‖ ≤ β ‖S_{a…b}‖ / (θ_b γ)   (the same on AAᴴ, whose residual is A·R with R outside the basis)

    Parameters
    ----------
    evidence : Evidence
    upper : ndarray, shape (L + 1,)
        Upper ends by index.
    rank : int

    Returns
    -------
    Angles
    """
    bound = np.full(rank, np.nan)
    first, last = np.arange(rank), np.arange(rank)
    groups = [(i, i + 1) for i in range(rank)]
    position = 0
    while position < len(groups):
        start, stop = groups[position]
        sine = _sine(evidence, upper, start, stop)
        if sine <= TIED_SINE:
            # What a vector has of its own stays: a neighbour that has no bound takes nothing away from it.
            new = start + np.flatnonzero(np.isnan(bound[start:stop]))
            bound[new], first[new], last[new] = np.arcsin(sine), start, stop - 1
            position += 1
            continue
        # Join the neighbour across the smaller gap; what cannot be joined any more has no bound.
        above = _gap_above(evidence, start) if position > 0 else np.inf
        below = _gap_below(evidence, upper, stop) if position + 1 < len(groups) else np.inf
        if min(above, below) == np.inf:
            position += 1
        elif above < below:
            groups[position - 1 : position + 1] = [(groups[position - 1][0], stop)]
            position -= 1
        else:
            groups[position : position + 2] = [(start, groups[position + 1][1])]
    return Angles(bound, first, last)


def _gap_above(evidence: Evidence, start: int) -> float:
    """Proved distance of squares between θ_a and the true value before it."""
    if start == 0:
        return float("inf")
    low = max(evidence.theta[start - 1] - evidence.value_rounding, 0.0)
    return float(low**2 - (evidence.theta[start] + evidence.value_rounding) ** 2)


def _gap_below(evidence: Evidence, upper: np.ndarray, stop: int) -> float:
    """Proved distance of squares between θ_b and the true value after it."""
    low = max(evidence.theta[stop - 1] - evidence.value_rounding, 0.0)
    return float(low**2 - upper[stop] ** 2)


def _sine(evidence: Evidence, upper: np.ndarray, start: int, stop: int) -> float:
    """Bound of the sine of the largest angle of components start … stop, the better of residuals and whole spectrum."""
    theta = evidence.theta[stop - 1]
    sine = float("inf")
    gap = min(_gap_above(evidence, start), _gap_below(evidence, upper, stop))
    if gap > 0 and theta > 0:
        residual = evidence.block_residual(start, stop)
        sine = residual * max(1.0, evidence.missed / theta) / gap + evidence.value_rounding / theta
    whole = evidence.whole
    if whole is not None and np.isfinite(whole.vector_error) and theta > 0:
        error = whole.vector_error
        values = np.concatenate([[np.inf], whole.value, [0.0]])
        distance = min(values[start] - values[start + 1], values[stop] - values[stop + 1]) - 2 * error
        if distance > 0:
            # Wedin, BIT 12 (1972): once for the fold, once for the Rayleigh–Ritz step on its vectors; left vectors are
            # Y/θ.
            sine = min(sine, 2 * np.sqrt(2) * error / distance + evidence.value_rounding / theta)
    return float(sine)

"""Intervals: by value, which distinct singular values can be matched with, or by index; and the choice between them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bigsvd.certify.evidence import Evidence

# A component counts as in the bulk only while its interval is narrower than this share of its value.
BULK_WIDTH = 0.3


@dataclass(frozen=True, eq=False)
class Intervals:
    """Intervals of the k leading components.

    Attributes
    ----------
    lower, upper : ndarray, shape (k,)
    proved : int
        The first so many intervals are about σ_i itself; the others hold distinct singular values, one each.
    """

    lower: np.ndarray
    upper: np.ndarray
    proved: int


@dataclass
class _Group:
    """Consecutive components whose intervals overlap, and their joint half-width."""

    first: int
    stop: int
    half: float


def choose_intervals(
    evidence: Evidence, upper: np.ndarray, rank: int, tolerance: float, complete: int = 0
) -> Intervals:
    """Report the first g components by index and the rest by value, for the g that says most.

    By index: θ_i ≤ σ_i ≤ u_i, from `order.upper_ends`; holds for every i, but may be wide. By value: the singular
    values of A can be matched with the Ritz values of any set of components within its joint ‖R‖/√2 (Kahan, Parlett and
    Jiang, SIAM J. Numer. Anal. 19 (1982), on the dilation of A); components whose intervals overlap are joined until
    the groups are disjoint, so that each group holds as many distinct singular values. Both may be mixed where every
    interval by value ends below θ_g: the values it holds are then none of the first g.

    Parameters
    ----------
    evidence : Evidence
    upper : ndarray, shape (L + 1,)
        Upper ends by index.
    rank : int
    tolerance : float
        Decides which choice says most: most components within it, then most narrow enough for the bulk, then the
        narrowest.
    complete : int
        Components before the last proved gap; they are always reported by index.

    Returns
    -------
    Intervals
    """
    theta = evidence.theta[:rank]
    # Relative widths only rank the choices; a value of zero must not overflow them.
    floor = np.maximum(theta, max(float(theta[0]) if rank else 0.0, 1e-150) * 1e-30)
    complete = min(complete, rank)
    lower, top = _index_intervals(evidence, upper, rank)
    _narrow_by_value(evidence, upper, complete, top)
    index_width = np.minimum((top - lower) / floor, 1e9)
    best_key, best = _merit(index_width, tolerance, rank), rank
    groups: list[_Group] = []
    best_groups: list[_Group] = []
    value_width = np.full(rank, 1e9)
    for g in range(rank - 1, complete - 1, -1):
        _add_component(evidence, groups, g)
        joined = groups[-1]
        value_width[joined.first : joined.stop] = np.minimum(2 * joined.half / floor[joined.first : joined.stop], 1e9)
        above_zero = all(theta[group.stop - 1] > group.half for group in groups)
        apart = g == 0 or theta[joined.first] + joined.half < theta[g - 1] - evidence.value_rounding
        if not (above_zero and apart):
            continue
        key = _merit(np.concatenate([index_width[:g], value_width[g:]]), tolerance, g)
        if key > best_key:
            best_key, best, best_groups = key, g, [_Group(group.first, group.stop, group.half) for group in groups]
    for group in best_groups:
        members = slice(group.first, group.stop)
        lower[members], top[members] = theta[members] - group.half, theta[members] + group.half
    return Intervals(lower, top, best)


def _narrow_by_value(evidence: Evidence, upper: np.ndarray, complete: int, top: np.ndarray) -> None:
    """Let intervals by value narrow those by index where both are about the same values.

    Where all groups of the first g components end above u_{g+1}, the g distinct values they hold are σ_1 … σ_g.
    """
    groups: list[_Group] = []
    for component in range(complete - 1, -1, -1):
        _add_component(evidence, groups, component)
    if all(evidence.theta[group.stop - 1] - group.half > upper[complete] for group in groups):
        for group in groups:
            members = slice(group.first, group.stop)
            top[members] = np.minimum(top[members], evidence.theta[members] + group.half)


def _index_intervals(evidence: Evidence, upper: np.ndarray, rank: int) -> tuple[np.ndarray, np.ndarray]:
    """Intervals by index, narrowed by a whole spectrum where one was computed."""
    lower = np.maximum(evidence.theta[:rank] - evidence.value_rounding, 0.0)
    top = np.maximum(upper[:rank], evidence.theta[:rank])
    if evidence.whole is not None:
        value, error = evidence.whole.value[:rank], evidence.whole.error[:rank]
        top = np.maximum(np.minimum(top, value + error), evidence.theta[:rank])
        lower = np.minimum(np.maximum(lower, value - error), evidence.theta[:rank])
    return lower, top


def _merit(widths: np.ndarray, tolerance: float, proved: int) -> tuple[int, int, float, int]:
    """What a choice says: components resolved, narrow enough for the bulk, total width of the rest, order proved."""
    resolved = widths <= tolerance
    loose = widths[~resolved]
    return int(resolved.sum()), int((widths <= BULK_WIDTH).sum()), -float(np.minimum(loose, 2.0).sum().round(6)), proved


def _add_component(evidence: Evidence, groups: list[_Group], component: int) -> None:
    """Add the next larger component to the disjoint groups below it, joining what overlaps."""
    groups.append(_Group(component, component + 1, _half_width(evidence, component, component + 1)))
    theta = evidence.theta
    while len(groups) > 1:
        upper, below = groups[-1], groups[-2]
        if theta[upper.stop - 1] - upper.half > theta[below.first] + below.half:
            return
        groups[-2:] = [_Group(upper.first, below.stop, _half_width(evidence, upper.first, below.stop))]


def _half_width(evidence: Evidence, first: int, stop: int) -> float:
    """‖R_G‖/√2 for the residuals R = SΘ⁻¹ of a group, and rounding."""
    theta = evidence.theta[first:stop]
    if theta[-1] <= 0:
        return float("inf")
    scaled = evidence.residual_gram[first:stop, first:stop] / np.outer(theta, theta)
    exact = np.sqrt(max(0.0, float(np.linalg.eigvalsh(scaled)[-1])))
    rounding = float(np.linalg.norm(evidence.product_rounding[first:stop] / theta))
    return float((exact + rounding) / np.sqrt(2)) + evidence.value_rounding

"""From evidence to certificate: states, verdict and words."""

from __future__ import annotations

import numpy as np

from bigsvd.certify.angles import bound_angles
from bigsvd.certify.certificate import Certificate
from bigsvd.certify.evidence import Evidence
from bigsvd.certify.intervals import BULK_WIDTH, choose_intervals
from bigsvd.certify.order import upper_ends

# Neighbours q places further on within this ratio show crowding (1.03 in a flat bulk, 1.4 for 1/√i, 2 for 1/i).
CROWD_RATIO = 0.9
RESOLVED, OPEN, BULK = range(3)


def certify(evidence: Evidence, rank: int, reach: int, tolerance: float, *, strict: bool) -> Certificate:
    """State what is known of the leading components.

    Parameters
    ----------
    evidence : Evidence
    rank : int
        Components k.
    reach : int
        How far ahead crowding is looked for, q.
    tolerance : float
        Wanted width of the intervals, relative to the value.
    strict : bool
        Whether the bulk counts as unmet.

    Returns
    -------
    Certificate
    """
    theta = evidence.theta
    upper = evidence.ends if evidence.ends is not None else upper_ends(evidence)
    # An interval by index may be so wide that a missed direction fits into it. The order is proved up to the last
    # proved gap, above which nothing else lies; beyond it only where the interval itself is within the tolerance.
    gaps = np.flatnonzero(upper[1:] < theta - evidence.value_rounding)
    complete = int(gaps[-1]) + 1 if len(gaps) else 0
    intervals = choose_intervals(evidence, upper, rank, tolerance, complete)
    value = theta[:rank].copy()
    noise = _noise_floor(evidence)
    null = value <= noise
    value[null] = 0.0
    lower = np.where(null, 0.0, np.minimum(intervals.lower, value))
    top = np.maximum(intervals.upper, value)
    scale = theta[0] if len(theta) and theta[0] > 0 else 1.0
    relative = np.where(null, top / scale, (top - lower) / np.where(null, 1.0, np.maximum(value, np.finfo(float).tiny)))
    state = np.full(rank, OPEN, np.int8)
    state[crowded(theta, rank, reach) & ~null & (relative <= BULK_WIDTH)] = BULK
    state[relative <= tolerance] = RESOLVED
    angles = bound_angles(evidence, upper, rank)
    angles.bound[null] = np.nan
    norms = evidence.residual_norms[:rank]
    residual = norms / np.where(null, scale, value)
    captured = float(np.sum(value**2))
    share = min(1.0, captured / evidence.energy) if evidence.energy > 0 else 1.0
    met = not np.any(state == OPEN) and not (strict and np.any(state == BULK))
    proved = (np.arange(rank) < complete) | ((np.arange(rank) < intervals.proved) & (relative <= tolerance))
    return Certificate(
        value=value,
        lower=lower,
        upper=top,
        residual=residual,
        state=state,
        index_proved=proved,
        angle_bound=angles.bound,
        tied_first=angles.first,
        tied_last=angles.last,
        null=null,
        below_noise=~null & (value <= evidence.value_rounding),
        missed_bound=float(evidence.missed),
        missed_how=evidence.missed_how,
        failure_probability=evidence.failure_probability,
        rounding=_largest_rounding(evidence, ~null & (value > evidence.value_rounding)),
        rounding_how=evidence.rounding_how,
        captured_share=share,
        total_energy=evidence.energy,
        tolerance=tolerance,
        strict=strict,
        tolerance_met=met,
        verdict=_words(state, null, relative, proved, tolerance, strict=strict),
    )


def crowded(theta: np.ndarray, rank: int, reach: int) -> np.ndarray:
    """Whether each of the leading values has a neighbour `reach` places further on within a tenth, shape (rank,)."""
    return np.array([i + reach < len(theta) and theta[i + reach] >= CROWD_RATIO * theta[i] for i in range(rank)], bool)


def _noise_floor(evidence: Evidence) -> float:
    """What a value drowns in: the rounding of an orthogonal factorisation, ε·‖A‖_F and a little; in single as measured.

    The worst-case terms of the intervals are far larger: values between both are kept, with intervals that reach zero.
    """
    if evidence.rounding_how == "measured":
        return evidence.value_rounding
    return float(8 * np.finfo(float).eps * np.sqrt(len(evidence.theta) * evidence.energy))


def _largest_rounding(evidence: Evidence, which: np.ndarray) -> float:
    """Largest rounding term in the residuals of the chosen components."""
    rank = len(which)
    terms = evidence.product_rounding[:rank][which] / evidence.theta[:rank][which]
    return float(max(evidence.value_rounding, np.max(terms, initial=0.0)))


def spectrum_intervals(evidence: Evidence) -> tuple[np.ndarray, np.ndarray]:
    """Ends by index of all computed values, shape (L,) each."""
    lower = np.maximum(evidence.theta - evidence.value_rounding, 0.0)
    upper = (evidence.ends if evidence.ends is not None else upper_ends(evidence))[:-1]
    return lower, np.maximum(upper, evidence.theta)


def rounding_limited(evidence: Evidence, certificate: Certificate) -> bool:
    """Whether every open component is wide by little else than rounding, so that more sweeps would not help."""
    waiting = certificate.state == OPEN
    if certificate.strict:
        waiting |= certificate.state == BULK
    rank = certificate.rank
    # A value of zero is limited by rounding whatever the tolerance; 1e-150 stands for it without overflow.
    theta = np.maximum(evidence.theta[:rank], 1e-150)
    floor = 2 * (evidence.product_rounding[:rank] / theta / np.sqrt(2) + evidence.value_rounding) / theta
    width = (certificate.upper - certificate.lower) / theta
    return bool(
        np.any(waiting) and np.all((floor > certificate.tolerance)[waiting]) and np.all((width <= 2 * floor)[waiting])
    )


def _words(
    state: np.ndarray, null: np.ndarray, relative: np.ndarray, proved: np.ndarray, tolerance: float, *, strict: bool
) -> str:
    """Say it in a sentence or two."""
    rank = len(state)
    counts = [int(np.sum(state == code)) for code in (RESOLVED, OPEN, BULK)]
    parts = [f"{counts[0]} of {rank} components resolved to {tolerance:g}"]
    if counts[2]:
        widest = float(relative[state == BULK].max())
        which = "lie" if counts[2] > 1 else "lies"
        parts.append(
            f"{counts[2]} {which} in the bulk, values known to {_percent(widest)}, vectors not to be read singly"
        )
    if counts[1]:
        widest = float(relative[state == OPEN].max())
        parts.append(f"{counts[1]} open, values known to {_percent(widest)}" if widest < 1 else f"{counts[1]} open")
    if np.any(null):
        parts.append(f"{int(null.sum())} zero to rounding")
    number = int(proved.sum())
    if number == rank:
        parts.append("order proved for all")
    else:
        which = f"the first {number}" if np.all(proved[:number]) else f"{number}"
        parts.append(f"order proved for {which}" if number else "order not proved")
    ending = " (strict: the bulk counts as unmet)" if strict and counts[2] else ""
    return "; ".join(parts) + ending


def _percent(share: float) -> str:
    """A relative width as people say it."""
    return f"{100 * share:.2g} %" if share >= 1e-4 else f"{share:.1e}"

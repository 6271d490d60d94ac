"""Upper ends by index: how large σ_i can be, given the residuals and the bound on what was missed."""

from __future__ import annotations

import numpy as np

from bigsvd.certify.evidence import Evidence

# Spectral norms of the trailing residuals are computed at this many places; between them the last one bounds.
_PLACES = 48


def upper_ends(evidence: Evidence, earlier: np.ndarray | None = None, own: np.ndarray | None = None) -> np.ndarray:
    """Upper ends by index from everything that is known: this basis, a whole spectrum, earlier sweeps.

    Parameters
    ----------
    evidence : Evidence
    earlier : ndarray, shape (any,), or None
        Ends proved with earlier bases. They are facts about A, and stay true when the basis is restarted.
    own : ndarray, shape (L + 1,), or None
        `index_bounds` of this evidence, where they were computed already.

    Returns
    -------
    ndarray, shape (L + 1,)
        u with σ_{i+1} ≤ u[i].
    """
    upper = index_bounds(evidence) if own is None else own.copy()
    known = [] if evidence.whole is None else [evidence.whole.value + evidence.whole.error]
    if earlier is not None:
        known.append(earlier)
    for ends in known:
        count = min(len(ends), len(upper))
        upper[:count] = np.minimum(upper[:count], ends[:count])
    # Singular values decrease, so an end bounds all that follow.
    return np.minimum.accumulate(upper)


def index_bounds(evidence: Evidence) -> np.ndarray:
    """Upper bounds of the singular values by index; the lower bound of σ_i is θ_i (interlacing).

    Let c_g bound AᴴA on the orthogonal complement of the first g Ritz vectors. Then σ_{g+1}² ≤ c_g (Courant–Fischer),
    and

        c_L = β²
        c_{i−1} = min over g ≥ i of  λ_max [[θ_i², t], [t, c_g]],   t = ‖S restricted to columns i … g‖

    because AᴴA on the complement of the first i − 1 Ritz vectors is [[Θ²_{i…g}, Sᴴ], [S, C_g]] in an orthonormal basis
    that starts with Ritz vectors i … g. Where a gap is proved (c_g < θ_i²) the bound is quadratic in t.

    Parameters
    ----------
    evidence : Evidence

    Returns
    -------
    ndarray, shape (L + 1,)
        u with σ_{i+1} ≤ u[i] (indices from 0): u[g] bounds everything after the first g.

    Notes
    -----
    Cost: O(L²) and 48 symmetric eigenproblems of order at most L. Proof and reasons: docs/method.md.
    """
    theta_squared = (evidence.theta + evidence.value_rounding) ** 2
    width = len(theta_squared)
    norms = evidence.residual_norms
    running = np.concatenate([[0.0], np.cumsum(norms**2)])
    tail = _tail_norms(evidence, width)
    bound = np.empty(width + 1)
    bound[width] = evidence.missed**2
    for i in range(width - 1, -1, -1):
        # Frobenius norms of columns i … g bound their spectral norms; for the whole tail the spectral norm is known.
        coupling = np.sqrt(np.maximum(running[i + 1 :] - running[i], 0.0))
        coupling[-1] = min(coupling[-1], tail[i])
        rest = bound[i + 1 :]
        half = (theta_squared[i] - rest) / 2
        bound[i] = ((theta_squared[i] + rest) / 2 + np.hypot(half, coupling)).min()
    return np.sqrt(bound) * (1 + 1e-15)


def _tail_norms(evidence: Evidence, width: int) -> np.ndarray:
    """Bounds of ‖S restricted to columns i …‖₂ for every i; decreasing in i."""
    places = np.unique(np.linspace(0, width - 1, min(width, _PLACES)).astype(int)) if width else np.zeros(0, int)
    known = {int(place): evidence.block_residual(int(place), width) for place in places}
    tail = np.empty(width)
    last = np.inf
    for i in range(width):
        last = known.get(i, last)
        tail[i] = last
    return tail

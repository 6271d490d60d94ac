"""How large a singular value can hide outside the basis: powers of AᴴA on Gaussian vectors independent of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

# Each chain may fail with this probability; a run uses at most nine, so the total stays at 1e-9 or below.
CHAIN_FAILURE = 1e-10


@dataclass(frozen=True)
class ChainState:
    """What the bound needs of a chain of test vectors.

    Attributes
    ----------
    power : int
        s, how often (I−P)AᴴA was applied.
    log_norm : float
        Logarithm of ‖T_s‖₂ of the block T_s = ((I−P)AᴴA)^s (I−P)Ω.
    lost : float
        Spectral norm of all that was lost on the way (rounding, directions that did not fit in the basis), carried to
        T_s, relative to ‖T_s‖₂.
    vectors : int
        Columns r of Ω.
    complex_entries : bool
    shrink : float
        Smallest factor by which the entries of Ω were scaled (1 where they were not).
    """

    power: int
    log_norm: float
    lost: float
    vectors: int
    complex_entries: bool
    shrink: float = 1.0


def chain_bound(state: ChainState) -> float:
    """Bound ‖A(I−P)‖ with probability 1 − 1e-10, at all powers of the chain at once.

    With v the leading right singular vector of A(I−P) and σ its singular value, vᴴT_s = σ^{2s} vᴴΩ, so σ^{2s}‖vᴴΩ‖ ≤
    ‖T_s‖₂. v does not depend on Ω, hence ‖vᴴΩ‖² follows the chi-square law with r degrees of freedom (complex: half
    that of 2r), and falls below its 1e-10 quantile x with probability 1e-10. That is one event for all s:

        σ ≤ (‖T_s‖₂ / √x)^{1/2s}

    Parameters
    ----------
    state : ChainState

    Returns
    -------
    float
        Infinite before the first power.
    """
    if state.power == 0 or state.vectors == 0:
        return float("inf")
    quantile = least_projection(state.vectors, state.complex_entries) * state.shrink
    if state.log_norm == -np.inf:
        return 0.0
    exponent = (state.log_norm + np.log1p(state.lost) - np.log(quantile)) / (2 * state.power)
    # The factor covers the rounding of the root itself.
    return float(np.exp(exponent) * (1 + 1e-13))


def least_projection(vectors: int, complex_entries: bool) -> float:
    """Norm of vᴴΩ that a unit vector falls below with probability 1e-10."""
    from scipy.special import gammaincinv

    freedom = 2 * vectors if complex_entries else vectors
    quantile = 2.0 * gammaincinv(freedom / 2, CHAIN_FAILURE)
    return float(np.sqrt(quantile / 2 if complex_entries else quantile))


def energy_bound(energy: float, theta: np.ndarray, energy_rounding: float, value_rounding: float) -> float:
    """Bound ‖A(I−P)‖ by the energy that the Ritz values leave, with rounding: deterministic.

    β² ≤ ‖A‖²_F − Σθ_i² for AV = UΘ with V orthonormal (Pythagoras).
    """
    captured = np.maximum(theta - value_rounding, 0.0)
    left = energy - float(np.sum(captured**2)) + energy_rounding
    return float(np.sqrt(max(0.0, left)))

"""What a sweep leaves behind for the certificate: Ritz values, residuals, bounds and rounding terms."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, eq=False)
class WholeSpectrum:
    """Values of a route that computed all singular values, each within `error` of the true one of the same index.

    Attributes
    ----------
    value : ndarray, shape (min(m, n) or fewer,)
    error : ndarray, shape like value
        Bound of |value_i − σ_i|: Weyl's theorem on the backward error of the QR fold or of the Gram sums.
    vector_error : float
        Backward error that bounds angles, relative to gaps of singular values; infinite where it is a Gram error.
    """

    value: np.ndarray
    error: np.ndarray
    vector_error: float


@dataclass(frozen=True, eq=False)
class Evidence:
    """One Rayleigh–Ritz step AV = UΘ on an orthonormal basis, V spanning it.

    Attributes
    ----------
    theta : ndarray, shape (L,)
        Ritz values, decreasing.
    residual_gram : ndarray, shape (L, L)
        SᴴS for S = AᴴA V − V Θ², the residuals before division by θ.
    value_rounding : float
        Bound of the rounding error of θ.
    product_rounding : ndarray, shape (L,)
        Bound of the rounding error of ‖S_i‖.
    rounding_how : str
        ``proved`` or ``measured``.
    missed : float
        Bound β of ‖A(I − VVᴴ)‖.
    missed_how : str
    failure_probability : float
        Probability that β is wrong.
    energy : float
        ‖A‖²_F.
    whole : WholeSpectrum or None
    ends : ndarray, shape (L + 1,), or None
        Upper ends by index where they are known already (`order.upper_ends`, and what earlier sweeps proved).
    """

    theta: np.ndarray
    residual_gram: np.ndarray
    value_rounding: float
    product_rounding: np.ndarray
    rounding_how: str
    missed: float
    missed_how: str
    failure_probability: float
    energy: float
    whole: WholeSpectrum | None = None
    ends: np.ndarray | None = None

    @property
    def residual_norms(self) -> np.ndarray:
        """‖S_i‖ with its rounding term, shape (L,)."""
        diagonal = np.clip(np.diag(self.residual_gram).real, 0, None)
        return np.sqrt(diagonal) + self.product_rounding

    def block_residual(self, first: int, stop: int) -> float:
        """‖S restricted to columns first … stop‖₂ with its rounding term."""
        if first >= stop:
            return 0.0
        block = self.residual_gram[first:stop, first:stop]
        exact = float(np.sqrt(max(0.0, np.linalg.eigvalsh(block)[-1]))) if stop - first > 1 else 0.0
        if stop - first == 1:
            exact = float(np.sqrt(max(0.0, block[0, 0].real)))
        return exact + float(np.linalg.norm(self.product_rounding[first:stop]))

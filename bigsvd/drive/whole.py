"""The sweep of the routes that compute the whole spectrum, and what it proves."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bigsvd.certify import WholeSpectrum, fold_rounding, gamma, gram_rounding
from bigsvd.drive.sweeps import Sweeps
from bigsvd.solve import correct_gram, from_gram, from_triangle
from bigsvd.sweep import mirror

# Below this ratio of the last wanted to the first value, a Gram matrix has lost half the figures: fold instead.
GRAM_RATIO = 1e-6


@dataclass(frozen=True, eq=False)
class WholeSweep:
    """All singular values with their errors, right vectors, and a bound for what follows any of them.

    Attributes
    ----------
    spectrum : WholeSpectrum
    vectors : ndarray, shape (across, across)
    square_error : float
        Bound of the error of AᴴA, where the values come from it; 0 where they come from a fold.
    """

    spectrum: WholeSpectrum
    vectors: np.ndarray
    square_error: float

    def missed(self, width: int) -> float:
        """Bound of ‖A(I − VVᴴ)‖ for the leading `width` vectors."""
        value = self.spectrum.value
        if width >= len(value):
            return float(np.sqrt(2 * self.square_error)) if self.square_error else float(self.spectrum.error[-1])
        if self.square_error:
            return float(np.sqrt(value[width] ** 2 + 2 * self.square_error))
        return float(value[width] + 2 * self.spectrum.error[width])


def sweep_gram(sweeps: Sweeps) -> WholeSweep:
    """Build AᴴA in double in one sweep and solve it."""
    sums, learnt = sweeps.sweep("gram", None)
    assert sums.gram is not None
    across = sweeps.plan.geometry.across
    error = gram_rounding(sweeps.depth(across), float(np.sqrt(sums.energy)))
    gram = sums.gram
    mirror(gram)
    if learnt is not None:
        gram = correct_gram(gram, learnt, sums.lines, centred=sweeps.ones)
        if learnt.column_scale is not None:
            error /= float(learnt.column_scale.min()) ** 2
    value, vectors = from_gram(gram)
    error += gamma(10.0 * across) * float(value[0]) ** 2
    # |a² − b²| ≤ e gives |a − b| ≤ min(e/a, √e).
    errors = error / np.maximum(value, np.sqrt(error)) if error > 0 else np.zeros(len(value))
    return WholeSweep(WholeSpectrum(value, errors, float("inf")), vectors, error)


def sweep_fold(sweeps: Sweeps) -> WholeSweep:
    """Fold the matrix itself by Householder QR in one sweep, and solve the triangle."""
    sums, learnt = sweeps.sweep("fold", None)
    assert sums.triangle is not None
    error = fold_rounding(sweeps.depth(sums.triangle.shape[0]), float(np.sqrt(sums.energy)))
    if learnt is not None and learnt.column_scale is not None:
        error /= float(learnt.column_scale.min())
    value, vectors = from_triangle(sums.triangle, learnt, centred=sweeps.ones)
    error += gamma(10.0 * sweeps.plan.geometry.across) * float(value[0])
    return WholeSweep(WholeSpectrum(value, np.full(len(value), error), error), vectors, 0.0)


def gram_is_enough(whole: WholeSweep, rank: int) -> bool:
    """Whether the wanted values of a Gram matrix still have half their figures."""
    value = whole.spectrum.value
    return bool(value[min(rank, len(value)) - 1] >= GRAM_RATIO * value[0])

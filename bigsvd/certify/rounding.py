"""Rounding terms of a sweep: worst case in double, measured in single.

Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed. (2002), chapters 3 and 19.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

UNIT_ROUNDOFF = 2.0**-53
# Measured rounding is multiplied by this before it enters a bound.
MEASURED_FACTOR = 10.0


@dataclass(frozen=True)
class SumDepth:
    """How sums of a sweep are nested.

    Attributes
    ----------
    across : int
        Terms of each entry of Y = AB.
    unit_lines : int
        Terms of a product inside a unit.
    additions : int
        Longest chain of additions of partial products.
    fold_rows, fold_columns : int
        Lines that one segment folds, and columns folded.
    folds_within : int
        Folds by products in which it does so.
    folds : int
        Triangles folded upon each other after that.
    complex_entries : bool
    """

    across: int
    unit_lines: int
    additions: int
    fold_rows: int
    fold_columns: int
    folds_within: int
    folds: int
    complex_entries: bool


def gamma(terms: float, *, complex_entries: bool = False) -> float:
    """γ_N = Nu/(1−Nu); for complex dot products √2·γ_{2N} (math: two real sums of 2N terms)."""
    count = 2.0 * terms if complex_entries else terms
    return float((np.sqrt(2.0) if complex_entries else 1.0) * count * UNIT_ROUNDOFF / (1 - count * UNIT_ROUNDOFF))


def tall_rounding(depth: SumDepth, frobenius: float, width: int) -> float:
    """Bound ‖ΔY‖_F of the rounding of Y = AB: γ‖A‖_F‖B‖_F, with ‖B‖_F = √width."""
    return gamma(depth.across + 4, complex_entries=depth.complex_entries) * frobenius * float(np.sqrt(width))


def triangle_rounding(depth: SumDepth, norm: float) -> float:
    """Bound of the error of the singular values of R, ‖R‖_F = norm: the chain of folds, and its own decomposition.

    Column by column a fold by reflections errs by γ̃_{rows·columns}‖y‖ (Higham, Theorem 19.4), summed over the chain;
    one by products by γ_{columns·(rows + 5·columns)}.
    """
    rows = depth.fold_rows + 5.0 * depth.fold_columns * depth.folds_within + 2.0 * depth.fold_columns * depth.folds
    return gamma(depth.fold_columns * (rows + 10.0), complex_entries=depth.complex_entries) * norm


def product_rounding(depth: SumDepth, frobenius: float, tall_norms: np.ndarray) -> np.ndarray:
    """Bound of the error of each column of Z = AᴴY: its own sums, and the rounding of Y carried along.

    Parameters
    ----------
    depth : SumDepth
    frobenius : float
        ‖A‖_F of the matrix as it was multiplied.
    tall_norms : ndarray, shape (width,)
        ‖y_i‖.
    """
    own = gamma(depth.unit_lines + depth.additions + 4, complex_entries=depth.complex_entries)
    carried = gamma(depth.across + 4, complex_entries=depth.complex_entries)
    return own * frobenius * tall_norms + carried * frobenius**2


def fold_rounding(depth: SumDepth, frobenius: float) -> float:
    """Backward error ‖E‖ of folding A itself."""
    rows = depth.fold_rows + 2.0 * depth.fold_columns * depth.folds
    return (
        gamma(depth.fold_columns * rows, complex_entries=depth.complex_entries) * frobenius
        + 4 * UNIT_ROUNDOFF * frobenius
    )


def gram_rounding(depth: SumDepth, frobenius: float) -> float:
    """Bound ‖E‖ of the error of AᴴA built by sums."""
    return gamma(depth.unit_lines + depth.additions + 6, complex_entries=depth.complex_entries) * frobenius**2


def measured_rounding(samples: np.ndarray, units: int) -> tuple[float, np.ndarray]:
    """Rounding of Y and Z of a whole sweep in single, from units recomputed in double.

    Parameters
    ----------
    samples : ndarray, shape (3, width)
        Units sampled, Σ‖ΔY_u‖² and Σ‖ΔZ_u‖² per column.
    units : int
        Units of the whole sweep.

    Returns
    -------
    tall : float
        Estimate of ‖ΔY‖_F over all columns, times ten.
    product : ndarray, shape (width,)
        Estimate of ‖ΔZ_i‖, times ten; never less than if all units erred in the same direction.
    """
    count = float(samples[0].max())
    if count == 0:
        return float("inf"), np.full(samples.shape[1], np.inf)
    tall = MEASURED_FACTOR * float(np.sqrt(samples[1].sum() * units / count))
    each = np.sqrt(samples[2] / count)
    return tall, np.maximum(MEASURED_FACTOR * np.sqrt(units), units) * each

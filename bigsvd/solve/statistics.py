"""What the first sweep learns of means and deviations, and how its sums are corrected for them exactly."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from bigsvd.prepare import Preparation, absent_per_column, add_up, pieces
from bigsvd.sweep import Partial

if TYPE_CHECKING:
    from scipy.sparse import csr_array

# Residuals enter as fourth powers of singular values, and squares of those are summed.
ENERGY_RANGE = (1e-100, 1e100)


def in_range(energy: float) -> bool:
    """Whether powers of the singular values of a matrix of this energy stay within double precision."""
    return energy == 0 or ENERGY_RANGE[0] < energy < ENERGY_RANGE[1]


@dataclass(frozen=True, eq=False)
class Learnt:
    """Statistics of features that lie across the sweep.

    Attributes
    ----------
    offset : ndarray, shape (across,)
        What is left of the mean after the shift, in prepared units: δ.
    mean : ndarray, shape (across,)
        Mean in units of the file.
    column_scale : ndarray, shape (across,), or None
        Factors between the coordinates of the sweep and those of the prepared matrix: D/D₀; None where they are one.
    inverse_scale : ndarray, shape (across,), or None
        One over the standard deviation, in units of the file; one for constant features.
    constant : int
        Constant features.
    energy : float
        ‖A‖²_F of the prepared matrix.
    swept_energy : float
        ‖Ã‖²_F of what was multiplied; rounding terms rest on it.
    """

    offset: np.ndarray
    mean: np.ndarray
    column_scale: np.ndarray | None
    inverse_scale: np.ndarray | None
    constant: int
    energy: float
    swept_energy: float


def first_statistics(lines: np.ndarray | csr_array, preparation: Preparation, work: np.dtype) -> Preparation:
    """Take a first mean and first scales from some lines.

    Parameters
    ----------
    lines : ndarray or csr_array, shape (lines, across)
        As stored.
    preparation : Preparation
    work : numpy.dtype
        Working precision, in which the shift is to be representable.

    Returns
    -------
    Preparation
        Unchanged where the lines are not finite: the sweep will say so, with places.
    """
    wide = np.dtype(np.complex128 if lines.dtype.kind == "c" else np.float64)
    with np.errstate(all="ignore"):
        mean = np.asarray(lines.mean(axis=0, dtype=wide))
        if not np.all(np.isfinite(mean)):
            return preparation
        squares = np.zeros(len(mean))
        if preparation.scale and isinstance(lines, np.ndarray):
            for line in lines:
                squares += np.abs(line - mean) ** 2
        elif preparation.scale and not isinstance(lines, np.ndarray):
            for first, stop in pieces(lines.indptr):
                stored = slice(int(lines.indptr[first]), int(lines.indptr[stop]))
                places = lines.indices[stored]
                squares += add_up(places, np.abs(lines.data[stored] - mean[places]) ** 2, len(mean))
            squares += absent_per_column(lines) * np.abs(mean) ** 2
    return shift_and_scale(mean, squares / lines.shape[0], preparation, work)


def shift_and_scale(mean: np.ndarray, variance: np.ndarray, preparation: Preparation, work: np.dtype) -> Preparation:
    """Preparation with shift and scales representable in `work`, scales where they can be told from rounding.

    The sweep multiplies by scales rounded to `work`; others than these would enter the deviations that it learns.
    """
    inverse = None
    if preparation.scale:
        spread = np.sqrt(np.clip(variance, 0.0, None))
        # A feature that is constant in the sample says nothing of its scale.
        safe = (spread > 1e-6 * np.abs(mean)) & np.isfinite(spread) & (spread > 0)
        inverse = (1.0 / np.where(safe, spread, 1.0)).astype(np.empty(0, work).real.dtype).astype(np.float64)
        inverse = np.where(safe & np.isfinite(inverse) & (inverse > 0), inverse, 1.0)
    return preparation.learnt(mean, inverse, work)


def learn(sums: Partial, preparation: Preparation) -> Learnt:
    """Work out the statistics from the sums of a sweep whose features lie across it.

    Parameters
    ----------
    sums : Partial
    preparation : Preparation
        As it was used in the sweep.

    Notes
    -----
    ‖A‖² = ‖Ã‖² − m‖δ‖²; deviations from Σ|ã|² − m|δ|² about a shift near the mean. Constant means smallest = largest
    over the whole file, never a deviation of zero. With deviations scaled to one, the energy is exactly (m − 1) ×
    varying features.
    """
    lines = sums.lines
    across = _across(sums)
    offset = sums.line_sum / lines if sums.line_sum is not None else np.zeros(across)
    energy = sums.energy - lines * float(np.sum(np.abs(offset) ** 2)) if preparation.center else sums.energy
    before = preparation.inverse_scale if preparation.inverse_scale is not None else np.ones(across)
    shift = preparation.shift if preparation.shift is not None else np.zeros(across)
    about = preparation.about if preparation.about is not None else np.zeros(across)
    mean = shift + (about + offset) / before
    if not preparation.scale or sums.square_sum is None:
        return Learnt(offset, mean, None, preparation.inverse_scale, 0, max(energy, 0.0), sums.energy)
    assert sums.lowest is not None
    assert sums.highest is not None
    constant = sums.lowest == sums.highest
    if len(constant) == 2 * across:
        constant = constant[:across] & constant[across:]
    spread = np.sqrt(np.clip(sums.square_sum - lines * np.abs(offset) ** 2, 0.0, None) / max(1, lines - 1))
    scale = np.where(constant | (spread == 0), 1.0, spread)
    if preparation.center:
        energy = float((lines - 1) * np.sum(~constant))
    else:
        squares = lines * (np.abs(about + offset) ** 2 - np.abs(offset) ** 2) + sums.square_sum
        energy = float(np.sum(squares / scale**2))
    return Learnt(offset, mean, scale, before / scale, int(constant.sum()), energy, sums.energy)


def correct_products(
    products: np.ndarray, block: np.ndarray, learnt: Learnt, lines: int, *, centred: bool
) -> np.ndarray:
    """Turn Σ ÃᴴÃB into AᴴA B', in place: Z −= m·conj(δ)(δᵀB), then the change of scale.

    Parameters
    ----------
    products, block : ndarray, shape (across, b)
        `block` is overwritten with B' = (D/D₀)B, the same columns in the coordinates of the prepared matrix.
    learnt : Learnt
    lines : int
    centred : bool

    Returns
    -------
    ndarray, shape (across, b)
        The corrected products.
    """
    if centred:
        products -= lines * np.outer(learnt.offset.conj(), learnt.offset @ block)
    if learnt.column_scale is not None:
        products /= learnt.column_scale[:, None]
        block *= learnt.column_scale[:, None]
    return products


def correct_gram(gram: np.ndarray, learnt: Learnt, lines: int, *, centred: bool) -> np.ndarray:
    """Turn Σ ÃᴴÃ into AᴴA, in place."""
    if centred:
        gram -= lines * np.outer(learnt.offset.conj(), learnt.offset)
    if learnt.column_scale is not None:
        gram /= np.outer(learnt.column_scale, learnt.column_scale)
    return gram


def _across(sums: Partial) -> int:
    """Length of the statistics."""
    for array in (sums.line_sum, sums.square_sum):
        if array is not None:
            return len(array)
    for square in (sums.gram, sums.products, sums.triangle):
        if square is not None:
            return square.shape[1]
    return 0

"""Centring and scaling of sparse lines without filling in their zeros.

With S the stored lines, features across:  A = (S − 1μᵀ)D,  AB = S(DB) − 1(μᵀDB),  YᴴA = (YᴴS − (Yᴴ1)μᵀ)D.
Features that are lines:                   A = D(S − μ1ᵀ),  AB = D(SB − μ(1ᵀB)),   YᴴA = (DY)ᴴS − ((DY)ᴴμ)1ᵀ.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from bigsvd.prepare.preparation import LineStatistics, Preparation

if TYPE_CHECKING:
    from scipy.sparse import csr_array

# Nonzeros that are looked at together, or those of one line: temporary copies stay in the cache.
PIECE_NONZEROS = 2**17
_ROWS = 2048


@dataclass(frozen=True, eq=False)
class ImplicitBlock:
    """Columns as the stored entries are multiplied with them.

    Attributes
    ----------
    scaled : ndarray, shape (across, width), C-ordered
        DB in working precision; B itself where features are lines, or not scaled.
    constant : ndarray, shape (width,), or None
        In double: μᵀDB, what every line of the product has too much; 1ᵀB where features are lines; None for nothing.
    """

    scaled: np.ndarray
    constant: np.ndarray | None


def implicit_block(block: np.ndarray, preparation: Preparation, wide: np.dtype) -> ImplicitBlock:
    """Scale columns instead of entries, and multiply the mean once instead of with every line.

    Parameters
    ----------
    block : ndarray, shape (across, width)
        B in working precision.
    preparation : Preparation
    wide : numpy.dtype
        Double or complex double.
    """
    scaled = np.ascontiguousarray(block)
    if preparation.across_features and preparation.inverse_scale is not None:
        scaled = scaled * preparation.inverse_scale[:, None].astype(block.real.dtype)
    weights = preparation.shift if preparation.across_features else np.ones(len(block))
    if weights is None or not (preparation.across_features or preparation.center):
        return ImplicitBlock(scaled, None)
    # The rounded columns are what is multiplied, so they are what the mean is multiplied with.
    constant = np.zeros(block.shape[1], wide)
    for first in range(0, len(block), _ROWS):
        rows = slice(first, first + _ROWS)
        constant += weights[rows].astype(wide) @ scaled[rows].astype(wide)
    return ImplicitBlock(scaled, constant)


def pieces(pointers: np.ndarray, most: int | None = None) -> Iterator[tuple[int, int]]:
    """Yield runs (first, stop) of lines with at most so many nonzeros, or of one line.

    Parameters
    ----------
    pointers : ndarray, shape (lines + 1,)
        Where every line begins, and where the last ends.
    most : int or None
        None for as many as stay in the cache.
    """
    most = most or PIECE_NONZEROS
    first, lines = 0, len(pointers) - 1
    while first < lines:
        stop = int(np.searchsorted(pointers, int(pointers[first]) + most, side="right")) - 1
        stop = min(max(stop, first + 1), lines)
        yield first, stop
        first = stop


def add_up(places: np.ndarray, weights: np.ndarray, count: int) -> np.ndarray:
    """Sums of the weights at every place, in double; shape (count,)."""
    if weights.dtype.kind != "c":
        return np.bincount(places, weights, count)
    return np.bincount(places, weights.real, count) + 1j * np.bincount(places, weights.imag, count)


def absent_per_column(lines: csr_array) -> np.ndarray:
    """How many lines store nothing, by place across; shape (across,)."""
    count, across = lines.shape
    stored = np.zeros(across, np.int64)
    for first in range(0, lines.nnz, PIECE_NONZEROS):
        stored += np.bincount(lines.indices[first : first + PIECE_NONZEROS], minlength=across)
    return count - stored


def sparse_statistics(lines: csr_array, *, scale: bool) -> LineStatistics:
    """Mean and, where asked, standard deviation of every line, zeros counted, in double.

    The mean is taken twice, the second time of what the first leaves; both are one here, since they are subtracted from
    products, not from entries.

    Parameters
    ----------
    lines : csr_array, shape (lines, across)
        Entries as stored.
    scale : bool
        Whether deviations are wanted.
    """
    count, across = lines.shape
    wide = np.dtype(np.complex128 if lines.dtype.kind == "c" else np.float64)
    per_line = np.diff(lines.indptr).astype(np.int64)
    mean, rest, squares = np.zeros(count, wide), np.zeros(count, wide), np.zeros(count)
    for first, stop in pieces(lines.indptr):
        some = slice(int(lines.indptr[first]), int(lines.indptr[stop]))
        inside = np.repeat(np.arange(stop - first), per_line[first:stop])
        entries = lines.data[some].astype(wide)
        part = add_up(inside, entries, stop - first) / across
        zeros = across - per_line[first:stop]
        entries -= part[inside]
        left = (add_up(inside, entries, stop - first) - zeros * part) / across
        mean[first:stop], rest[first:stop] = part, left
        if scale:
            entries -= left[inside]
            squares[first:stop] = add_up(inside, np.abs(entries) ** 2, stop - first) + zeros * np.abs(part + left) ** 2
    constant, value = _constant_lines(lines, per_line)
    # The mean of equal numbers may differ from them by rounding.
    mean = np.where(constant, value.astype(wide), mean + rest)
    spread = np.sqrt(squares / max(1, across - 1))
    inverse = 1.0 / np.where(constant | (spread == 0), 1.0, spread)
    return LineStatistics(mean, np.zeros_like(mean), inverse, constant)


def _constant_lines(lines: csr_array, per_line: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Which lines hold one number only, zeros counted, and that number where they do."""
    full, some = per_line == lines.shape[1], per_line > 0
    starts = lines.indptr[:-1][some]
    value = np.zeros(len(per_line), lines.dtype)
    value[some] = lines.data[starts]
    constant = np.ones(len(per_line), bool)
    for part in (lines.data.real, lines.data.imag) if lines.dtype.kind == "c" else (lines.data,):
        if not len(starts):
            break
        low, high = np.minimum.reduceat(part, starts), np.maximum.reduceat(part, starts)
        constant[some] &= (low == high) & (full[some] | (low == 0))
    return constant, value

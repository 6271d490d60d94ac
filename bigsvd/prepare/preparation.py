"""Centring and scaling of features, as they are applied to a panel while it is read."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

# Deviations of lines are taken for about so many entries at a time.
_STATISTICS_ENTRIES = 2**18


@dataclass(frozen=True, eq=False)
class Preparation:
    """What is subtracted from and divided out of the lines of a panel.

    Features lie across the sweep when lines are samples; then `shift` and `inverse_scale` are vectors known
    beforehand (from a pilot, later exactly). Otherwise every line is a whole feature, and its statistics are its own.

    Attributes
    ----------
    across_features : bool
        Features lie across the sweep.
    center, scale : bool
    shift : ndarray, shape (across,), or None
        Subtracted from every line, in units of the file; None for zero.
    inverse_scale : ndarray, shape (across,), or None
        Multiplied into every line after the shift; None for one.
    about : ndarray, shape (across,), or None
        Features that are scaled but not centred: a first mean, in prepared units, about which squares are taken.
    """

    across_features: bool
    center: bool
    scale: bool
    shift: np.ndarray | None = None
    inverse_scale: np.ndarray | None = None
    about: np.ndarray | None = None

    @property
    def changes_nothing(self) -> bool:
        """Whether entries are used as they are stored, but for their type."""
        if self.across_features:
            return self.shift is None and self.inverse_scale is None
        return not (self.center or self.scale)

    def learnt(self, mean: np.ndarray, inverse_scale: np.ndarray | None, work: np.dtype) -> Preparation:
        """Return the same preparation with better statistics, the shift representable in the working precision.

        Parameters
        ----------
        mean : ndarray, shape (across,)
            In units of the file.
        inverse_scale : ndarray, shape (across,), or None
        work : numpy.dtype
        """
        if self.center:
            return replace(self, shift=mean.astype(work).astype(mean.dtype), inverse_scale=inverse_scale)
        about = mean * inverse_scale if inverse_scale is not None else mean
        return replace(self, inverse_scale=inverse_scale, about=about if self.scale else None)

    def about_mean(self) -> Preparation:
        """The same, with features that are scaled but not centred shifted by their first mean.

        The shift comes before the scale: of a large mean, scaled and rounded, the deviations would keep the rounding.
        """
        if self.about is None:
            return self
        mean = self.about if self.inverse_scale is None else self.about / self.inverse_scale
        return replace(self, shift=mean, about=None)


@dataclass(frozen=True, eq=False)
class LineStatistics:
    """Statistics of lines that are whole features.

    Attributes
    ----------
    mean, rest : ndarray, shape (lines,), double or complex double
        The mean as it can be stored, and what the lines keep of it once that is subtracted.
    inverse_scale : ndarray, shape (lines,), double
        One over the standard deviation (n − 1); one for constant lines.
    constant : ndarray of bool, shape (lines,)
        Lines whose smallest and largest entries are equal.
    """

    mean: np.ndarray
    rest: np.ndarray
    inverse_scale: np.ndarray
    constant: np.ndarray


def line_statistics(raw: np.ndarray, *, scale: bool, rest: bool = True) -> LineStatistics:
    """Mean and, where asked, standard deviation of every line, in double.

    Parameters
    ----------
    raw : ndarray, shape (lines, across)
        Entries as stored.
    scale : bool
        Whether deviations are wanted.
    rest : bool
        Whether the rest of the mean is wanted; single precision is too coarse for it.
    """
    wide = np.complex128 if raw.dtype.kind == "c" else np.float64
    mean = raw.mean(axis=1, dtype=wide)
    constant = np.all(raw == raw[:, :1], axis=1)
    # The mean of equal numbers may differ from them by rounding; a constant line must become exactly zero.
    mean = np.where(constant, raw[:, 0].astype(wide), mean)
    inverse, left = np.ones(len(raw)), np.zeros_like(mean)
    step = max(1, _STATISTICS_ENTRIES // max(1, raw.shape[1]))
    for first in range(0, len(raw), step) if scale or rest else ():
        some = slice(first, first + step)
        deviation = np.subtract(raw[some], mean[some, None], dtype=wide, casting="unsafe")
        left[some] = deviation.mean(axis=1)
        if scale:
            deviation -= left[some, None]
            spread = np.linalg.norm(deviation, axis=1) / np.sqrt(max(1, raw.shape[1] - 1))
            inverse[some] = 1.0 / np.where(constant[some] | (spread == 0), 1.0, spread)
    return LineStatistics(mean, left, inverse, constant)


def prepare_unit(
    raw: np.ndarray, preparation: Preparation, lines: LineStatistics | None, columns: slice, out: np.ndarray
) -> None:
    """Convert, centre and scale a few lines into a working buffer.

    Parameters
    ----------
    raw : ndarray, shape (lines, across)
        Entries as stored; only `columns` are used.
    preparation : Preparation
    lines : LineStatistics or None
        Statistics of these lines where lines are features.
    columns : slice
        Range across the sweep.
    out : ndarray, shape (lines, columns)
        Working precision; wholly overwritten.

    Notes
    -----
    In single precision the shift is representable in single, so that the subtraction of close numbers is exact
    (Sterbenz) and its rounding is relative to the small result; the rest of the mean is corrected exactly afterwards.
    """
    part = raw[:, columns]
    if preparation.across_features:
        if preparation.shift is not None:
            np.subtract(part, preparation.shift[columns].astype(out.dtype), out=out, dtype=out.dtype, casting="unsafe")
        else:
            out[...] = part
        if preparation.inverse_scale is not None:
            np.multiply(out, preparation.inverse_scale[columns].astype(out.real.dtype), out=out)
        return
    if lines is None:
        out[...] = part
        return
    wide = np.result_type(out.dtype, np.float64)
    if preparation.center:
        # In double, whatever the working precision: the mean of a line is not representable in single.
        np.subtract(part, lines.mean[:, None], out=out, dtype=wide, casting="unsafe")
        if out.dtype == wide:
            # The rounding of a large mean would else stay in every entry of its line.
            out -= lines.rest[:, None]
    else:
        out[...] = part
    if preparation.scale:
        np.multiply(out, lines.inverse_scale[:, None].astype(out.real.dtype), out=out)

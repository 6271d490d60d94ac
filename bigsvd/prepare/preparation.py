"""Centring and scaling of features, as they are applied to a panel while it is read."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np


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


@dataclass(frozen=True, eq=False)
class LineStatistics:
    """Statistics of lines that are whole features.

    Attributes
    ----------
    mean : ndarray, shape (lines,), double or complex double
    inverse_scale : ndarray, shape (lines,), double
        One over the standard deviation (n − 1); one for constant lines.
    constant : ndarray of bool, shape (lines,)
        Lines whose smallest and largest entries are equal.
    """

    mean: np.ndarray
    inverse_scale: np.ndarray
    constant: np.ndarray


def line_statistics(raw: np.ndarray, *, scale: bool) -> LineStatistics:
    """Mean and, where asked, standard deviation of every line, in double.

    Parameters
    ----------
    raw : ndarray, shape (lines, across)
        Entries as stored.
    scale : bool
        Whether deviations are wanted.
    """
    wide = np.complex128 if raw.dtype.kind == "c" else np.float64
    mean = raw.mean(axis=1, dtype=wide)
    constant = np.all(raw == raw[:, :1], axis=1)
    # The mean of equal numbers may differ from them by rounding; a constant line must become exactly zero.
    mean = np.where(constant, raw[:, 0].astype(wide), mean)
    inverse = np.ones(len(raw))
    if scale:
        for line in np.flatnonzero(~constant):
            deviation = raw[line].astype(wide) - mean[line]
            spread = float(np.linalg.norm(deviation)) / np.sqrt(max(1, raw.shape[1] - 1))
            inverse[line] = 1.0 / spread if spread > 0 else 1.0
    return LineStatistics(mean, inverse, constant)


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
    else:
        out[...] = part
    if preparation.scale:
        np.multiply(out, lines.inverse_scale[:, None].astype(out.real.dtype), out=out)

"""What one segment of a sweep adds up, and how two such sums become one."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bigsvd.sweep.folding import fold

# Lines and columns with most bad entries that are named.
MOST_NAMED = 3


@dataclass(eq=False)
class Partial:
    """Sums over a run of panels, all in double.

    Attributes
    ----------
    lines : int
        Lines summed over.
    energy : float
        ‖A_p‖²_F of the shifted panels.
    cancelled : float
        ‖1μᵀD‖²_F of what implicit centring subtracts from products of sparse panels; they round as if it were there.
    line_sum : ndarray, shape (across,), or None
        Sum of the lines: what is left of the mean.
    square_sum : ndarray, shape (across,), or None
        Sum of |entries|² per column (first sweep of a scaled matrix).
    lowest, highest : ndarray, shape (across,), or None
        Smallest and largest stored entries per column; of complex entries real and imaginary parts side by side.
    products : ndarray, shape (width, across), or None
        Σ Y_pᴴ A_p: the conjugate transpose of AᴴA B.
    gram : ndarray, shape (across, across), or None
        Σ A_pᴴ A_p, lower triangle.
    triangle : ndarray, shape (columns, columns), or None
        Triangular factor of the folded block.
    line_mean, line_inverse_scale, line_constant : list of ndarray
        Statistics of lines that are whole features, in order.
    ledger : list of int
        Per panel, the sum modulo 2⁶⁴ of its stored words.
    rounding : ndarray, shape (3, width), or None
        Units recomputed in double, Σ‖ΔY_u‖² and Σ‖ΔZ_u‖² per column.
    unit_energies : ndarray, shape (4,), or None
        Beside `rounding`: all units, Σe² over them, Σe and Σe² over the units recomputed, with e of a unit its energy
        and four times what cancels in it.
    bad : int
        NaN and infinities met.
    infinite : int
        The infinities among them.
    first_bad : (int, int) or None
        Stored row and column of the first.
    bad_lines : int
        Lines that hold any.
    worst_lines : ndarray, shape (at most 3, 2), or None
        The lines that hold most, and how many.
    bad_across : ndarray, shape (across,), or None
        How many each column holds.
    overflow : bool
        Finite entries whose squares overflow the working precision.
    beyond : bool
        64-bit integers that double precision cannot hold exactly, beyond 2⁵³.
    """

    lines: int = 0
    energy: float = 0.0
    cancelled: float = 0.0
    line_sum: np.ndarray | None = None
    square_sum: np.ndarray | None = None
    lowest: np.ndarray | None = None
    highest: np.ndarray | None = None
    products: np.ndarray | None = None
    gram: np.ndarray | None = None
    triangle: np.ndarray | None = None
    line_mean: list[np.ndarray] | None = None
    line_inverse_scale: list[np.ndarray] | None = None
    line_constant: list[np.ndarray] | None = None
    ledger: list[int] | None = None
    rounding: np.ndarray | None = None
    unit_energies: np.ndarray | None = None
    bad: int = 0
    infinite: int = 0
    first_bad: tuple[int, int] | None = None
    bad_lines: int = 0
    worst_lines: np.ndarray | None = None
    bad_across: np.ndarray | None = None
    overflow: bool = False
    beyond: bool = False

    def level_rounding(self) -> None:
        """Scale the measured rounding up to units of typical energy, where those recomputed were fainter.

        Rounding of Y_u grows with ‖A_u‖, that of Z_u with its square. A file of faint lines and one loud block would
        else pass with the rounding of its faint lines.
        """
        if self.rounding is None or self.unit_energies is None:
            return
        units, squares, sampled, sampled_squares = self.unit_energies
        count = float(self.rounding[0].max(initial=0.0))
        whole = self.energy + 4 * self.cancelled
        for row, every, recomputed in ((1, whole, sampled), (2, squares, sampled_squares)):
            typical = every / units * count if count else 0.0
            if recomputed > 0:
                self.rounding[row] *= max(1.0, typical / recomputed)
            else:
                # Units of zeros show no rounding: one roundoff of what is typical stands for it.
                self.rounding[row] = 2.0**-48 * typical

    def count_bad(self, places: np.ndarray, across: int) -> None:
        """Count entries that are no finite numbers.

        Parameters
        ----------
        places : ndarray of int, shape (entries, 2)
            Line of the sweep and place across it of each.
        across : int
            Entries of a line.
        """
        lines, per_line = np.unique(places[:, 0], return_counts=True)
        counts = np.bincount(places[:, 1], minlength=across)
        self.bad += len(places)
        self.bad_lines += len(lines)
        self.worst_lines = worst(self.worst_lines, np.stack([lines, per_line], axis=1))
        self.bad_across = counts if self.bad_across is None else self.bad_across + counts


def worst(first: np.ndarray | None, second: np.ndarray | None) -> np.ndarray | None:
    """Of two lists of lines and counts the lines with most, of equal ones the earlier."""
    given = [one for one in (first, second) if one is not None]
    if not given:
        return None
    both = np.concatenate(given)
    return both[np.lexsort((both[:, 0], -both[:, 1]))[:MOST_NAMED]]


def combine(first: Partial, second: Partial) -> Partial:
    """Add the sums of two neighbouring runs of panels into the first.

    Cost: the size of the sums, and 4·columns³ flops where triangles are folded.
    """
    first.lines += second.lines
    first.energy += second.energy
    first.cancelled += second.cancelled
    first.bad += second.bad
    first.infinite += second.infinite
    first.bad_lines += second.bad_lines
    first.worst_lines = worst(first.worst_lines, second.worst_lines)
    if first.bad_across is None or second.bad_across is None:
        first.bad_across = second.bad_across if first.bad_across is None else first.bad_across
    else:
        first.bad_across += second.bad_across
    first.overflow |= second.overflow
    first.beyond |= second.beyond
    if second.first_bad is not None:
        first.first_bad = min(first.first_bad or second.first_bad, second.first_bad)
    for name in ("line_sum", "square_sum", "products", "gram", "rounding", "unit_energies"):
        more = getattr(second, name)
        if more is not None:
            np.add(getattr(first, name), more, out=getattr(first, name))
    if first.lowest is None or first.highest is None:
        first.lowest, first.highest = second.lowest, second.highest
    elif second.lowest is not None and second.highest is not None:
        np.minimum(first.lowest, second.lowest, out=first.lowest)
        np.maximum(first.highest, second.highest, out=first.highest)
    if second.triangle is not None:
        assert first.triangle is not None
        first.triangle = fold([first.triangle, second.triangle])
    for name in ("line_mean", "line_inverse_scale", "line_constant", "ledger"):
        more = getattr(second, name)
        if more is not None:
            getattr(first, name).extend(more)
    return first

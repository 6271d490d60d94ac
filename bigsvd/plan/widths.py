"""How many columns the basis starts with, grows by, keeps at a restart, and may have at most."""

from __future__ import annotations

from dataclasses import dataclass

# Sweeps a block Krylov run is expected to take, by how wide its blocks are: means over spectra that fall as 10^(−i/10),
# 1/i and 1/√i, 15 spikes over noise, and spikes of 3 to 40 (20 components of 12,000 × 3,000: 1, 2, 3, 5, 2 sweeps of
# 246 columns in all against 1, 2, 4, 5, 2 of 200).
PROFILES = {"wide": 2.6, "narrow": 2.8}
# They are for intervals within a thousandth; each further decade costs so many more (means over the same kinds of
# spectra, 6,000 × 1,500: 1.8 and 2.2 sweeps for a tenth, 3.8 and 4.0 for 1e-6, 4.8 and 5.2 for 1e-8).
NOMINAL_TOLERANCE = 1e-3
SWEEPS_PER_DECADE = 0.4
# Test vectors of the missed bound. With 24 the chi-square quantile at 1e-10 gains a factor 1.3, with 20 nothing; 10
# would cost 9.
TEST_VECTORS = 24


def crowd_reach(rank: int) -> int:
    """How far ahead a component must have neighbours to count as crowded, q = max(10, rank)."""
    return max(10, rank)


@dataclass(frozen=True)
class Widths:
    """Columns of the block Krylov basis.

    Attributes
    ----------
    start : int
        Directions of the first basis, from the pilot or Gaussian.
    test : int
        Gaussian test vectors that join each sweep; the missed bound rests on them.
    grow : int
        Residual directions that join after a sweep.
    keep : int
        Ritz vectors kept at a restart.
    limit : int
        Most columns.
    profile : {"wide", "narrow"}
        Wide blocks save sweeps, narrow ones products.
    """

    start: int
    test: int
    grow: int
    keep: int
    limit: int
    profile: str = "wide"

    @property
    def block(self) -> int:
        """Most columns multiplied in one sweep."""
        return min(self.limit, max(self.start + self.test, self.grow + 2 * self.test))


def krylov_widths(rank: int, across: int, *, growths: int = 3, profile: str = "wide") -> Widths:
    """Widths for `rank` wanted components of a matrix `across` wide.

    Parameters
    ----------
    rank : int
    across : int
    growths : int
        How often the basis may grow before it is restarted; 0 for the narrowest blocks and the least memory: one block
        beside the kept Ritz vectors. A tighter choice spends more sweeps.
    profile : {"wide", "narrow"}

    Returns
    -------
    Widths
        With enough columns after the first sweep to see the neighbours that show a bulk, K + max(10, K).
    """
    keep = rank + crowd_reach(rank) + 10
    if growths and profile == "wide":
        start, grow = max(keep, 3 * rank + 10), keep
    elif growths:
        start, grow = rank + crowd_reach(rank), rank + 10
    else:
        start, grow = keep, max(rank + 10, keep // 2)
    least = max(start + TEST_VECTORS, keep + grow + 2 * TEST_VECTORS)
    limit = max(least, start + TEST_VECTORS + growths * (grow + 2 * TEST_VECTORS))
    return Widths(
        min(start, across), min(TEST_VECTORS, across), min(grow, across), min(keep, across), min(limit, across), profile
    )


def closing_width(rank: int, across: int) -> int:
    """Right vectors swept to close a route that knows the whole spectrum: enough to show a bulk."""
    return min(across, rank + crowd_reach(rank) + 10)

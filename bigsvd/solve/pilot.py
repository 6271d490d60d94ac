"""The pilot: a few panels held in memory give a first mean, the precision to work in, and the first directions."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from bigsvd.prepare import Preparation
from bigsvd.solve.dense import orthonormalise
from bigsvd.solve.grow import gaussian_directions
from bigsvd.solve.statistics import in_range, shift_and_scale
from bigsvd.sweep import Engine, PanelReader, Partial, SweepTask

# Most subspace iterations on the sample: its own sampling error, not convergence, limits the directions it gives.
PILOT_ITERATIONS = 4
# They end where the leading squares grow by less than this on average: fast decay is settled after two.
SETTLED_GROWTH = 0.01
# Panels of the sample whose first unit is recomputed in double, to decide the precision.
MEASURED_PANELS = 4
# A sample whose values fall by less than this behind those wanted does not tell how fast they separate.
LEAST_GAP = 0.01
# Intervals are about so many times as wide as the errors that they bound.
INTERVAL_OVER_ERROR = 4.0
# Entries whose root mean square lies outside these would over- or underflow when squared in single.
SINGLE_RANGE = (1e-12, 1e12)


@dataclass(frozen=True, eq=False)
class Pilot:
    """What the sample tells.

    Attributes
    ----------
    preparation : Preparation
        With a first shift, and first scales.
    directions : ndarray, shape (across, start), or None
        Leading right vectors of the sample.
    theta : ndarray, shape (start,)
        Its singular values, scaled up to the whole matrix.
    energy : float
        Its energy, scaled up.
    rounding : ndarray, shape (3, start), or None
        Rounding of single precision measured on it (see `Partial.rounding`).
    single_fits : bool
        Whether squares of the entries are safe in single.
    """

    preparation: Preparation
    directions: np.ndarray | None
    theta: np.ndarray
    energy: float
    rounding: np.ndarray | None
    single_fits: bool


def take_pilot(
    reader: PanelReader,
    engine: Engine,
    panels: tuple[int, ...],
    leaves: int,
    preparation: Preparation,
    *,
    directions: int,
    may_be_single: bool,
    seed: int,
) -> Pilot:
    """Read the sample and solve it.

    Parameters
    ----------
    reader : PanelReader
        Must keep its panels.
    engine : Engine
    panels : tuple of int
        The sample.
    leaves : int
        Segments per wave.
    preparation : Preparation
    directions : int
        Right vectors wanted; 0 for a mean only.
    may_be_single : bool
        Whether products may be made in single.
    seed : int

    Returns
    -------
    Pilot

    Notes
    -----
    Cost: one read of the sample; randomized subspace iteration (Halko, Martinsson, Tropp, SIAM Rev. 53 (2011)) on it in
    memory.
    """
    stored = reader.dtype
    wide = np.dtype(np.complex128 if stored.kind == "c" else np.float64)
    single = np.dtype(np.complex64 if stored.kind == "c" else np.float32)
    waves = [
        [(panel, panel + 1) for panel in panels[first : first + leaves]] for first in range(0, len(panels), leaves)
    ]
    base = SweepTask(
        reader, preparation, wide, "basis",
        add_lines=preparation.across_features and (preparation.center or preparation.scale),
        learn=preparation.across_features and preparation.scale, line_features=not preparation.across_features and
        (preparation.center or preparation.scale),
    )  # fmt: skip
    first = engine.sweep(base, waves)
    preparation = _first_statistics(first, preparation, single if may_be_single else wide)
    raise_scale = reader.geometry.lines / max(1, first.lines)
    if first.bad or first.overflow or not in_range(first.energy * raise_scale) or not directions:
        return Pilot(preparation, None, np.zeros(0), first.energy * raise_scale, None, False)
    fits = _fits_single(first, reader.geometry.across)
    work = single if may_be_single and fits else wide
    task = replace(base, preparation=preparation, dtype=work, add_energy=False, add_lines=False, learn=False)
    across = reader.geometry.across
    empty = np.zeros((across, 0), wide)
    basis = orthonormalise(gaussian_directions(across, directions, seed, wide), empty)
    before = np.zeros(0)
    for _ in range(PILOT_ITERATIONS):
        products = _normal_product(engine, task, basis, waves)
        now = _leading_squares(basis, products)
        basis = orthonormalise(products, empty)
        if _settled(before, now):
            break
        before = now
    measured = frozenset(panels[:MEASURED_PANELS])
    last = engine.sweep(
        replace(task, block=basis.astype(work), add_energy=True, sampled=measured if work == single else frozenset()),
        waves,
    )
    assert last.products is not None
    last.level_rounding()
    small = last.products @ basis
    value, vector = np.linalg.eigh((small + small.conj().T) / 2)
    theta = np.sqrt(np.clip(value[::-1], 0.0, None) * raise_scale)
    return Pilot(preparation, basis @ vector[:, ::-1], theta, last.energy * raise_scale, last.rounding, fits)


def expected_sweeps(pilot: Pilot, wanted: int, tolerance: float) -> int | None:
    """Sweeps that block Krylov will need by the spectrum of the sample.

    Parameters
    ----------
    pilot : Pilot
    wanted : int
        Leading components that are to be told apart.
    tolerance : float
        Relative, of their values.

    Returns
    -------
    int or None
        None where the sample shows no gap behind them.

    Notes
    -----
    A guess for the clock, not a bound. After t sweeps from a block that ends at σ_b the share of what lies beyond has
    shrunk by T_t(2σ_k²/σ_b² − 1), a Chebyshev polynomial, and the error of a value with its square (Saad, SIAM J.
    Numer. Anal. 17 (1980)).
    """
    theta = pilot.theta
    if not 0 < wanted < len(theta) or theta[wanted - 1] <= theta[-1] * (1 + LEAST_GAP):
        return None
    if theta[-1] <= theta[wanted - 1] * 1e-6:
        return 1
    growth = np.arccosh(2 * (theta[wanted - 1] / theta[-1]) ** 2 - 1)
    return max(1, int(np.ceil(np.arccosh((tolerance / INTERVAL_OVER_ERROR) ** -0.5) / growth)))


def _normal_product(
    engine: Engine, task: SweepTask, basis: np.ndarray, waves: list[list[tuple[int, int]]]
) -> np.ndarray:
    """AᴴA times a basis, on the sample."""
    sums = engine.sweep(replace(task, block=basis.astype(task.dtype)), waves)
    assert sums.products is not None
    return sums.products.conj().T


def _leading_squares(basis: np.ndarray, products: np.ndarray) -> np.ndarray:
    """Squares of the leading half of the Ritz values."""
    small = basis.conj().T @ products
    value: np.ndarray = np.linalg.eigvalsh((small + small.conj().T) / 2)[::-1]
    return value[: max(1, len(value) // 2)]


def _settled(before: np.ndarray, now: np.ndarray) -> bool:
    """Whether another iteration would hardly raise the Ritz values: the last raised their geometric mean little."""
    if not len(before) or not now[-1] > 0 or not before[-1] > 0:
        return False
    return float(np.mean(np.log(now / before))) < SETTLED_GROWTH


def _first_statistics(sums: Partial, preparation: Preparation, work: np.dtype) -> Preparation:
    """A first mean, representable in the working precision, and first scales."""
    if not preparation.across_features or sums.line_sum is None or not sums.lines:
        return preparation
    mean = sums.line_sum / sums.lines
    if not np.all(np.isfinite(mean)):
        return preparation
    variance = np.zeros(len(mean))
    if sums.square_sum is not None:
        variance = sums.square_sum / sums.lines - np.abs(mean) ** 2
    return shift_and_scale(mean, variance, preparation, work)


def _fits_single(sums: Partial, across: int) -> bool:
    """Whether squares of typical entries neither overflow nor underflow single precision."""
    typical = np.sqrt(sums.energy / max(1, sums.lines * across))
    return typical == 0 or SINGLE_RANGE[0] < typical < SINGLE_RANGE[1]

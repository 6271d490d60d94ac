"""Rounding measured on faint units speaks for loud ones too."""

from __future__ import annotations

import numpy as np
import pytest
from sweep_samples import reader_of, sweep

from bigsvd.certify import measured_rounding
from bigsvd.prepare import Preparation
from bigsvd.sweep import Partial, SweepTask


def single_sweep(matrix: np.ndarray, sampled: frozenset[int]) -> tuple[Partial, np.ndarray]:
    """Sweep panels of 20 lines in single; return the sums and the columns multiplied."""
    block = np.linalg.qr(np.random.default_rng(1).standard_normal((matrix.shape[1], 3)))[0].astype(np.float32)
    plain = Preparation(True, center=False, scale=False)
    sums = sweep(SweepTask(reader_of(matrix, 0, 20), plain, np.dtype(np.float32), "basis", block, sampled=sampled)).sums
    return sums, block


def test_faint_samples_still_cover_the_rounding_of_a_loud_block() -> None:
    random = np.random.default_rng(2)
    for seed in range(5):
        matrix = random.standard_normal((400, 60)).astype(np.float32)
        matrix[340:360] *= 1e4
        sums, block = single_sweep(matrix, frozenset({0, 5, 9}))
        wide = matrix.astype(float).T @ (matrix.astype(float) @ block.astype(float))
        assert sums.products is not None
        error = np.linalg.norm(sums.products.T - wide, axis=0)
        assert np.any(error > measured_rounding(np.asarray(sums.rounding), 20)[1]), f"seed {seed} proves nothing"
        sums.level_rounding()
        assert np.all(error <= measured_rounding(np.asarray(sums.rounding), 20)[1])


def test_samples_of_typical_energy_keep_what_was_measured() -> None:
    sums, _ = single_sweep(np.random.default_rng(3).standard_normal((400, 60)).astype(np.float32), frozenset(range(20)))
    before = np.array(sums.rounding)
    sums.level_rounding()
    np.testing.assert_allclose(np.asarray(sums.rounding), before, rtol=1e-12)


def test_units_of_zeros_stand_for_one_roundoff_of_the_rest() -> None:
    matrix = np.ones((400, 60), np.float32)
    matrix[:20] = 0
    sums, _ = single_sweep(matrix, frozenset({0}))
    sums.level_rounding()
    assert sums.rounding is not None
    np.testing.assert_allclose(sums.rounding[1], 2.0**-48 * sums.energy / 20)
    np.testing.assert_allclose(sums.rounding[2], 2.0**-48 * 19 * 1200.0**2 / 20)


def test_a_sweep_in_double_has_nothing_to_level() -> None:
    sums = Partial(energy=3.0)
    sums.level_rounding()
    assert sums.rounding is None
    assert sums.energy == pytest.approx(3.0)

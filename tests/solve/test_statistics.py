"""Means and deviations learnt on the way, and sums corrected for them: exact for any first guess, however wrong."""

from __future__ import annotations

import numpy as np
import pytest
from solve_samples import dense_prepared, orthonormal_block, samples, sums_of

from bigsvd.prepare import Preparation
from bigsvd.solve import correct_gram, correct_products, first_statistics, learn
from bigsvd.solve.statistics import shift_and_scale

GUESSES = ("none", "good", "wrong")


def first_guess(matrix: np.ndarray, guess: str, *, center: bool, scale: bool) -> Preparation:
    """A preparation from no sample, from the whole matrix, or from one that misleads by 30 % and a factor of four."""
    preparation = Preparation(True, center, scale)
    if guess == "none":
        return preparation
    mean = matrix.mean(axis=0)
    spread = np.sqrt((np.abs(matrix - mean) ** 2).mean(axis=0))
    if guess == "wrong":
        mean = mean * 1.3 + 1
        spread = spread * np.linspace(0.25, 4, len(spread))
    spread = np.where(spread > 1e-12 * np.abs(mean), spread, 1)
    return preparation.learnt(mean, 1 / spread if scale else None, matrix.dtype)


@pytest.mark.parametrize("guess", GUESSES)
@pytest.mark.parametrize(("center", "scale"), [(True, True), (True, False), (False, True), (False, False)])
@pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])
def test_corrected_sums_are_those_of_the_prepared_matrix(
    imaginary: bool, center: bool, scale: bool, guess: str
) -> None:
    matrix = samples(80, 12, imaginary=imaginary)
    preparation = first_guess(matrix, guess, center=center, scale=scale)
    block = orthonormal_block(12, 4, imaginary=imaginary)
    sums = sums_of(matrix, preparation, block)
    learnt = learn(sums, preparation)
    exact = dense_prepared(matrix, center=center, scale=scale)
    assert learnt.energy == pytest.approx(np.linalg.norm(exact) ** 2, rel=1e-12)
    assert learnt.swept_energy == sums.energy
    if center or scale:
        np.testing.assert_allclose(learnt.mean, matrix.mean(axis=0), rtol=1e-13)
    assert sums.products is not None
    moved = block.copy()
    products = correct_products(sums.products.conj().T.copy(), moved, learnt, 80, centred=center)
    scaling = 1.0
    if scale:
        assert learnt.column_scale is not None
        assert learnt.inverse_scale is not None
        scaling = learnt.column_scale[:, None]
        spread = np.sqrt((np.abs(matrix - matrix.mean(axis=0)) ** 2).sum(axis=0) / 79)
        np.testing.assert_allclose(1 / learnt.inverse_scale, spread, rtol=1e-12)
    np.testing.assert_allclose(moved, block * scaling, rtol=1e-14)
    wanted = exact.conj().T @ (exact @ moved)
    size = np.abs(sums.products).max() + np.abs(wanted).max()
    np.testing.assert_allclose(products, wanted, rtol=0, atol=1e-12 * size)


@pytest.mark.parametrize("guess", GUESSES)
@pytest.mark.parametrize("scale", [False, True])
def test_a_corrected_gram_matrix_is_that_of_the_prepared_matrix(scale: bool, guess: str) -> None:
    matrix = samples(60, 9, imaginary=True)
    preparation = first_guess(matrix, guess, center=True, scale=scale)
    sums = sums_of(matrix, preparation)
    panel = matrix - preparation.shift if preparation.shift is not None else matrix
    panel = panel * preparation.inverse_scale if preparation.inverse_scale is not None else panel
    gram = correct_gram(panel.conj().T @ panel, learn(sums, preparation), 60, centred=True)
    exact = dense_prepared(matrix, center=True, scale=scale)
    np.testing.assert_allclose(gram, exact.conj().T @ exact, rtol=0, atol=1e-11 * np.linalg.norm(panel) ** 2)


def test_a_large_offset_leaves_the_deviations_exact_once_the_guess_is_near() -> None:
    matrix = samples(200, 6) + 1e7
    exact = dense_prepared(matrix, center=True, scale=False)
    preparation = Preparation(True, True, False).learnt(matrix[:20].mean(axis=0), None, np.dtype(float))
    learnt = learn(sums_of(matrix, preparation), preparation)
    assert learnt.energy == pytest.approx(np.linalg.norm(exact) ** 2, rel=1e-8)
    np.testing.assert_allclose(learnt.mean, matrix.mean(axis=0), rtol=1e-15)


def test_constant_means_lowest_equals_highest_not_a_deviation_of_zero() -> None:
    matrix = samples(50, 5)
    matrix[:, 1] = 0.1
    matrix[:, 3] = 1e9
    matrix[7, 3] += 1e-4  # varies by so little that the sum of squares about the guess may not show it
    preparation = first_guess(matrix, "wrong", center=True, scale=True)
    learnt = learn(sums_of(matrix, preparation), preparation)
    assert learnt.constant == 1
    assert learnt.inverse_scale is not None
    assert learnt.inverse_scale[1] == pytest.approx(1.0, rel=1e-12)
    assert np.all(np.isfinite(learnt.inverse_scale))
    assert learnt.energy == 49 * 4


def test_complex_features_are_constant_only_in_both_parts() -> None:
    matrix = samples(50, 3, imaginary=True)
    matrix[:, 0] = 2 + 1j * matrix[:, 0].imag
    matrix[:, 1] = 2 + 3j
    preparation = Preparation(True, True, True)
    assert learn(sums_of(matrix, preparation), preparation).constant == 1


@pytest.mark.parametrize("work", ["f4", "f8"])
def test_first_statistics_are_those_of_the_lines_held(work: str) -> None:
    matrix = samples(40, 7).astype("f4")
    made = first_statistics(matrix, Preparation(True, True, True), np.dtype(work))
    mean = matrix.astype(float).mean(axis=0)
    assert made.shift is not None
    assert made.inverse_scale is not None
    np.testing.assert_array_equal(made.shift, mean.astype(work).astype(float))
    np.testing.assert_allclose(1 / made.inverse_scale, matrix.astype(float).std(axis=0), rtol=1e-6)


def test_first_statistics_of_lines_that_are_not_finite_change_nothing() -> None:
    matrix = samples(10, 3)
    matrix[4, 1] = np.nan
    preparation = Preparation(True, True, True)
    assert first_statistics(matrix, preparation, np.dtype(float)) is preparation


def test_features_constant_in_the_sample_get_scale_one() -> None:
    made = shift_and_scale(
        np.array([5.0, 1e6, 2.0]), np.array([0.0, 1e-4, 4.0]), Preparation(True, True, True), np.dtype(float)
    )
    np.testing.assert_array_equal(made.inverse_scale, [1.0, 1.0, 0.5])  # 0.01 beside 1e6 is rounding of the sample

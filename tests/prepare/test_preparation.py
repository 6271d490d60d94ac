"""Conversion, centring and scaling of a panel, against NumPy in extended precision."""

from __future__ import annotations

import numpy as np
import pytest

from bigsvd.prepare import LineStatistics, Preparation, line_statistics, prepare_unit

EPS = 2.0**-52


def raw(code: str, shape: tuple[int, int] = (6, 40), offset: float = 0.0) -> np.ndarray:
    random = np.random.default_rng(7)
    values = random.standard_normal(shape) * 20 + offset
    if np.dtype(code).kind == "c":
        values = values + 1j * random.standard_normal(shape) * 5
    return np.asarray(np.clip(values, 0, None) if np.dtype(code).kind == "u" else values, code)


def prepare(part: np.ndarray, preparation: Preparation, work: str, lines: LineStatistics | None = None) -> np.ndarray:
    """Prepare all columns in two pieces, into a buffer that held something else."""
    out = np.full(part.shape, 7, work)
    middle = part.shape[1] // 3
    for columns in (slice(0, middle), slice(middle, part.shape[1])):
        prepare_unit(part, preparation, lines, columns, out[:, columns])
    return out


@pytest.mark.parametrize(
    ("code", "work"), [("u2", "f4"), ("u2", "f8"), ("i1", "f4"), ("f2", "f4"), ("f4", "f8"), ("c8", "c16")]
)
def test_without_preparation_entries_are_converted_and_nothing_more(code: str, work: str) -> None:
    part = raw(code)
    np.testing.assert_array_equal(prepare(part, Preparation(True, False, False), work), part.astype(work))
    np.testing.assert_array_equal(prepare(part, Preparation(False, False, False), work), part.astype(work))


def test_unsigned_counts_below_the_shift_become_negative() -> None:
    part = np.array([[0, 65535]], "u2")
    shifted = prepare(part, Preparation(True, True, False, shift=np.array([10.0, 1.0])), "f4")
    np.testing.assert_array_equal(shifted, [[-10, 65534]])


@pytest.mark.parametrize(("code", "work"), [("u2", "f4"), ("f8", "f8"), ("c8", "c8"), ("c16", "c16")])
def test_features_across_are_shifted_then_scaled(code: str, work: str) -> None:
    part = raw(code)
    shift = np.linspace(-3, 9, 40).astype(np.float32).astype(np.complex128 if code[0] == "c" else np.float64)
    scale = np.linspace(0.5, 2, 40)
    found = prepare(part, Preparation(True, True, True, shift=shift, inverse_scale=scale), work)
    wanted = (part.astype(np.clongdouble if code[0] == "c" else np.longdouble) - shift) * scale
    epsilon = float(np.finfo(work).eps)
    np.testing.assert_allclose(found, wanted, rtol=4 * epsilon, atol=0)


def test_in_single_close_numbers_are_subtracted_exactly() -> None:
    # Sterbenz: the difference of floats within a factor of two of each other is exact (Higham, 2nd ed., theorem 2.5).
    part = raw("f4", offset=1e4)
    learnt = Preparation(True, True, False).learnt(part.mean(axis=0, dtype=float), None, np.dtype("f4"))
    assert learnt.shift is not None
    found = prepare(part, learnt, "f4")
    np.testing.assert_array_equal(found.astype(float), part.astype(float) - learnt.shift)


def test_a_learnt_shift_is_representable_in_the_working_precision() -> None:
    mean = np.array([1 / 3, 1e4 + 1 / 7])
    learnt = Preparation(True, True, False).learnt(mean, None, np.dtype("f4"))
    assert learnt.shift is not None
    assert learnt.shift.dtype == np.float64
    np.testing.assert_array_equal(learnt.shift, mean.astype("f4").astype(float))
    np.testing.assert_array_equal(Preparation(True, True, False).learnt(mean, None, np.dtype("f8")).shift, mean)


def test_scaled_but_not_centred_features_are_not_shifted() -> None:
    learnt = Preparation(True, False, True).learnt(np.array([4.0, 8.0]), np.array([0.5, 0.25]), np.dtype("f8"))
    assert learnt.shift is None
    np.testing.assert_array_equal(learnt.about, [2, 2])
    part = np.array([[2.0, 4.0]])
    np.testing.assert_array_equal(prepare(part, learnt, "f8"), [[1, 1]])


@pytest.mark.parametrize(("center", "scale"), [(True, True), (True, False), (False, True)])
@pytest.mark.parametrize(("code", "work"), [("f4", "f4"), ("u2", "f4"), ("f8", "f8"), ("c8", "c8"), ("c16", "c16")])
def test_features_that_are_lines_have_their_own_mean_and_deviation(
    code: str, work: str, center: bool, scale: bool
) -> None:
    part = raw(code, offset=50.0)
    statistics = line_statistics(part, scale=scale)
    found = prepare(part, Preparation(False, center, scale), work, statistics)
    exact = part.astype(np.clongdouble if code[0] == "c" else np.longdouble)
    mean = exact.mean(axis=1, keepdims=True)
    spread = np.sqrt((np.abs(exact - mean) ** 2).sum(axis=1, keepdims=True) / (part.shape[1] - 1))
    wanted = (exact - mean if center else exact) / (spread if scale else 1)
    epsilon = float(np.finfo(work).eps)
    np.testing.assert_allclose(found, wanted, rtol=0, atol=8 * epsilon * float(np.abs(wanted).max()))
    np.testing.assert_allclose(statistics.mean, mean[:, 0].astype(statistics.mean.dtype), rtol=4 * EPS)
    if scale:
        np.testing.assert_allclose(statistics.inverse_scale, 1 / spread[:, 0].astype(float), rtol=20 * EPS)
    else:
        np.testing.assert_array_equal(statistics.inverse_scale, 1)


@pytest.mark.parametrize("value", [0.1, 1e-30, 3.0, 1e25])
def test_constant_lines_become_exactly_zero_and_keep_scale_one(value: float) -> None:
    part = np.vstack([np.full(1001, value), np.arange(1001.0)])
    statistics = line_statistics(part, scale=True)
    np.testing.assert_array_equal(statistics.constant, [True, False])
    assert statistics.inverse_scale[0] == 1
    found = prepare(part, Preparation(False, True, True), "f8", statistics)
    np.testing.assert_array_equal(found[0], 0)
    assert np.std(found[1], ddof=1) == pytest.approx(1)


def test_a_single_sample_has_no_deviation_and_becomes_zero() -> None:
    statistics = line_statistics(np.array([[5.0], [7.0]]), scale=True)
    assert statistics.constant.all()
    np.testing.assert_array_equal(
        prepare(np.array([[5.0], [7.0]]), Preparation(False, True, True), "f8", statistics), 0
    )


def test_a_deviation_small_beside_the_mean_is_found_about_the_mean() -> None:
    # Sums of squares about zero would lose it: (1e8)² · 2⁻⁵² is larger than the variance.
    part = (1e8 + np.random.default_rng(1).standard_normal((1, 5000))).astype("f8")
    spread = 1 / line_statistics(part, scale=True).inverse_scale[0]
    assert spread == pytest.approx(np.std(part - 1e8, ddof=1), rel=1e-12)

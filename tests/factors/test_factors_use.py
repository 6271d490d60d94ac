"""Scores, loadings and rebuilt samples against NumPy."""

import numpy as np
import pytest
from factor_samples import Sample, small_chunks

from bigsvd.errors import OptionError, ResultError
from bigsvd.factors import open_factors

EPS = np.finfo(np.float64).eps


@pytest.fixture(params=["float64", "complex128"], scope="module")
def sample(request):
    return Sample(rows=150, columns=20, rank=5, dtype=request.param)


@pytest.fixture(params=[16, 1_000], scope="module")
def factors(request, sample, tmp_path_factory):
    with pytest.MonkeyPatch.context() as monkeypatch:
        small_chunks(monkeypatch, request.param, 3)
        return sample.write(tmp_path_factory.mktemp("use") / "out.zarr")


CHOICES = [(None, [0, 1, 2, 3, 4]), (2, [0, 1]), ([3, 0], [3, 0]), (np.array([4]), [4]), ([], [])]


@pytest.mark.parametrize(("components", "indices"), CHOICES)
def test_scores_are_the_projections_of_the_samples(factors, sample, components, indices):
    expected = sample.prepared @ sample.right[:, indices]
    np.testing.assert_allclose(factors.scores(components), expected, rtol=0, atol=100 * EPS * sample.value[0])


@pytest.mark.parametrize(("components", "indices"), CHOICES)
def test_loadings_are_vectors_times_the_deviation_of_their_scores(factors, sample, components, indices):
    deviations = (sample.prepared @ sample.right).std(axis=0, ddof=1)
    expected = (sample.right * deviations)[:, indices]
    np.testing.assert_allclose(factors.loadings(components), expected, rtol=0, atol=100 * EPS * deviations[0])


def test_loadings_of_all_components_give_the_covariance(sample):
    whole = Sample(rows=150, columns=4, rank=4, dtype=sample.dtype.name)
    loadings = whole.write(None).loadings()
    # numpy.cov of columns is E[x conj(y)]: the conjugate of AᴴA/(m−1).
    covariance = np.cov(whole.prepared, rowvar=False).conj()
    np.testing.assert_allclose(loadings @ loadings.conj().T, covariance, rtol=0, atol=1000 * EPS)


ROWS = [
    None,
    slice(None),
    slice(10, 40),
    slice(0, 150, 7),
    slice(100, 20, -9),
    slice(-3, None),
    slice(5, 5),
    [149, 0, 3, 3, 77],
    np.arange(150) % 31 == 0,
    np.array([], dtype=int),
]


@pytest.mark.parametrize("rows", ROWS, ids=str)
@pytest.mark.parametrize(("components", "indices"), CHOICES[:3])
def test_rebuilt_samples_are_in_the_units_of_the_file(factors, sample, rows, components, indices):
    left = sample.left[slice(None) if rows is None else rows][:, indices] * sample.value[indices]
    expected = left @ sample.right[:, indices].conj().T * sample.scale + sample.mean
    np.testing.assert_allclose(factors.rebuild(rows, components), expected, rtol=0, atol=1000 * EPS * 20)


def test_all_components_rebuild_the_file_itself(sample):
    whole = Sample(rows=30, columns=5, rank=5, dtype=sample.dtype.name)
    np.testing.assert_allclose(whole.write(None).rebuild(), whole.stored, rtol=0, atol=1000 * EPS)


def test_single_precision_vectors_are_used_in_double(tmp_path):
    sample = Sample(dtype="float32")
    factors = sample.write(tmp_path / "out.zarr")
    assert factors.scores().dtype == factors.rebuild().dtype == np.float64
    stored = sample.left.astype(np.float32).astype(np.float64) * sample.value
    np.testing.assert_array_equal(factors.scores(), stored)


@pytest.mark.parametrize("components", [0, 6, -1, [5], [-1], [0.5], [[0, 1]], [True] * 5, "all"])
def test_a_component_that_is_not_there_is_refused(factors, components):
    for use in (factors.scores, factors.loadings, lambda chosen: factors.rebuild([0], chosen)):
        with pytest.raises(OptionError):
            use(components)


@pytest.mark.parametrize("rows", [[150], [-1], [0.0], [[1, 2]], [True, False]])
def test_a_row_that_is_not_there_is_refused(factors, rows):
    with pytest.raises(OptionError):
        factors.rebuild(rows)


def test_loadings_of_one_sample_are_refused():
    with pytest.raises(OptionError, match="there is 1 sample"):
        one_row().write(None).loadings()


def one_row():
    """A plain decomposition of a single row, which centring would leave nothing of."""
    sample = Sample(rows=2, columns=3, rank=1)
    row = np.array([[3.0, 0.0, 4.0]])
    sample.shape = row.shape
    sample.left, sample.value, sample.right = np.ones((1, 1)), np.array([5.0]), row.T / 5
    return sample


def test_the_text_says_shape_rank_values_and_verdict(factors):
    first, second = repr(factors).splitlines()
    assert "150 samples × 20 features, rank 5" in first
    assert str(factors.path) in first
    assert second.endswith("% captured; invented for a test")


def test_the_value_is_frozen(factors):
    with pytest.raises(AttributeError):
        factors.rank = 3


def test_factors_of_a_result_that_was_replaced_meanwhile_are_refused(tmp_path):
    old = Sample().write(tmp_path / "out.zarr")
    new = Sample(seed=8).write(tmp_path / "out.zarr", overwrite=True)
    with pytest.raises(ResultError, match="was replaced or removed since it was opened"):
        old.scores()
    assert new.scores().shape == (60, 5)
    np.testing.assert_array_equal(open_factors(tmp_path / "out.zarr").scores(), new.scores())

"""The invented counts of bench/counts.py, and the methods that bigsvd is timed against on them."""

from __future__ import annotations

import sys
from pathlib import Path

import h5py
import numpy as np
import pytest

ROOT = Path(__file__).parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

from bench import counts  # noqa: E402


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("counts") / "counts.h5ad"
    counts.write_counts(path, 1300, 400, 0.05, "gzip", seed=3)
    return path


def test_the_file_holds_sorted_counts_of_the_wanted_density(made: Path) -> None:
    lines = counts.read_counts(made)
    assert lines.shape == counts.read_shape(made) == (1300, 400)
    assert lines.has_canonical_format
    assert lines.nnz == pytest.approx(0.05 * 1300 * 400, rel=0.1)
    assert np.all(lines.data >= 1)
    np.testing.assert_array_equal(lines.data, np.round(lines.data))
    # Some genes are counted in most cells, most in few.
    share = np.bincount(lines.indices, minlength=400) / 1300
    assert share.max() > 0.4
    assert np.median(share) < 0.03


def test_anndata_would_find_what_it_writes_itself(made: Path) -> None:
    # AnnData, "On-disk format" of its documentation, version 0.8 and later (from memory).
    with h5py.File(made) as file:
        assert (file.attrs["encoding-type"], file.attrs["encoding-version"]) == ("anndata", "0.1.0")
        assert file["X"].attrs["encoding-type"] == "csr_matrix"
        assert list(file["X"].attrs["shape"]) == [1300, 400]
        for name, length in (("obs", 1300), ("var", 400)):
            assert file[name].attrs["encoding-type"] == "dataframe"
            assert file[name][file[name].attrs["_index"]].shape == (length,)


def test_more_rows_begin_with_the_same(made: Path, tmp_path: Path) -> None:
    longer = tmp_path / "longer.h5ad"
    counts.write_counts(longer, 1700, 400, 0.05, None, seed=3)
    first, more = counts.read_counts(made), counts.read_counts(longer)
    assert (first != more[:1300]).nnz == 0


def test_the_others_find_the_values_that_lapack_finds(made: Path) -> None:
    dense = counts.read_counts(made).toarray().astype(float)
    exact = np.linalg.svd(dense - dense.mean(axis=0), compute_uv=False)[:6]
    np.testing.assert_allclose(counts.truth_of(made, 6), exact, rtol=1e-12)
    np.testing.assert_allclose(counts.truth_of(made, 6), exact, rtol=1e-12)  # from beside the file
    np.testing.assert_allclose(counts.by_svds(made, 6, 1e-6), exact, rtol=1e-5)
    errors = [np.max(np.abs(counts.by_dask(made, 6, iterations) / exact - 1)) for iterations in (0, 2, 8)]
    assert errors[0] > errors[1] > errors[2]
    assert errors[2] < 1e-8

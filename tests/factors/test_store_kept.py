"""Stores written once by each format, which must open for ever: never written again, the next format goes beside."""

import shutil
from pathlib import Path

import numpy as np
import pytest
import xarray
from factor_samples import kept_sample

from bigsvd.factors import open_factors
from bigsvd.factors.plain import to_plain

STORES = Path(__file__).parent / "stores"


@pytest.mark.parametrize("dtype", ["float64", "complex128"])
def test_a_store_of_format_1_opens_with_all_its_parts(dtype):
    sample = kept_sample(dtype)
    factors = open_factors(STORES / f"format-1-{dtype}.zarr")
    assert (factors.shape, factors.rank) == ((6, 4), 2)
    np.testing.assert_array_equal(factors.left_vectors[...], sample.left)
    np.testing.assert_array_equal(factors.right_vectors[...], sample.right)
    np.testing.assert_array_equal(factors.singular_values, sample.value)
    np.testing.assert_array_equal(factors.column_mean, sample.mean)
    np.testing.assert_array_equal(factors.column_scale, sample.scale)
    for name, expected in sample.spectrum.items():
        np.testing.assert_array_equal(getattr(factors.spectrum, name), expected)
    for name, expected in sample.certificate.arrays().items():
        np.testing.assert_array_equal(factors.certificate.arrays()[name], expected)
    assert to_plain(factors.certificate.facts()) == to_plain(sample.certificate.facts())
    assert to_plain({name: factors.attributes[name] for name in sample.attributes}) == to_plain(sample.attributes)
    expected = sample.left * sample.value @ sample.right.conj().T * sample.scale + sample.mean
    np.testing.assert_allclose(factors.rebuild(), expected, rtol=1e-15, atol=1e-14)
    with xarray.open_zarr(STORES / f"format-1-{dtype}.zarr") as data:
        assert dict(data.sizes) == {"row": 6, "column": 4, "component": 2}


def test_what_is_written_today_holds_the_parts_of_the_kept_store(tmp_path):
    kept_sample("float64").write(tmp_path / "now.zarr")

    def parts(store):
        return {path.relative_to(store).as_posix() for path in store.rglob("zarr.json")}

    assert parts(tmp_path / "now.zarr") >= parts(STORES / "format-1-float64.zarr")


def test_the_kept_stores_are_small_and_whole():
    for store in STORES.iterdir():
        sizes = [path.stat().st_size for path in store.rglob("*") if path.is_file()]
        assert sum(sizes) < 64 * 1024
    assert len(list(STORES.iterdir())) == 2


def test_a_kept_store_opens_where_nothing_can_be_written(tmp_path, monkeypatch):
    store = shutil.copytree(STORES / "format-1-float64.zarr", tmp_path / "kept.zarr")
    for path in (store, *store.rglob("*")):
        path.chmod(0o555 if path.is_dir() else 0o444)
    try:
        assert open_factors(store).scores().shape == (6, 2)
    finally:
        for path in (store, *store.rglob("*")):
            path.chmod(0o755 if path.is_dir() else 0o644)

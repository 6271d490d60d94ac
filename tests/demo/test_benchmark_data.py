"""The generator of benchmark files: every kind holds the spectrum it says, as LAPACK sees it."""

import importlib.util
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest
import zarr

DATA = Path(__file__).parents[2] / "bench/data.py"


@pytest.fixture(scope="module")
def data():
    spec = importlib.util.spec_from_file_location("bench_data", DATA)
    module = importlib.util.module_from_spec(spec)
    sys.modules["bench_data"] = module
    spec.loader.exec_module(module)
    yield module
    del sys.modules["bench_data"]


def read(path: Path, kind: str) -> np.ndarray:
    if kind.startswith("hdf5"):
        import hdf5plugin  # noqa: F401  registers the filters

        with h5py.File(path) as file:
            return file["matrix"][:]
    return zarr.open_array(str(path), mode="r")[:]


KINDS = ["hdf5-plain", "hdf5-gzip", "hdf5-bitshuffle", "zarr-zstd", "zarr-blosc"]


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("spectrum", ["exponential", "inverse", "inverse-root"])
def test_file_has_the_spectrum_it_says(data, tmp_path, kind, spectrum):
    path = tmp_path / "big"
    data.main([kind, str(path), "--rows", "700", "--columns", "330", "--rank", "30", "--spectrum", spectrum])
    matrix = read(path, kind)
    assert (matrix.shape, matrix.dtype) == ((700, 330), data.DTYPES[kind])
    with np.load(tmp_path / "big.truth.npz") as truth:
        planted, right, noise = truth["singular_values"], truth["right_vectors"], float(truth["noise"])
    centred = matrix.astype("f8") - matrix.mean(axis=0, dtype="f8")
    _, found, vt = np.linalg.svd(centred, full_matrices=False)
    # Weyl: no value moves further than the norm of what was added. Rounding is noise of deviation 1/√12; single
    # precision leaves at most 2⁻²³ of every entry, so 2⁻²³·‖A‖_F in all, doubled for the product's own rounding.
    added = 1.05 * noise * (np.sqrt(700) + np.sqrt(330)) + 2**-22 * np.linalg.norm(planted)
    assert np.max(np.abs(found[:30] - planted)) <= added
    assert found[30] <= added
    assert abs(vt[0] @ right[:, 0]) > 0.999


def test_spikes_stand_above_a_bulk_of_the_deviation_told(data, tmp_path):
    data.main(
        ["hdf5-gzip", str(tmp_path / "s"), "--rows", "900", "--columns", "400", "--spectrum", "spikes", "--level", "40"]
    )
    matrix = read(tmp_path / "s", "hdf5-gzip").astype("f8")
    with np.load(tmp_path / "s.truth.npz") as truth:
        planted, noise = truth["singular_values"], float(truth["noise"])
    found = np.linalg.svd(matrix - matrix.mean(axis=0), compute_uv=False)
    edge = noise * (np.sqrt(900) + np.sqrt(400))
    assert len(planted) == 15
    assert found[15] == pytest.approx(edge, rel=0.05)
    assert planted[0] / edge == pytest.approx(5, rel=1e-3)
    assert found[14] > 1.5 * edge


def test_entries_do_not_depend_on_workers_and_no_count_is_cut(data, tmp_path):
    recipe = data.make_recipe("hdf5-gzip", 1500, 900, rank=20)
    seen = []
    for workers in (1, 3):
        made = data.write_benchmark("hdf5-gzip", tmp_path / f"w{workers}", recipe, chunks=(400, 250), workers=workers)
        seen.append(made.path.read_bytes())
    assert seen[0] == seen[1]
    matrix = read(tmp_path / "w1", "hdf5-gzip")
    assert matrix.min() > 0
    assert matrix.max() < 24 * 300


def test_ordered_rows_hold_the_same_rows_as_shuffled_ones(data):
    shuffled, ordered = (data.make_recipe("hdf5-plain", 500, 40, rank=10, ordered=flag) for flag in (False, True))
    whole = slice(0, 500), slice(0, 40)
    np.testing.assert_allclose(shuffled.block(whole), ordered.block(whole)[shuffled.order], rtol=0, atol=1e-6)
    assert not np.array_equal(shuffled.order, ordered.order)


def test_size_can_be_given_in_gigabytes_and_an_existing_file_is_left_alone(data, tmp_path):
    path = tmp_path / "g.h5"
    data.main(["hdf5-plain", str(path), "--gigabytes", "0.001", "--columns", "100", "--rank", "5"])
    assert read(path, "hdf5-plain").shape == (2500, 100)
    before = path.read_bytes()
    with pytest.raises(SystemExit, match="is there already"):
        data.main(["hdf5-plain", str(path), "--rows", "10", "--columns", "10"])
    assert path.read_bytes() == before

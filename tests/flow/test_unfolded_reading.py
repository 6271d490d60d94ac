"""Stacks with the other options of reading: packed, missing, levels, names; against NumPy on the same array."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import scipy.sparse
import zarr

import bigsvd
from bigsvd.errors import NonFiniteError, OptionError

T, Y, X = 90, 23, 17
FILL = -32768


def film() -> np.ndarray:
    """Invented: five components that halve, around 50."""
    rng = np.random.default_rng(5)
    left = np.linalg.qr(rng.standard_normal((T, 5)))[0] * (400 * 0.5 ** np.arange(5))
    right = np.linalg.qr(rng.standard_normal((Y * X, 5)))[0]
    return np.asarray((left @ right.T + 50).reshape(T, Y, X))


def packed_film(path: Path, gone: np.ndarray, labels: Any = None) -> np.ndarray:
    """A file of packed entries in tiles of uneven edges, by the CF conventions (8.1); returns what it means."""
    packed = np.where(gone, FILL, np.round((film() - 50) / 0.01)).astype("i2")
    with h5py.File(path, "w") as file:
        data = file.create_dataset("film", data=packed, chunks=(20, 8, 7), compression="gzip")
        data.attrs.update({"scale_factor": 0.01, "add_offset": 50.0, "_FillValue": np.int16(FILL)})
        file["when"] = np.arange(T) * 0.5 if labels is None else labels
        file["when"].make_scale("time")
        data.dims[0].label, data.dims[1].label, data.dims[2].label = "time", "y", "x"
        data.dims[0].attach_scale(file["when"])
    return np.where(gone, np.nan, packed * 0.01 + 50.0)


def require_factors(factors: bigsvd.Factors, matrix: np.ndarray) -> None:
    mean = matrix.mean(axis=0)
    u, values, vh = np.linalg.svd(matrix - mean, full_matrices=False)
    k = factors.rank
    assert factors.shape == matrix.shape
    np.testing.assert_allclose(factors.singular_values, values[:k], rtol=1e-6)
    np.testing.assert_allclose(factors.column_mean, mean, rtol=1e-9)
    # Rows and columns stand in the order of the file: the factors give back the entries as LAPACK's do.
    wanted = (u[:3, :k] * values[:k]) @ vh[:k] + mean
    np.testing.assert_allclose(factors.rebuild(slice(0, 3)), wanted, atol=1e-5)


@pytest.mark.parametrize("axis", ["rows", "columns"])
def test_packed_entries_of_a_stack_are_decoded_and_missing_ones_filled(tmp_path: Path, axis: str) -> None:
    gone = np.random.default_rng(1).random((T, Y, X)) < 0.03
    values = packed_film(tmp_path / "film.h5", gone).reshape(T, -1)
    with pytest.raises(NonFiniteError, match=r"time .*, y .*, x "):
        bigsvd.decompose(tmp_path / "film.h5", tmp_path / "no.zarr", rank=4)
    factors = bigsvd.decompose(
        tmp_path / "film.h5", tmp_path / "out.zarr", rank=4, missing="mean", axis=axis, tolerance=1e-8
    )
    filled = np.where(np.isnan(values), np.nanmean(values, axis=0), values)
    centred = filled - filled.mean(axis=0)
    np.testing.assert_allclose(factors.singular_values, np.linalg.svd(centred, compute_uv=False)[:4], rtol=1e-6)
    assert factors.images().shape == (4, Y, X)
    assert factors.attributes["source"]["missing"]["entries"] == gone.sum()
    np.testing.assert_array_equal(factors.axes.samples[0].labels, np.arange(T) * 0.5)
    assert bigsvd.verify(factors, tmp_path / "film.h5", missing="mean").agrees


@pytest.mark.parametrize("axis", ["rows", "columns"])
@pytest.mark.parametrize("region", [None, "time=5:80:3,y=2:20"])
def test_pixels_with_missing_entries_are_left_out_as_by_a_mask(tmp_path: Path, region: str | None, axis: str) -> None:
    gone = np.zeros((T, Y, X), bool)
    gone[8, 3, 4] = gone[41, 3, 5] = gone[:, 19, 16] = gone[62, 9, 0] = True
    values = packed_film(tmp_path / "film.h5", gone)
    values = values[5:80:3, 2:20] if region else values
    reading = {"missing": "drop-columns", "region": region}
    factors = bigsvd.decompose(
        tmp_path / "film.h5", tmp_path / "out.zarr", rank=4, axis=axis, tolerance=1e-8, **reading
    )
    whole = ~np.isnan(values).any(axis=0)
    assert not whole.all()
    require_factors(factors, values[:, whole])
    np.testing.assert_array_equal(np.isnan(factors.images()), np.broadcast_to(~whole, (4, *whole.shape)))
    left_out = factors.attributes["source"]["missing"]["left_out"]
    numbers = [number for first, stop in left_out for number in range(first, stop)]
    assert numbers == np.flatnonzero(~whole.reshape(-1)).tolist()
    assert bigsvd.verify(factors, tmp_path / "film.h5", **reading).agrees


def test_frames_with_missing_entries_are_left_out_and_their_names_with_them(tmp_path: Path) -> None:
    gone = np.zeros((T, Y, X), bool)
    gone[[3, 50, 51], [0, 20, 5], [1, 2, 3]] = True
    words = np.array([f"night {number}" for number in range(T)], dtype="S")
    values = packed_film(tmp_path / "film.h5", gone, labels=words)
    factors = bigsvd.decompose(tmp_path / "film.h5", tmp_path / "out.zarr", rank=4, missing="drop-rows", tolerance=1e-8)
    kept = ~gone.any(axis=(1, 2))
    require_factors(factors, values[kept].reshape(kept.sum(), -1))
    assert list(factors.sample_names[:]) == [word.decode() for word in words[kept]]
    images = factors.images(2, side="samples")
    assert images.shape[1:] == (T,)
    np.testing.assert_array_equal(np.isnan(images[0]), ~kept)
    again = bigsvd.open_factors(tmp_path / "out.zarr")
    np.testing.assert_array_equal(again.axes.sample_mask, kept)


@pytest.mark.parametrize("axis", ["rows", "columns"])
def test_names_and_what_is_left_out_stand_in_the_order_of_the_file_where_samples_have_two_axes(
    tmp_path: Path, axis: str
) -> None:
    values = film()[:, :, :16].reshape(T, 23, 4, 4)
    values[3, 4, 1, 2] = values[89, 22, 0, 0] = np.nan
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("s", data=values, chunks=(32, 9, 4, 4))
    (tmp_path / "names.txt").write_text("".join(f"n{number}\n" for number in range(T * 23)))
    reading = {"sample_axes": "0,1", "missing": "drop-rows", "row_names": str(tmp_path / "names.txt")}
    factors = bigsvd.decompose(tmp_path / "a.h5", tmp_path / "o.zarr", rank=4, axis=axis, tolerance=1e-8, **reading)
    matrix = values.reshape(T * 23, 16)
    kept = ~np.isnan(matrix).any(axis=1)
    require_factors(factors, matrix[kept])
    assert list(factors.sample_names[:]) == [f"n{number}" for number in np.flatnonzero(kept)]
    assert factors.attributes["source"]["missing"]["left_out"] == [[3 * 23 + 4, 3 * 23 + 5], [T * 23 - 1, T * 23]]
    np.testing.assert_array_equal(np.isnan(factors.images(1, side="samples")[0]), ~kept.reshape(T, 23))
    assert bigsvd.verify(factors, tmp_path / "a.h5", **reading).agrees


@pytest.mark.parametrize("zarr_format", [2, 3])
def test_a_level_of_an_image_is_taken_and_then_unfolded(tmp_path: Path, zarr_format: int) -> None:
    group = zarr.create_group(tmp_path / "cells.zarr", zarr_format=zarr_format)
    values = film()
    for level in (0, 1):
        group.create_array(str(level), data=values[:, :: 1 + level, :: 1 + level], chunks=(30, 8, 8))
    # OME-Zarr 0.4 and 0.5, section multiscales: axes in the order of the arrays.
    axes = [{"name": "t", "type": "time"}, {"name": "y", "type": "space"}, {"name": "x", "type": "space"}]
    scales = [{"axes": axes, "datasets": [{"path": "0"}, {"path": "1"}]}]
    group.attrs.update(
        {"multiscales": [{"version": "0.4", **scales[0]}]}
        if zarr_format == 2
        else {"ome": {"version": "0.5", "multiscales": scales}}
    )
    source = bigsvd.open_matrix(tmp_path / "cells.zarr", level=1)
    half = values[:, ::2, ::2]
    assert source.spec.unfolding.words() == f"90 samples (axis t) × {half[0].size} features (y 12 × x 9)"
    assert "multiscales" in source.spec.hint_reason
    factors = bigsvd.decompose(tmp_path / "cells.zarr", rank=4, level=1, tolerance=1e-8)
    require_factors(factors, half.reshape(T, -1))
    assert bigsvd.open_matrix(tmp_path / "cells.zarr").spec.shape == (T, Y * X)


def test_a_part_of_a_matrix_keeps_the_names_of_its_lines(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        data = file.create_dataset("x", data=np.random.default_rng(2).normal(size=(40, 30)))
        for axis, (name, count) in enumerate((("time", 40), ("station", 30))):
            file[name] = [f"{name} {number}" for number in range(count)]
            file[name].make_scale(name)
            data.dims[axis].attach_scale(file[name])
    mask = np.arange(30) % 3 == 1
    factors = bigsvd.decompose(tmp_path / "a.h5", tmp_path / "out.zarr", rank=3, region="time=4:40:5", mask=mask)
    assert list(factors.sample_names[:]) == [f"time {number}" for number in range(4, 40, 5)]
    assert list(factors.feature_names[:]) == [f"station {number}" for number in range(1, 30, 3)]


def test_axes_of_a_sparse_matrix_are_refused() -> None:
    sparse = scipy.sparse.random_array((30, 20), density=0.1, rng=np.random.default_rng(3)).tocsr()
    with pytest.raises(OptionError, match="is sparse"):
        bigsvd.open_matrix(sparse, region="0:10")

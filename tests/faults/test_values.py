"""What is in the matrix, and what is asked of it: NaN, constants, offsets, extremes, ranks, layouts."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import zarr
from fault_samples import Night, heights, result_bits, write_hdf5

import bigsvd

EPS = float(np.finfo(float).eps)


def stored(night: Night, values: Any, **options: Any) -> None:
    """Put another matrix into the night's file."""
    with h5py.File(night.file, "w") as file:
        file.create_dataset("heights", data=values, **options)


def exact(matrix: np.ndarray, *, center: bool = True) -> np.ndarray:
    """Singular values of the stored entries, in double."""
    wide = matrix.astype(np.result_type(matrix.dtype, np.float64))
    return np.linalg.svd(wide - wide.mean(axis=0) if center else wide, compute_uv=False)


# ------------------------------------------------------------------------------------------------------- 34: what it is
def test_34_objects_in_a_zarr_array_are_never_decoded(night: Night, tmp_path: Path) -> None:
    import json

    folder = tmp_path / "objects.zarr"
    folder.mkdir()
    metadata = {
        "zarr_format": 2, "shape": [4, 4], "chunks": [4, 4], "dtype": "|O", "compressor": None, "fill_value": None,
        "order": "C", "filters": [{"id": "pickle", "protocol": 5}],
    }  # fmt: skip
    (folder / ".zarray").write_text(json.dumps(metadata))
    (folder / "0.0").write_bytes(b"cos\nsystem\n(S'touch pwned'\ntR.")
    night.file = folder
    assert "UnsupportedMatrixError" in night.refused(2)


# -------------------------------------------------------------------------------------------------- 35: NaN, infinity
@pytest.mark.parametrize(
    ("place", "bad", "count", "route"),
    [
        ((3199, 159), np.nan, 1, "krylov"),
        ((slice(None), 7), np.inf, 3200, "gram"),
        ((1234, slice(None)), -np.inf, 160, "tsqr"),
        ((slice(0, 3), slice(0, 2)), np.nan, 6, "direct"),
    ],
    ids=["in the last place", "a column", "a row", "a corner"],
)
def test_35_values_that_are_no_numbers_are_counted_and_placed(
    place: Any, bad: float, count: int, route: str, night: Night
) -> None:
    matrix = heights().astype("f4")
    matrix[place] = bad
    stored(night, matrix, chunks=(32, 160))
    text = night.refused(2, route=route)
    assert f"{count:,} value" in text
    row, column = np.argwhere(~np.isfinite(matrix))[0]
    assert f"first at row {row:,}, column {column:,} (counted from 0)" in text
    # The same command would end so again: no journal stays.
    assert not night.journal.exists()


# -------------------------------------------------------------------------------------- 36: constants, repeats, no rank
DEGENERATE = {
    "constant column": lambda matrix: matrix.__setitem__((slice(None), 5), 42.0),
    "zero column": lambda matrix: matrix.__setitem__((slice(None), 5), 0.0),
    "all zero": lambda matrix: matrix.__setitem__(slice(None), 0.0),
    "constant": lambda matrix: matrix.__setitem__(slice(None), 7.5),
    "duplicate rows": lambda matrix: matrix.__setitem__(slice(None), matrix[:1]),
    "rank three": lambda matrix: matrix.__setitem__(slice(None), matrix[:, :3] @ matrix[:3, :]),
}


@pytest.mark.parametrize("scale", ["none", "unit"])
@pytest.mark.parametrize("case", DEGENERATE)
def test_36_degenerate_matrices_have_orthonormal_factors_and_no_nan(case: str, scale: str, night: Night) -> None:
    matrix = heights(800, 40).copy()
    DEGENERATE[case](matrix)
    stored(night, matrix, chunks=(32, 40))
    night.options = {"rank": 6, "scale": scale, "memory": "1GiB"}
    night.done()
    factors = bigsvd.open_factors(night.out)
    assert factors.rank == 6
    left, right = factors.left_vectors[:], factors.right_vectors[:]
    for side in (left, right):
        assert np.isfinite(side).all()
        np.testing.assert_allclose(side.T @ side, np.eye(6), atol=1e-12)
    assert np.isfinite(factors.singular_values[:]).all()
    assert np.isfinite(factors.column_scale[:]).all()
    assert (factors.column_scale[:] > 0).all()
    centred = matrix - matrix.mean(axis=0)
    constant = np.ptp(matrix, axis=0) == 0
    centred[:, constant] = 0
    if scale == "unit":
        centred[:, ~constant] /= matrix[:, ~constant].std(axis=0, ddof=1)
    true = np.linalg.svd(centred, compute_uv=False)[:6]
    np.testing.assert_allclose(factors.singular_values[:], true, rtol=1e-3, atol=1e-7 * max(true[0], 1e-300))
    assert (np.asarray(factors.certificate.upper)[true == 0] < 1e-5).all()


# -------------------------------------------------------------------------------------------- 37, 38: offsets, extremes
@pytest.mark.parametrize("route", ["gram", "krylov"])
@pytest.mark.parametrize("offset", [1e4, 1e6, 1e8])
def test_37_a_large_offset_in_single_costs_no_figure_of_what_is_stored(offset: float, route: str, night: Night) -> None:
    matrix = (heights() / heights().std() + offset).astype("f4")
    stored(night, matrix, chunks=(32, 160))
    night.done(route=route, tolerance=1e-3)
    factors = bigsvd.open_factors(night.out)
    true = exact(matrix)[:4]
    np.testing.assert_allclose(factors.singular_values[:], true, rtol=1e-3)
    assert np.all(np.asarray(factors.certificate.lower) <= true * (1 + 1e-9))
    assert np.all(true * (1 - 1e-9) <= np.asarray(factors.certificate.upper))
    # The mean itself is that of the entries, summed in double.
    np.testing.assert_allclose(factors.column_mean[:], matrix.astype(float).mean(axis=0), rtol=1e-12)


@pytest.mark.parametrize(("dtype", "size"), [("f4", 1e-30), ("f4", 1e30), ("f8", 1e-45), ("f8", 1e45), ("f4", 1e-42)])
def test_38_squares_that_leave_single_precision_are_no_matter(dtype: str, size: float, night: Night) -> None:
    # 1e-42 is denormal in single: a few figures are all that is stored.
    matrix = (heights() * size).astype(dtype)
    stored(night, matrix, chunks=(32, 160))
    night.done(tolerance=1e-3)
    factors = bigsvd.open_factors(night.out)
    true = exact(matrix.astype(float) / size)[:4] * size
    np.testing.assert_allclose(factors.singular_values[:], true, rtol=1e-3)


@pytest.mark.parametrize(
    ("size", "route", "center"),
    [
        *((1e-290, "krylov", "none"), (1e-200, "krylov", "features"), (1e-200, "gram", "features")),
        *((1e-200, "gram", "none"), (1e-170, "tsqr", "features"), (1e-170, "direct", "none")),
        *((1e-150, "krylov", "features"), (1e150, "gram", "features"), (1e200, "krylov", "none")),
    ],
)
def test_38_powers_that_leave_double_precision_are_refused_with_a_remedy(
    size: float, route: str, center: str, night: Night
) -> None:
    """Below 1e-162 squares are zero, and the matrix would pass for one of zeros."""
    stored(night, heights() * size, chunks=(32, 160))
    text = night.refused(2, route=route, center=center)
    assert "power of two" in text
    assert str(night.file) in text
    assert not night.journal.exists()


# --------------------------------------------------------------------------------------------------- 51: what is asked
@pytest.mark.parametrize(
    ("rank", "words"),
    [("0", "at least 1, not 0"), ("-3", "not -3"), ("2.5", "2.5"), ("ten", "ten"), ("1e3", "1e3")],
)
def test_51_a_rank_that_is_none_is_refused_before_anything_is_opened(rank: str, words: str, night: Night) -> None:
    text = night.refused(2, rank=rank)
    assert "--rank" in text
    assert words in text


@pytest.mark.parametrize(("rank", "route"), [(40, "krylov"), (41, "gram"), (10_000, "tsqr"), (10_000, "direct")])
def test_51_a_rank_of_the_shorter_side_or_more_gives_all_there_is(rank: int, route: str, night: Night) -> None:
    matrix = heights(640, 40)
    stored(night, matrix, chunks=(32, 40))
    night.options = {"rank": rank, "route": route, "memory": "1GiB"}
    night.done()
    factors = bigsvd.open_factors(night.out)
    assert factors.rank == 40
    np.testing.assert_allclose(factors.singular_values[:], exact(matrix)[:40], rtol=1e-3)
    clipped = f"rank clipped from {rank:,} to 40, all that a 640 × 40 matrix has"
    assert (clipped in factors.attributes["remarks"]) == (rank > 40)


# ------------------------------------------------------------------------------------------------------- 52: layouts
def test_52_the_same_plan_gives_the_same_bits_with_any_number_of_workers(night: Night) -> None:
    wanted = night.done(workers=1)
    for workers in (2, 16):
        assert night.done(workers=workers) == wanted


def layouts(folder: Path, matrix: np.ndarray) -> dict[str, tuple[Path, dict[str, Any]]]:
    """The same entries stored in many ways."""
    made: dict[str, tuple[Path, dict[str, Any]]] = {}
    for name, options in {
        "plain": {"chunks": (32, 160)}, "gzip": {"chunks": (64, 40), "compression": "gzip", "shuffle": True},
        "narrow": {"chunks": (640, 8), "compression": "lzf"},
    }.items():  # fmt: skip
        made[name] = (write_hdf5(folder / f"{name}.h5", matrix, **options), {})
    made["transposed"] = (write_hdf5(folder / "turned.h5", matrix.T, chunks=(160, 32)), {"samples": "columns"})
    for version in (2, 3):
        array = zarr.create_array(
            str(folder / f"v{version}.zarr"), shape=matrix.shape, chunks=(80, 80), dtype="f8", zarr_format=version
        )
        array[:] = matrix
        made[f"zarr {version}"] = (folder / f"v{version}.zarr", {})
    np.save(folder / "heights.npy", matrix)
    made["npy"] = (folder / "heights.npy", {})
    return made


def test_52_every_layout_gives_the_same_answer_to_the_tolerance(night: Night, tmp_path: Path) -> None:
    true = exact(heights())[:4]
    vectors = None
    night.options = {"rank": 4, "memory": "1GiB"}
    for name, (file, options) in layouts(tmp_path, heights()).items():
        night.file = file
        night.done(**options)
        factors = bigsvd.open_factors(night.out)
        np.testing.assert_allclose(factors.singular_values[:], true, rtol=1e-3, err_msg=name)
        vectors = factors.right_vectors[:] if vectors is None else vectors
        angles = np.abs(np.sum(vectors * factors.right_vectors[:], axis=0))
        np.testing.assert_allclose(angles, 1, atol=1e-4, err_msg=name)


def test_52_the_same_command_gives_the_same_bits_tomorrow(night: Night) -> None:
    first = night.done()
    assert night.done() == first
    assert re.fullmatch(r"[0-9.]+", bigsvd.open_factors(night.out).attributes["versions"]["bigsvd"])
    assert result_bits(night.out) == first

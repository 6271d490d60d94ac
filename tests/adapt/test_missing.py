"""Missing entries are filled or left out as a plain NumPy reading of the same policy does, and are counted and said."""

from __future__ import annotations

import json
import pickle
import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import zarr

import bigsvd
from bigsvd.adapt import MissingSource
from bigsvd.drive import settle_missing
from bigsvd.errors import NonFiniteError, OptionError
from bigsvd.plan import Request, make_plan
from bigsvd.source import MatrixSpec, Missing, tile_bytes, tiles
from bigsvd.sweep import Control, Progress

Command = Callable[..., subprocess.CompletedProcess[str]]
KINDS = ("npy f8", "npy f4", "hdf5 f4", "zarr f8", "zarr c8", "packed i2")
SHAPE = (260, 90)
FILL = -32768


class Cut(BaseException):
    """Ends a run in the middle."""


def gappy(seed: int = 1, *, samples: str = "rows", gaps: str = "anywhere") -> np.ndarray:
    """A matrix with structure and a large mean, and NaN where entries are missing."""
    rng = np.random.default_rng(seed)
    rows, columns = SHAPE
    matrix = rng.normal(size=(rows, 5)) * [30, 20, 12, 7, 4] @ rng.normal(size=(5, columns)) / 10
    matrix += rng.normal(size=SHAPE) / 10 + rng.normal(50, 20, columns if samples == "rows" else (rows, 1))
    if gaps == "anywhere":
        matrix[rng.random(SHAPE) < 0.06] = np.nan
    elif gaps == "few lines":
        matrix[[0, 17, 17, 18, 200, 259], [3, 3, 4, 4, 60, 89]] = np.nan
    return matrix


def write(folder: Path, kind: str, matrix: np.ndarray) -> tuple[Path, np.ndarray]:
    """A file of that kind, and the entries that are in it, decoded."""
    container, code = kind.split()
    if container == "packed":
        packed = np.where(np.isnan(matrix), FILL, np.round((matrix - 50) / 0.01)).astype("i2")
        with h5py.File(folder / "a.nc", "w") as file:
            data = file.create_dataset("x", data=packed, chunks=(32, 25), compression="gzip", shuffle=True)
            data.attrs.update({"scale_factor": 0.01, "add_offset": 50.0, "_FillValue": np.int16(FILL)})
        return folder / "a.nc", np.where(packed == FILL, np.nan, packed * 0.01 + 50.0)
    values = matrix.astype(code)
    if code == "c8":
        values = (matrix + 1j * np.roll(np.nan_to_num(matrix), 7, axis=1)).astype(code)
    if container == "npy":
        np.save(folder / "a.npy", values)
        return folder / "a.npy", values
    if container == "hdf5":
        with h5py.File(folder / "a.h5", "w") as file:
            file.create_dataset("x", data=values, chunks=(32, 25), compression="gzip")
        return folder / "a.h5", values
    array = zarr.create_array(folder / "a.zarr", shape=values.shape, chunks=(70, 40), dtype=values.dtype)
    array[:] = values
    return folder / "a.zarr", values


def plain_policy(matrix: np.ndarray, policy: str, samples: str) -> np.ndarray:
    """The same policy as whoever reads its description would write it for an array in memory."""
    missing = np.isnan(matrix)
    if policy == "drop-rows":
        return matrix[~missing.any(axis=1)]
    if policy == "drop-columns":
        return matrix[:, ~missing.any(axis=0)]
    wide = matrix.astype(np.result_type(matrix, np.float64))
    means = np.nanmean(wide, axis=0 if samples == "rows" else 1, keepdims=True)
    return np.where(missing, means, wide).astype(matrix.dtype)


def spectrum(matrix: np.ndarray, samples: str, scale: str = "none") -> np.ndarray:
    wide = matrix.astype(np.result_type(matrix, np.float64))
    wide = wide if samples == "rows" else wide.T
    wide = wide - wide.mean(axis=0)
    if scale == "unit":
        wide /= wide.std(axis=0, ddof=1)
    values: np.ndarray = np.linalg.svd(wide, compute_uv=False)
    return values


def settled(path: Any, policy: str, samples: str = "rows", workers: int = 2, **options: Any) -> Any:
    """The source after the read that counts."""
    source = bigsvd.open_matrix(path, missing=policy)
    assert isinstance(source, MissingSource)
    plan = make_plan(source.spec, Request(rank=2, samples=samples, workers=workers), ceiling=2**30)  # type: ignore[arg-type]
    return settle_missing(source, plan, Control())


def whole(source: Any) -> np.ndarray:
    rows, columns = source.spec.shape
    out = np.full((rows, columns), 7, source.spec.dtype)
    source.read((0, rows), (0, columns), out)
    return out


# --------------------------------------------------------------------------------------------- against plain NumPy
@pytest.mark.parametrize("policy", ["mean", "drop-rows", "drop-columns"])
@pytest.mark.parametrize("samples", ["rows", "columns"])
@pytest.mark.parametrize("kind", KINDS)
def test_entries_and_spectrum_are_those_of_the_same_policy_in_numpy(
    kind: str, samples: str, policy: str, tmp_path: Path
) -> None:
    gaps = "anywhere" if policy == "mean" else "few lines"
    path, values = write(tmp_path, kind, gappy(samples=samples, gaps=gaps))
    expected = plain_policy(values, policy, samples)
    source = settled(path, policy, samples)
    found = whole(source)
    assert found.shape == source.spec.shape == expected.shape
    there = ~np.isnan(values) if policy == "mean" else np.ones(expected.shape, bool)
    step = float(np.finfo(expected.dtype).eps)
    if kind == "packed i2":
        # Packed · scale + offset rounds twice; NumPy may round once.
        assert np.allclose(found[there], expected[there], rtol=2 * step)
    else:
        assert np.array_equal(found[there], expected[there])
    assert np.allclose(found[~there], expected[~there], rtol=max(step, 1e-14))
    # Whatever the rectangle.
    again = np.full_like(found, 3)
    rows, columns = found.shape
    for top, bottom in ((0, 33), (33, 34), (34, rows)):
        for left, right in ((0, 41), (41, columns)):
            source.read((top, bottom), (left, right), again[top:bottom, left:right])
    assert np.array_equal(found, again)
    assert np.array_equal(whole(pickle.loads(pickle.dumps(source))), found)
    factors = bigsvd.decompose(path, rank=4, samples=samples, missing=policy)
    assert factors.left_vectors.shape[0] == expected.shape[0 if samples == "rows" else 1]
    assert np.allclose(factors.singular_values, spectrum(found, samples)[:4], rtol=1e-9)


@pytest.mark.parametrize("route", ["krylov", "gram", "tsqr", "direct"])
@pytest.mark.parametrize("axis", ["rows", "columns"])
def test_every_route_along_either_axis_reads_the_filled_matrix(axis: str, route: str, tmp_path: Path) -> None:
    path, values = write(tmp_path, "hdf5 f4", gappy())
    expected = spectrum(plain_policy(values, "mean", "rows"), "rows", "unit")
    factors = bigsvd.decompose(path, rank=3, missing="mean", axis=axis, route=route, scale="unit", panel_lines=32)
    certificate = factors.certificate
    assert np.all((certificate.lower <= expected[:3]) & (expected[:3] <= certificate.upper))
    assert np.allclose(factors.singular_values, expected[:3], rtol=1e-5)


def test_filling_with_the_mean_leaves_the_mean_as_it_is(tmp_path: Path) -> None:
    path, values = write(tmp_path, "npy f8", gappy())
    factors = bigsvd.decompose(path, rank=3, missing="mean")
    assert np.allclose(factors.column_mean, np.nanmean(values, axis=0), rtol=1e-13)


def test_means_are_the_same_bits_whatever_the_workers(tmp_path: Path) -> None:
    path, _ = write(tmp_path, "zarr f8", gappy())
    one, three = (settled(path, "mean", workers=workers) for workers in (1, 3))
    assert np.array_equal(one.means, three.means)
    assert one.spec.fingerprint == three.spec.fingerprint


# ------------------------------------------------------------------------------------------------------ edge cases
@pytest.mark.parametrize("policy", ["mean", "drop-rows", "drop-columns"])
def test_where_nothing_is_missing_every_bit_is_as_without_the_option(policy: str, tmp_path: Path) -> None:
    path, _ = write(tmp_path, "hdf5 f4", gappy(gaps="none"))
    options: dict[str, Any] = {"rank": 4, "route": "krylov", "panel_lines": 32, "axis": "rows"}
    plain, asked = bigsvd.decompose(path, **options), bigsvd.decompose(path, missing=policy, **options)
    for name in ("left_vectors", "singular_values", "right_vectors", "column_mean"):
        assert np.array_equal(getattr(plain, name)[:], getattr(asked, name)[:]), name
    assert plain.attributes["plan"] == asked.attributes["plan"]
    assert Missing(**asked.attributes["source"]["missing"]).words == "none found"


def test_whole_numbers_are_never_missing_and_not_read_for_it() -> None:
    counts = np.random.default_rng(1).poisson(5, (100, 30))
    factors = bigsvd.decompose(counts, rank=2, missing="mean")
    assert "missing" not in factors.attributes["timings"]
    assert factors.attributes["source"]["missing"]["found"] is True


@pytest.mark.parametrize("samples", ["rows", "columns"])
def test_a_feature_without_any_entry_is_refused_by_number(samples: str) -> None:
    matrix = gappy()
    matrix[:, [11, 60]] = np.nan
    matrix = matrix if samples == "rows" else np.ascontiguousarray(matrix.T)
    axis = "columns" if samples == "rows" else "rows"
    with pytest.raises(NonFiniteError, match="2 features have no entry at all") as caught:
        bigsvd.decompose(matrix, rank=2, missing="mean", samples=samples)
    assert caught.value.evidence == (f"{axis} 11, 60 (counted from 0)",)
    assert f"--missing drop-{axis}" in caught.value.remedy


def test_a_sample_without_any_entry_becomes_the_mean_and_so_nothing() -> None:
    matrix = gappy()
    matrix[40] = np.nan
    factors = bigsvd.decompose(matrix, rank=3, missing="mean")
    assert np.allclose(factors.left_vectors[40], 0, atol=1e-12)


@pytest.mark.parametrize("policy", ["mean", "drop-rows", "drop-columns"])
def test_infinity_is_never_missing(policy: str) -> None:
    matrix = gappy()
    missing = int(np.isnan(matrix).sum())
    matrix[30, 5], matrix[30, 80], matrix[200, 2] = np.inf, -np.inf, np.inf
    missing -= int(np.isnan(gappy()[[30, 30, 200], [5, 80, 2]]).sum())
    with pytest.raises(NonFiniteError, match="3 values are infinite") as caught:
        bigsvd.decompose(matrix, rank=2, missing=policy)
    assert caught.value.evidence[0] == "first at row 30, column 5 (counted from 0)"
    assert f"{missing:,} others are missing" in caught.value.evidence[1]


@pytest.mark.parametrize("policy", ["drop-rows", "drop-columns"])
def test_where_nothing_or_nearly_nothing_is_left_the_run_ends(policy: str) -> None:
    matrix = gappy()
    matrix[:, 0] = matrix[0] = np.nan
    with pytest.raises(NonFiniteError, match=r"too few to decompose") as caught:
        bigsvd.decompose(matrix, rank=2, missing=policy)
    assert caught.value.problem.startswith("array in memory: 0 of ")
    assert "--missing mean" in caught.value.remedy


def test_entries_missing_by_attributes_are_refused_with_what_decoded_them(tmp_path: Path) -> None:
    path, values = write(tmp_path, "packed i2", gappy())
    with pytest.raises(NonFiniteError, match=f"{np.isnan(values).sum():,} values") as caught:
        bigsvd.decompose(path, rank=2)
    assert caught.value.evidence[-1].endswith("scale_factor 0.01, add_offset 50, _FillValue -32768; as float64")


def test_another_word_is_refused_with_those_that_are_known() -> None:
    with pytest.raises(OptionError, match="--missing guess is not a choice"):
        bigsvd.open_matrix(gappy(), missing="guess")


def test_what_is_left_out_is_recorded_by_its_place_in_the_file(tmp_path: Path) -> None:
    path, values = write(tmp_path, "hdf5 f4", gappy(gaps="few lines"))
    factors = bigsvd.decompose(path, tmp_path / "o.zarr", rank=3, missing="drop-rows")
    record = bigsvd.open_factors(tmp_path / "o.zarr").attributes["source"]
    assert record["missing"]["left_out"] == [[0, 1], [17, 19], [200, 201], [259, 260]]
    assert (record["missing"]["entries"], record["missing"]["rows"], record["missing"]["columns"]) == (6, 5, 4)
    kept = np.ones(260, bool)
    for first, stop in record["missing"]["left_out"]:
        kept[first:stop] = False
    assert np.array_equal(kept, ~np.isnan(values).any(axis=1))
    assert record["shape"] == [255, 90]
    assert factors.left_vectors.shape[0] == 255


# ------------------------------------------------------------------------------------------- tiles, memory, going on
@pytest.mark.parametrize("storage", ["plain", "compressed", "npy"])
@pytest.mark.parametrize("chunks", [(1, 100), (7, 13), (1000, 1), (64, 100)])
def test_tiles_cover_a_rectangle_once_in_whole_chunks(chunks: tuple[int, int], storage: str) -> None:
    spec = MatrixSpec("a", (1000, 100), np.dtype("f4"), chunks, storage)
    for rows, columns in (((0, 1000), (0, 100)), ((5, 993), (17, 61)), ((4, 5), (3, 4))):
        for most in (100, 4000, 2**20):
            seen = np.zeros(spec.shape, int)
            touched: set[tuple[int, int]] = set()
            for (top, bottom), (left, right) in tiles(spec, rows, columns, most):
                seen[top:bottom, left:right] += 1
                assert (bottom - top) * (right - left) * 4 <= tile_bytes(spec, most)
                here = {
                    (i, j)
                    for i in range(top // chunks[0], (bottom - 1) // chunks[0] + 1)
                    for j in range(left // chunks[1], (right - 1) // chunks[1] + 1)
                }
                # Only what lies in rows as it is may be read in parts.
                assert (storage == "plain" and chunks[0] == 1) or not here & touched
                touched |= here
            inside = seen[rows[0] : rows[1], columns[0] : columns[1]]
            assert np.all(inside == 1)
            assert seen.sum() == inside.size


@pytest.mark.parametrize("policy", ["mean", "drop-columns"])
def test_a_run_within_its_memory(policy: str, tmp_path: Path, command: Command) -> None:
    rng = np.random.default_rng(4)
    array = zarr.create_array(tmp_path / "a.zarr", shape=(40_000, 1500), chunks=(1000, 1500), dtype="f4")
    for start in range(0, 40_000, 1000):
        block = rng.normal(size=(1000, 1500)).astype("f4") + 3 * rng.normal(size=(1000, 1)).astype("f4")
        block[rng.integers(0, 1000, 50), rng.integers(0, 1500, 50) if policy == "mean" else 7] = np.nan
        array[start : start + 1000] = block
    line = ["--rank", 3, "--memory", "400MiB", "--missing", policy, "--max-sweeps", 2, "--json", "--quiet"]
    ended = command("decompose", tmp_path / "a.zarr", *line, "--out", tmp_path / "o.zarr")
    assert ended.returncode in (0, 3), ended.stderr
    found = json.loads(ended.stdout)
    assert found["peak_resident_bytes"] <= found["planned_bytes"] <= found["memory_bytes"]
    assert found["source"]["missing"]["rows"] > 1000
    assert found["timings"]["missing"] > 0
    # The read that counts is one more, and is counted.
    assert found["plan"]["resident"] is False
    assert found["bytes_read"] >= found["matrix_bytes"] * (1 + found["sweeps"])


def test_the_plan_counts_the_read_that_counts(tmp_path: Path) -> None:
    path, values = write(tmp_path, "npy f8", gappy())
    plain, asked = bigsvd.forecast(path, rank=3), bigsvd.forecast(path, rank=3, missing="mean")
    assert asked.bytes_to_read == plain.bytes_to_read + values.nbytes
    assert asked.costs().seconds > plain.costs().seconds
    assert asked.plan.planned_bytes > plain.plan.planned_bytes
    assert asked.plan.spec.missing is not None
    # What was planned is what is then done.
    made = bigsvd.decompose(path, rank=3, missing="mean")
    assert made.attributes["planned_bytes"] == asked.plan.planned_bytes


def test_a_run_that_was_cut_goes_on_with_the_same_bits(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("bigsvd.plan.geometry.WAVE_SECONDS", 1e-6)
    path, _ = write(tmp_path, "hdf5 f4", gappy(gaps="few lines"))
    options: dict[str, Any] = {
        "rank": 4, "route": "krylov", "axis": "rows", "panel_lines": 16, "missing": "mean", "save_every": 0.0,
        "memory": "1GiB", "tolerance": 1e-6,
    }  # fmt: skip

    def cut(event: Progress) -> None:
        if event.sweep == 2 and event.bytes_done > event.bytes_total / 2:
            raise Cut

    once = bigsvd.decompose(path, tmp_path / "whole.zarr", **options)
    with pytest.raises(Cut):
        bigsvd.decompose(path, tmp_path / "o.zarr", progress=cut, **options)
    with pytest.raises(bigsvd.errors.OtherRunError):
        bigsvd.decompose(path, tmp_path / "o.zarr", **(options | {"missing": "drop-rows"}))
    again = bigsvd.decompose(path, tmp_path / "o.zarr", **options)
    assert again.attributes["resumed"] == 1
    for name in ("left_vectors", "singular_values", "right_vectors"):
        assert np.array_equal(getattr(once, name)[:], getattr(again, name)[:]), name


# -------------------------------------------------------------------------------------------------------- the words
def test_the_commands_say_what_is_missing_and_what_becomes_of_it(tmp_path: Path, command: Command) -> None:
    path, _ = write(tmp_path, "hdf5 f4", gappy(gaps="few lines"))

    def said(*line: object, status: int = 0) -> str:
        ended = command(*line)
        assert ended.returncode == status, ended.stderr
        return " ".join((ended.stdout + ended.stderr).split())

    refused = said("decompose", path, "--rank", 3, "--out", tmp_path / "o.zarr", status=2)
    assert "6 values are NaN or infinite" in refused
    assert "in 5 of 260 rows; most in row 17 (2), 0 (1), 18 (1)" in refused
    assert "in 4 of 90 columns; most in column 3 (2), 4 (2), 60 (1)" in refused
    assert "Add --missing mean" in refused
    planned = said("plan", path, "--rank", 3, "--missing", "drop-rows")
    words = "rows that have any are left out; one read of 91.4 KiB before the sweeps counts them"
    assert f"missing {words}, and the plan is made of what remains" in planned
    assert "expected in 2 sweeps and one that counts missing entries" in planned
    made = said("decompose", path, "--rank", 3, "--missing", "drop-rows", "--out", tmp_path / "o.zarr")
    found = "missing 6 entries (0.00026 of all) in 5 of 260 rows and 4 of 90 columns; 5 rows left out, 255 remain"
    assert made.count(found) == 2, "before the run, and in the summary"
    assert "counting missing entries: 91.4 KiB" in made
    assert said("verify", tmp_path / "o.zarr", path, "--missing", "drop-rows")
    other = said("verify", tmp_path / "o.zarr", path, status=2)
    assert "was made with --missing drop-rows" in other
    assert "Add --missing drop-rows." in other


@pytest.mark.parametrize("axis", ["rows", "columns"])
def test_infinities_are_told_from_what_is_missing(axis: str) -> None:
    matrix = gappy(gaps="few lines")
    matrix[100, 3] = np.inf
    with pytest.raises(NonFiniteError, match="7 values") as caught:
        bigsvd.decompose(matrix, rank=3, axis=axis, panel_lines=16)
    assert caught.value.evidence[1:] == (
        "in 6 of 260 rows; most in row 17 (2), 0 (1), 18 (1)",
        "in 4 of 90 columns; most in column 3 (3), 4 (2), 60 (1)",
        "6 are NaN, 1 infinite",
    )
    assert "do not count as missing" in caught.value.remedy

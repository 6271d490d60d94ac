"""Branches that seldom run: each test fails when its branch is taken out, as was tried (see beside each)."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import table
from promise_samples import ChangingSource, CountingSource, write_gzip_counts
from table import CENTRED, PLAIN, SCALED

import bigsvd
from bigsvd.errors import OptionError, SourceChangedError

ROWS: dict[str, Any] = {"route": "krylov", "axis": "rows", "memory": "1GiB"}


def pilot_panels(shape: tuple[int, int], dtype: str, **options: Any) -> tuple[int, ...]:
    """Panels that the pilot of such a matrix reads, whatever is in it."""
    return bigsvd.forecast(np.zeros(shape, dtype), **ROWS, **options).plan.pilot_panels


def centred(matrix: np.ndarray) -> np.ndarray:
    wide = matrix.astype(np.result_type(matrix.dtype, np.float64))
    return np.asarray(wide - wide.mean(axis=0))


# ------------------------------------------------------------------------------------------------------------ restart
# Without `state.restart` in drive/run.py the basis has no room and the run ends open; without `scratch.map @ kept` in
# State.restart the left vectors are not orthonormal.
@pytest.mark.parametrize(("name", "preparation"), [("root_harmonic", CENTRED), ("complex128_offset", SCALED)])
def test_a_run_converges_through_restarts_at_the_width_limit(name: str, preparation: tuple[str, str]) -> None:
    made, truth = table.entry(name), table.truth(name, preparation)
    center, scale = preparation
    options = {"rank": 5, "panel_lines": 40, "max_sweeps": 20, "tolerance": 1e-6, "center": center, "scale": scale}
    factors = bigsvd.decompose(made.matrix, width_limit=1, **ROWS, **options)
    assert factors.attributes["plan"]["restarts"] >= 1
    assert factors.attributes["width"] < min(made.matrix.shape)
    assert factors.certificate.tolerance_met, factors.certificate.verdict
    table.assert_factors_true(factors, truth)
    np.testing.assert_allclose(factors.singular_values[:], truth.values[:5], rtol=1e-6)


# --------------------------------------------------------------------------------------------- from single to double
# Without `_go_over_to_double` the run ends open in single; with the rounding kept by `begin_again`, open in double.
@pytest.mark.parametrize("scale", ["none", "unit"])
def test_rounding_that_the_sample_does_not_show_sends_the_run_over_to_double(scale: str) -> None:
    shape, options = (3200, 80), {"rank": 8, "panel_lines": 50, "scale": scale}
    random = np.random.default_rng(3)
    right = table.orthonormal(4, 80, 13).T
    loud = random.standard_normal((3200, 1)) * 1e4
    for panel in pilot_panels(shape, "f4", **options):
        loud[50 * panel : 50 * panel + 50] /= 1e4
    matrix = (random.standard_normal((3200, 12)) * np.linspace(8, 3, 12)) @ right[1:] + loud @ right[:1]
    matrix = matrix.astype(np.float32)
    factors = bigsvd.decompose(matrix, **ROWS, **options)
    assert factors.attributes["precision"] == "double"
    assert any(re.match("double precision from sweep [2-9] on", remark) for remark in factors.attributes["remarks"])
    assert factors.certificate.tolerance_met, factors.certificate.verdict
    assert factors.certificate.rounding_how == "proved"
    table.assert_factors_true(factors, table.truth_of(matrix, ("features", scale)))


# Without the second attempt in `_sweep_basis` the overflow ends the run.
def test_one_entry_whose_square_overflows_single_is_swept_again_in_double() -> None:
    shape, options = (1600, 60), {"rank": 4, "panel_lines": 40, "center": "none"}
    random = np.random.default_rng(5)
    matrix = random.standard_normal(shape).astype(np.float32)
    free = next(panel for panel in range(40) if panel not in pilot_panels(shape, "f4", **options))
    matrix[40 * free + 7, 11] = 3e24
    factors = bigsvd.decompose(matrix, **ROWS, **options)
    assert factors.attributes["precision"] == "double"
    assert "double precision: squares of some entries overflow single" in factors.attributes["remarks"]
    assert factors.singular_values[0] == pytest.approx(3e24)
    table.assert_factors_true(factors, table.truth_of(matrix, PLAIN))


# A sweep scaled wrongly by a factor of 1e7 loses seven figures: it must be made again with the scales it has learnt.
@pytest.mark.parametrize("dtype", ["f4", "f8"])
def test_a_feature_whose_scale_the_sample_misjudges_is_scaled_anew(dtype: str) -> None:
    shape, options = (1600, 60), {"rank": 4, "panel_lines": 40, "scale": "unit"}
    matrix = np.random.default_rng(5).standard_normal(shape).astype(dtype)
    free = next(panel for panel in range(40) if panel not in pilot_panels(shape, dtype, **options))
    matrix[40 * free + 7, 11] = 1e9
    factors = bigsvd.decompose(matrix, **ROWS, **options)
    table.assert_factors_true(factors, table.truth_of(matrix, SCALED))
    assert factors.certificate.tolerance_met, factors.certificate.verdict


# Residuals enter the certificate as σ⁴, which leaves double long before σ² does.
@pytest.mark.parametrize("size", [2.0**-120, 2.0**120])
def test_a_matrix_of_any_size_has_the_same_certificate_but_for_the_size(size: float) -> None:
    matrix = table.entry("root_harmonic").matrix
    options = ROWS | {"rank": 8, "panel_lines": 40, "max_sweeps": 2, "tolerance": 1e-9}
    plain, sized = (bigsvd.decompose(matrix * factor, **options) for factor in (1.0, size))
    np.testing.assert_allclose(sized.singular_values[:] / size, plain.singular_values[:], rtol=1e-12)
    np.testing.assert_allclose(sized.certificate.residual / size, plain.certificate.residual, rtol=1e-6)
    assert sized.certificate.state_words == plain.certificate.state_words


@pytest.mark.parametrize("size", [2.0**-282, 2.0**282])
def test_a_matrix_whose_fourth_powers_leave_double_is_refused_with_a_remedy(size: float) -> None:
    with pytest.raises(OptionError, match="power of two"):
        bigsvd.decompose(table.entry("root_harmonic").matrix * size, **ROWS, rank=8)


# ---------------------------------------------------------------------------------------------------- the pilot misses
# Without the question for a proved order in `_finished` the run ends after one sweep, its tolerance met by ten true
# singular values, without the fifth.
def test_a_direction_that_no_sampled_panel_contains_is_found_and_placed() -> None:
    shape, options = (4000, 200), {"rank": 10, "panel_lines": 40, "center": "none"}
    free = [panel for panel in range(100) if panel not in pilot_panels(shape, "f8", **options)]
    rare = np.zeros(4000, bool)
    rare[40 * free[-1] : 40 * free[-1] + 40] = True  # 1 % of the rows
    values = np.r_[np.linspace(10, 9, 10), 0.5 ** np.arange(4)]
    right = table.orthonormal(8, 200, 15).T
    matrix = np.zeros(shape)
    matrix[~rare] = (table.orthonormal(7, 3960, 14) * values) @ right[:14]
    matrix[rare] = np.outer(np.full(40, 9.5 / np.sqrt(40)), right[14])
    factors = bigsvd.decompose(matrix, **ROWS, **options)
    place = 5  # 10, 9.89, 9.78, 9.67, 9.56, then 9.5
    assert factors.certificate.tolerance_met
    assert factors.certificate.index_proved.all()
    assert factors.singular_values[place] == pytest.approx(9.5, rel=1e-9)
    assert abs(factors.right_vectors[:, place] @ right[14]) > 1 - 1e-9
    table.assert_factors_true(factors, table.truth_of(matrix, PLAIN))


# Without `mean_only` in plan/plan.py the pilot is one panel of seven, and its directions replace the Gaussian ones.
@pytest.mark.parametrize("panels", [1, 3, 7])
@pytest.mark.parametrize("scale", ["none", "unit"])
def test_fewer_than_eight_panels_start_from_gaussians_and_read_no_panel_twice(panels: int, scale: str) -> None:
    matrix = table.entry("harmonic").matrix
    lines = -(-len(matrix) // panels)
    source = CountingSource(matrix, storage="memory")
    factors = bigsvd.decompose(source, rank=6, panel_lines=lines, scale=scale, progress=source.listen, **ROWS)
    assert factors.attributes["plan"]["pilot_panels"] == 1
    # The panel that gave the first mean is held for the first sweep.
    assert source.by_stage["pilot"] + source.by_stage.get("sweep", 0) == factors.attributes["sweeps"] * matrix.nbytes
    assert factors.certificate.tolerance_met
    table.assert_factors_true(factors, table.truth("harmonic", ("features", scale)))


# ----------------------------------------------------------------------------------------------------- null components
# Without the Gaussians of TallVectors.rows the null columns are zero and the left vectors not orthonormal.
@pytest.mark.parametrize("axis", ["rows", "columns"])
def test_null_components_are_completed_marked_and_bounded(axis: str) -> None:
    made, truth = table.entry("rank_deficient"), table.truth("rank_deficient", CENTRED)
    factors = bigsvd.decompose(made.matrix, rank=12, **(ROWS | {"axis": axis}), samples="rows", panel_lines=30)
    certificate = factors.certificate
    np.testing.assert_array_equal(certificate.null, np.arange(12) >= 7)
    np.testing.assert_array_equal(factors.singular_values[7:], 0)
    assert np.all(np.asarray(certificate.upper)[7:] < 1e-4)  # √ of the rounding of AᴴA
    assert np.isnan(certificate.angle_bound[7:]).all()
    for side in (factors.left_vectors[:], factors.right_vectors[:]):
        assert np.linalg.norm(side.T @ side - np.eye(12)) < 1e-12
    table.assert_factors_true(factors, truth)


# ------------------------------------------------------------------------------------------------------- cut chunks
# With `decoded` returning the panel's own bytes, fewer bytes are reported than are decoded.
def test_chunks_larger_than_the_ceiling_allows_are_cut_and_the_amplification_is_read(tmp_path: Path) -> None:
    path = tmp_path / "tall_chunks.h5"
    write_gzip_counts(path, (16_000, 3600), (16_000, 60), patterns=1)  # a panel of whole chunks is the whole matrix
    options: dict[str, Any] = {"axis": "rows", "route": "krylov", "rank": 1, "max_sweeps": 1, "center": "none"}
    options["memory"] = "216MiB"
    plan = bigsvd.forecast(path, **options).plan
    geometry = plan.geometry
    assert not plan.resident
    assert geometry.amplification == geometry.panels > 1
    factors = bigsvd.decompose(path, **options)
    words = dict(factors.attributes["plan"]["reasons"])["panels"]
    assert "panels are parts of chunks" in words
    assert f"{geometry.amplification:.2f} × the matrix" in words
    matrix_bytes = factors.attributes["matrix_bytes"]
    passes = geometry.panels + len(plan.pilot_panels)  # each panel decodes every chunk; so does each of the probe's
    assert passes * matrix_bytes <= factors.attributes["bytes_read"] <= (passes + 4.1) * matrix_bytes
    with h5py.File(path) as file:
        v = factors.right_vectors[:, 0]
        tall = np.concatenate([file["signal"][row : row + 4000].astype(float) @ v for row in range(0, 16_000, 4000)])
    np.testing.assert_allclose(tall, factors.left_vectors[:, 0] * factors.singular_values[0], rtol=1e-4)


# ------------------------------------------------------------------------------------------------------ gram to fold
# Without the switch in `_whole_spectrum` values of 1e-9 are wrong by their own size, and the remark is missing.
def test_small_values_make_a_fold_follow_the_gram_matrix(monkeypatch: pytest.MonkeyPatch) -> None:
    # Nominal times decide between the routes only above two seconds; here they decide at once, and the Gram route wins.
    monkeypatch.setattr("bigsvd.plan.candidates._NO_MATTER_SECONDS", 0.0)
    values = np.logspace(0, -9, 30)
    matrix = table.planted(values, (4000, 60), 91)
    source = CountingSource(matrix, storage="memory")
    options = {"rank": 25, "axis": "rows", "memory": "1GiB", "panel_lines": 250, "center": "none"}
    factors = bigsvd.decompose(source, **options)
    assert factors.attributes["plan"]["route"] == "gram"
    assert "small values are wanted: a fold by QR followed the sums of AᴴA" in factors.attributes["remarks"]
    assert factors.attributes["sweeps"] == 3
    np.testing.assert_allclose(factors.singular_values[:], values[:25], rtol=1e-5)
    table.assert_factors_true(factors, table.truth_of(matrix, PLAIN))
    large = bigsvd.decompose(source, **(options | {"rank": 8}))
    assert large.attributes["sweeps"] == 2
    assert large.attributes["remarks"] == []


# ---------------------------------------------------------------------------------------------------- the whole space
# Without the test for a full basis in `_missed` the bound is the energy left, and the last values stay open.
@pytest.mark.parametrize("rank", [55, 60])
@pytest.mark.parametrize("dtype", ["f8", "c16", "f4"])
def test_a_basis_that_spans_the_whole_space_misses_nothing(rank: int, dtype: str) -> None:
    imaginary = dtype == "c16"
    matrix = table.planted(0.95 ** np.arange(60), (900, 60), 93, imaginary=imaginary).astype(dtype)
    factors = bigsvd.decompose(matrix, rank=rank, panel_lines=50, precision="double", **ROWS)
    assert factors.attributes["width"] == 60
    assert factors.certificate.missed_bound == 0
    assert factors.certificate.missed_how == "the basis spans the whole space"
    assert factors.certificate.failure_probability == 0
    assert factors.certificate.index_proved.all()
    table.assert_factors_true(factors, table.truth_of(matrix, CENTRED))


# ----------------------------------------------------------------------------------------------------------- variance
# Without `_settle_rank` the run ends with fifty components; without its doubling it takes a sweep more.
def test_variance_grows_past_its_first_guess() -> None:
    matrix = table.planted(np.arange(1, 301) ** -0.5, (1500, 300), 95)
    true = np.linalg.svd(centred(matrix), compute_uv=False)
    share = np.cumsum(true**2) / np.sum(true**2)
    wanted = int(np.argmax(share >= 0.8)) + 1
    assert 60 < wanted < 200
    factors = bigsvd.decompose(matrix, variance=0.8, max_rank=200, panel_lines=80, max_sweeps=12, **ROWS)
    assert factors.certificate.rank == wanted
    assert factors.certificate.captured_share >= 0.8
    assert np.sum(factors.singular_values[:-1] ** 2) / np.sum(true**2) < 0.8
    table.assert_factors_true(factors, table.truth_of(matrix, CENTRED), share=0.8)


def test_the_guess_doubles_so_that_the_basis_grows_with_it() -> None:
    values = np.arange(1, 701) ** -0.5
    factors = bigsvd.decompose(
        table.planted(values, (1500, 700), 95), variance=0.7, max_rank=200, panel_lines=80, **ROWS
    )
    wanted = int(np.argmax(np.cumsum(values**2) >= 0.7 * np.sum(values**2))) + 1
    assert factors.certificate.rank == wanted > 50
    assert factors.attributes["sweeps"] <= 4
    np.testing.assert_allclose(factors.singular_values[:], values[:wanted], rtol=1e-3)


# Without `_share_not_reached` the certificate calls the tolerance met.
def test_variance_fails_honestly_at_the_largest_rank() -> None:
    matrix = table.planted(np.arange(1, 301) ** -0.5, (1500, 300), 95)
    factors = bigsvd.decompose(matrix, variance=0.8, max_rank=60, panel_lines=80, max_sweeps=12, **ROWS)
    certificate = factors.certificate
    assert certificate.rank == 60
    assert not certificate.tolerance_met
    assert re.search(r"60 components capture 0\.\d{4} of the variance, short of 0\.8", certificate.verdict)
    table.assert_factors_true(factors, table.truth_of(matrix, CENTRED), share=0.8)


# --------------------------------------------------------------------------------------------------------- max_sweeps
# Without the count in `_finished` the run goes on to the tolerance; with `met` forced the exit status is 0.
def test_the_last_sweep_allowed_ends_the_run_with_a_verdict_and_status_three(tmp_path: Path, command: Any) -> None:
    path, out = tmp_path / "tail.npy", tmp_path / "out.zarr"
    np.save(path, table.planted(np.arange(1, 401) ** -0.5, (1600, 400), 97))
    ended = command(
        "decompose", path, "--out", out, "--rank", 30, "--route", "krylov", "--max-sweeps", 1, "--tolerance", 1e-9
    )
    assert ended.returncode == 3, ended.stderr
    factors = bigsvd.open_factors(out)
    assert factors.attributes["sweeps"] == 1
    assert not factors.certificate.tolerance_met
    assert "open" in factors.certificate.state_words
    assert re.search(r"\d+ open", factors.certificate.verdict)
    table.assert_factors_true(factors, table.truth_of(np.load(path), CENTRED))


# ------------------------------------------------------------------------------------------------- a file that changes
# Without the comparison in `_refuse_change` the run ends with factors of neither matrix.
@pytest.mark.parametrize("axis", ["rows", "columns"])
@pytest.mark.parametrize("route", ["krylov", "gram", "tsqr"])
def test_a_value_that_changes_between_sweeps_stops_the_run(route: str, axis: str, tmp_path: Path) -> None:
    matrix = table.entry("root_harmonic").matrix
    stored = matrix if axis == "rows" else np.ascontiguousarray(matrix.T)
    options = {"rank": 8, "memory": "1GiB", "panel_lines": 40, "tolerance": 1e-7, "samples": axis, "center": "none"}
    place = (333, 21) if axis == "rows" else (21, 333)
    panel = 333 // 40
    plan = bigsvd.forecast(CountingSource(stored, storage="memory"), route=route, axis=axis, **options).plan
    before = 1 + (panel in plan.pilot_panels)  # the first sweep, and the pilot where it reads that panel
    source = ChangingSource(stored, place, before, 1e-9, storage="memory")
    with pytest.raises(SourceChangedError) as changed:
        bigsvd.decompose(source, tmp_path / "out.zarr", route=route, axis=axis, **options)
    assert "sweep 2 read other values than sweep 1" in changed.value.problem
    lines = f"{axis} {40 * panel:,}–{40 * panel + 39:,}"
    assert "1 of 16 panels differ, the first at " in changed.value.evidence[0]
    assert lines in changed.value.evidence[0]
    assert list(tmp_path.iterdir()) == []


def test_the_same_run_on_an_unchanging_source_ends_well() -> None:
    matrix = table.entry("root_harmonic").matrix
    source = ChangingSource(matrix, (333, 21), 10**9, 1e-9, storage="memory")
    assert bigsvd.decompose(source, rank=8, panel_lines=40, tolerance=1e-7, **ROWS).certificate.rank == 8


# ---------------------------------------------------------------------------------------------------------- residency
# Without `keep` in PanelReader every sweep reads the file; without `forget` nothing fails but the memory.
def test_a_matrix_that_fits_is_read_once_for_all_sweeps() -> None:
    matrix = table.entry("root_harmonic").matrix
    source = CountingSource(matrix, (40, 160), "compressed")
    options = ROWS | {"rank": 8, "panel_lines": 40, "tolerance": 1e-6, "progress": source.listen}
    factors = bigsvd.decompose(source, **options)
    assert factors.attributes["plan"]["resident"]
    assert factors.attributes["sweeps"] >= 2
    assert source.by_stage["sweep"] == matrix.nbytes

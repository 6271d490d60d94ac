"""Whole runs on the shared table against LAPACK: every route, both axes, rows and columns, every preparation."""

from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
import table
from table import CENTRED, EPS, PLAIN, SCALED, TABLE, Preparation

import bigsvd

ROUTES = ("direct", "gram", "tsqr", "krylov")
TURNS = (("rows", "rows"), ("columns", "rows"), ("rows", "columns"), ("columns", "columns"))  # axis, samples
CEILING = "1GiB"  # fixed, so that plans and bits are the same on every machine


def run(
    matrix: np.ndarray, preparation: Preparation = PLAIN, *, axis: str = "rows", samples: str = "rows", **options: Any
) -> Any:
    """Decompose samples × features, stored as `samples` says, in about sixteen panels along `axis`."""
    stored = matrix.T if samples == "columns" else matrix
    lines = stored.shape[("rows", "columns").index(axis)]
    center, scale = preparation
    options = {"panel_lines": -(-lines // 16), "memory": CEILING} | options
    return bigsvd.decompose(stored, axis=axis, samples=samples, center=center, scale=scale, **options)


def table_runs() -> list[Any]:
    """Every matrix by every route; axes, samples and preparations rotate so that every pair occurs with every route."""
    cases = []
    for i, name in enumerate(TABLE):
        preparations = table.entry(name).preparations
        for j, route in enumerate(ROUTES):
            turn, preparation = TURNS[(i + j) % 4], preparations[(i + j + i // 4) % len(preparations)]
            cases.append(pytest.param(name, route, turn, preparation, id=label(name, route, turn, preparation)))
    return cases


def label(name: str, route: str, turn: tuple[str, str], preparation: Preparation) -> str:
    words = {PLAIN: "plain", CENTRED: "centred", SCALED: "scaled"}
    return f"{name}-{route}-panels_of_{turn[0]}-samples_in_{turn[1]}-{words[preparation]}"


def bits(factors: Any) -> dict[str, bytes]:
    """All numbers of a result, as bytes."""
    parts = {"left": factors.left_vectors[:], "right": factors.right_vectors[:], "values": factors.singular_values[:]}
    parts |= factors.certificate.arrays() | {"missed": factors.certificate.missed_bound}
    return {name: np.ascontiguousarray(part).tobytes() for name, part in parts.items()}


# ------------------------------------------------------------------------------------------------ table and checks
@pytest.mark.parametrize("name", [name for name in TABLE if table.entry(name).raw is not None])
def test_planted_values_agree_with_lapack(name: str) -> None:
    made, truth = table.entry(name), table.truth(name, PLAIN)
    rounding = EPS * np.linalg.norm(made.matrix) + truth.slack  # every entry of the product is rounded
    np.testing.assert_allclose(truth.values, made.raw, rtol=0, atol=rounding)


@pytest.mark.parametrize("name", [name for name in TABLE if table.entry(name).centred is not None])
def test_planted_values_agree_with_lapack_after_centring(name: str) -> None:
    made, truth = table.entry(name), table.truth(name, CENTRED)
    rounding = EPS * np.linalg.norm(made.matrix) + truth.slack
    np.testing.assert_allclose(truth.values, made.centred, rtol=0, atol=rounding)


def claim(lower: list[float], upper: list[float], proved: list[bool]) -> SimpleNamespace:
    middle = (np.array(lower) + np.array(upper)) / 2
    return SimpleNamespace(lower=lower, upper=upper, value=middle, index_proved=np.array(proved))


def test_two_intervals_cannot_share_one_true_value() -> None:
    assert table.unmatched_interval([2.9, 2.8], [3.1, 3.0], [3.0, 1.0]) is not None
    assert table.unmatched_interval([2.9, 2.8], [3.1, 3.0], [3.0, 2.95]) is None


def test_matching_gives_the_narrow_interval_what_the_wide_one_could_take() -> None:
    assert table.unmatched_interval([0.5, 1.4, 0.9], [3.5, 1.6, 2.1], [3.0, 2.0, 1.5]) is None
    assert table.unmatched_interval([0.0, 1.4], [1.6, 1.6], [1.5]) is not None


def test_the_trap_interval_is_refused_when_it_claims_the_order() -> None:
    true = np.array([np.sqrt(0.9**2 + 0.95**2), 1.0])
    table.assert_intervals_hold(claim([1.0], [1.0], [False]), true)
    with pytest.raises(AssertionError, match="outside its proved interval"):
        table.assert_intervals_hold(claim([1.0], [1.0], [True]), true)


def test_an_angle_beyond_its_bound_is_refused() -> None:
    truth = table.truth("harmonic", PLAIN)
    turned = truth.right[:, :2] @ np.array([[np.cos(0.01), np.sin(0.01)], [-np.sin(0.01), np.cos(0.01)]])

    def factors(bound: float, first: list[int], last: list[int]) -> SimpleNamespace:
        proved, bounds = np.ones(2, bool), np.full(2, bound)
        certificate = SimpleNamespace(rank=2, angle_bound=bounds, index_proved=proved, tied_first=first, tied_last=last)
        return SimpleNamespace(certificate=certificate, left_vectors=truth.left[:, :2], right_vectors=turned)

    table.assert_angles_hold(factors(0.0101, [0, 1], [0, 1]), truth)
    with pytest.raises(AssertionError, match="> bound"):
        table.assert_angles_hold(factors(0.0099, [0, 1], [0, 1]), truth)
    table.assert_angles_hold(factors(1e-9, [0, 0], [1, 1]), truth)  # their common plane has not turned


def test_a_bound_on_one_vector_of_a_repeated_value_is_refused() -> None:
    truth = table.truth("repeated", PLAIN)
    certificate = SimpleNamespace(
        rank=1, angle_bound=np.zeros(1), index_proved=np.ones(1, bool), tied_first=np.zeros(1), tied_last=np.zeros(1)
    )
    factors = SimpleNamespace(certificate=certificate, left_vectors=truth.left, right_vectors=truth.right)
    with pytest.raises(AssertionError, match="not determined"):
        table.assert_angles_hold(factors, truth)


# ------------------------------------------------------------------------------------------------------- the table
@pytest.mark.parametrize(("name", "route", "turn", "preparation"), table_runs())
def test_every_matrix_by_every_route(name: str, route: str, turn: tuple[str, str], preparation: Preparation) -> None:
    made = table.entry(name)
    factors = run(made.matrix, preparation, axis=turn[0], samples=turn[1], route=route, rank=made.rank)
    assert factors.attributes["plan"]["route"] == route
    assert factors.attributes["plan"]["axis"] == turn[0]
    table.assert_factors_true(factors, table.truth(name, preparation))


@pytest.mark.parametrize("preparation", [PLAIN, CENTRED, SCALED], ids=["plain", "centred", "scaled"])
@pytest.mark.parametrize("turn", TURNS, ids=["-".join(turn) for turn in TURNS])
@pytest.mark.parametrize("name", ["offset", "complex128_offset"])
@pytest.mark.parametrize("route", ["krylov", "tsqr"])
def test_every_orientation_and_preparation(
    name: str, route: str, turn: tuple[str, str], preparation: Preparation
) -> None:
    made = table.entry(name)
    factors = run(made.matrix, preparation, axis=turn[0], samples=turn[1], route=route, rank=made.rank)
    table.assert_factors_true(factors, table.truth(name, preparation))
    if preparation[0] == "features":
        mean = made.matrix.mean(axis=0)
        grain = 8 * np.sqrt(len(made.matrix)) * EPS * np.abs(made.matrix).max()
        np.testing.assert_allclose(np.asarray(factors.column_mean[:]), mean, rtol=0, atol=grain)
    if preparation[1] == "unit":
        spread = made.matrix.std(axis=0, ddof=1)
        grain = 8 * np.sqrt(len(made.matrix)) * EPS * np.abs(made.matrix).max()
        np.testing.assert_allclose(np.asarray(factors.column_scale[:]), spread, rtol=0, atol=grain)


@pytest.mark.parametrize("axis", ["rows", "columns"])
def test_scaling_without_centring_divides_by_the_standard_deviation(axis: str) -> None:
    matrix = table.entry("counts").matrix
    factors = run(matrix, ("none", "unit"), axis=axis, rank=8)
    table.assert_factors_true(factors, table.truth_of(matrix, ("none", "unit")))


MET = [
    *(
        "exponential",
        "harmonic",
        "clustered",
        "repeated",
        "rank_deficient",
        "offset",
        "rare_direction",
        "constant_features",
    ),
    *("wide", "square", "float32", "counts", "int16", "complex128", "complex64"),
]


@pytest.mark.parametrize("route", ["direct", "tsqr", "krylov"])
@pytest.mark.parametrize("name", MET)
def test_the_tolerance_is_met_where_components_are_clear(name: str, route: str) -> None:
    made, truth = table.entry(name), table.truth(name, CENTRED)
    factors = run(made.matrix, CENTRED, axis="rows", route=route, rank=made.rank)
    certificate = factors.certificate
    assert certificate.tolerance_met, certificate.verdict
    values = np.asarray(factors.singular_values[:])
    clear = ~np.asarray(certificate.null)
    assert clear.sum() == min(made.rank, int((truth.values > truth.slack).sum()))
    np.testing.assert_allclose(values[clear], truth.values[: len(values)][clear], rtol=1e-3, atol=0)


@pytest.mark.parametrize("route", ["direct", "tsqr"])
def test_graded_values_are_right_to_rounding_of_the_largest(route: str) -> None:
    made, truth = table.entry("graded"), table.truth("graded", PLAIN)
    factors = run(made.matrix, route=route, rank=49)
    clear = ~np.asarray(factors.certificate.null)
    assert clear[:45].all(), "values of 1e-11 are far above rounding"
    found = np.asarray(factors.singular_values[:])
    np.testing.assert_allclose(found[clear], truth.values[:49][clear], rtol=0, atol=2 * truth.slack)


@pytest.mark.parametrize("sweeps", [1, 2, 3])
@pytest.mark.parametrize(
    "name", ["harmonic", "root_harmonic", "clustered", "spiked", "noisy", "rare_direction", "complex128_offset"]
)
def test_a_run_cut_short_still_tells_the_truth(name: str, sweeps: int) -> None:
    made = table.entry(name)
    factors = run(made.matrix, CENTRED, route="krylov", rank=made.rank, max_sweeps=sweeps)
    assert factors.attributes["sweeps"] <= sweeps
    table.assert_factors_true(factors, table.truth(name, CENTRED))


def test_a_heavy_tail_cut_after_one_sweep_is_not_called_met() -> None:
    made = table.entry("root_harmonic")
    factors = run(made.matrix, CENTRED, route="krylov", rank=40, max_sweeps=1, tolerance=1e-9)
    assert not factors.certificate.tolerance_met
    assert "open" in factors.certificate.state_words


def test_a_tolerance_below_rounding_is_approached_as_far_as_rounding_allows() -> None:
    made, truth = table.entry("spiked"), table.truth("spiked", PLAIN)
    widths = []
    for tolerance in (1e-9, 1e-13):
        factors = run(made.matrix, route="krylov", rank=made.rank, tolerance=tolerance)
        table.assert_factors_true(factors, truth)
        certificate = factors.certificate
        assert certificate.tolerance_met == (tolerance == 1e-9), certificate.verdict
        widths.append((np.asarray(certificate.upper) - np.asarray(certificate.lower)).max())
    assert widths[1] <= 2 * widths[0], "asking for more gave less"


def test_missed_bound_over_a_flat_bulk_is_within_four_then_two_and_a_half_times_its_edge() -> None:
    # A bulk of exactly equal values is solved exactly in two sweeps; a spread of 4 % keeps the run going for a third.
    rng = np.random.default_rng(5)
    left, right = (np.linalg.qr(rng.standard_normal((side, 600)))[0] for side in (2400, 600))
    values = np.concatenate([np.linspace(4.0, 1.4, 15), np.linspace(1.02, 0.98, 585)])
    for sweeps, times in ((2, 4.0), (3, 2.5)):
        factors = run((left * values) @ right.T, route="krylov", rank=15, max_sweeps=sweeps, tolerance=1e-9)
        assert factors.attributes["sweeps"] == sweeps
        assert factors.certificate.missed_bound <= times * values[15]


def test_noise_beyond_the_components_is_reported_as_bulk() -> None:
    made = table.entry("noisy")
    factors = run(made.matrix, CENTRED, route="krylov", rank=20)
    words = factors.certificate.state_words
    assert words[:10] == ("resolved",) * 10, words
    assert "bulk" in words[10:], words
    assert not run(made.matrix, CENTRED, route="krylov", rank=20, strict=True, max_sweeps=4).certificate.tolerance_met


def test_a_direction_in_the_last_hundredth_of_the_rows_is_found() -> None:
    made, truth = table.entry("rare_direction"), table.truth("rare_direction", CENTRED)
    carried = np.linalg.norm(truth.left[-8:], axis=0)
    place = int(np.argmax(carried))  # the component that those rows carry
    assert place < made.rank
    assert carried[place] > 0.9
    factors = run(made.matrix, CENTRED, route="krylov", rank=made.rank)
    found = np.abs(factors.right_vectors[:].conj().T @ truth.right[:, place]).max()
    assert found > 1 - 1e-6


# --------------------------------------------------------------------------------------------------- rank, variance
@pytest.mark.parametrize("route", ["auto", "krylov", "gram", "tsqr"])
@pytest.mark.parametrize("rank", [1, 2, 23, 39, 40])
def test_every_rank_up_to_the_short_side_is_accepted(rank: int, route: str) -> None:
    matrix = table.planted(0.8 ** np.arange(40), (90, 40), 61, imaginary=rank == 23)
    factors = run(matrix, PLAIN, route=route, rank=rank, axis="columns" if rank == 2 else "rows")
    assert factors.certificate.rank == rank
    table.assert_factors_true(factors, table.truth_of(matrix))


def test_rank_beyond_the_short_side_is_clipped_to_it_by_default_only() -> None:
    matrix = table.planted(0.8 ** np.arange(30), (70, 30), 63)
    assert bigsvd.decompose(matrix, center="none", memory=CEILING).certificate.rank == 30
    larger = table.planted(0.9 ** np.arange(80), (120, 80), 64)
    assert bigsvd.decompose(larger, memory=CEILING).certificate.rank == 50


@pytest.mark.parametrize("route", ["auto", "krylov"])
@pytest.mark.parametrize("share", [0.5, 0.95, 0.999])
def test_variance_gives_the_smallest_rank_that_captures_the_share(share: float, route: str) -> None:
    truth = table.truth("harmonic", CENTRED)
    cumulative = np.cumsum(truth.values**2) / (truth.values**2).sum()
    expected = int(np.argmax(cumulative >= share)) + 1
    factors = run(table.entry("harmonic").matrix, CENTRED, route=route, variance=share)
    assert factors.certificate.rank == expected
    assert factors.certificate.captured_share >= share
    table.assert_factors_true(factors, truth, share=share)


def test_variance_stops_at_the_largest_rank_allowed() -> None:
    factors = run(table.entry("root_harmonic").matrix, CENTRED, route="krylov", variance=0.99, max_rank=15)
    assert factors.certificate.rank == 15
    assert factors.certificate.captured_share < 0.99
    assert not factors.certificate.tolerance_met
    table.assert_factors_true(factors, table.truth("root_harmonic", CENTRED), share=0.99)


# --------------------------------------------------------------------------------------------------- nothing there
@pytest.mark.parametrize("route", ROUTES)
@pytest.mark.parametrize(
    ("name", "preparation", "nulls"),
    [
        ("rank_deficient", CENTRED, 5),
        ("all_zero", PLAIN, 5),
        ("all_zero", SCALED, 5),
        ("constant", CENTRED, 5),
        ("constant", PLAIN, 4),
        ("single_row", CENTRED, 1),
    ],
)
def test_null_components_are_zero_orthonormal_and_marked(
    name: str, preparation: Preparation, nulls: int, route: str
) -> None:
    made = table.entry(name)
    factors = run(made.matrix, preparation, route=route, rank=made.rank)
    null = np.asarray(factors.certificate.null)
    assert null.sum() == nulls
    assert null[made.rank - nulls :].all(), "null components stand last"
    np.testing.assert_array_equal(factors.singular_values[:][null], 0)
    assert (np.asarray(factors.certificate.lower)[null] == 0).all()
    table.assert_factors_true(factors, table.truth(name, preparation))


@pytest.mark.parametrize("route", ["direct", "tsqr", "krylov"])
def test_constant_features_have_no_part_in_any_component(route: str) -> None:
    made = table.entry("constant_features")
    factors = run(made.matrix, SCALED, route=route, rank=made.rank)
    parts = np.linalg.norm(factors.right_vectors[:][::10], axis=0)
    bound = np.asarray(factors.certificate.angle_bound)
    assert np.isfinite(bound).all()
    assert (parts <= np.sin(bound) + 8 * EPS).all()  # the true vectors are zero there


# ----------------------------------------------------------------------------------------------------- the same bits
@pytest.mark.parametrize("route", ROUTES)
def test_the_same_call_twice_gives_the_same_bits(route: str) -> None:
    made = table.entry("complex128_offset")
    first, second = (run(made.matrix, SCALED, route=route, rank=made.rank) for _ in range(2))
    assert bits(first) == bits(second)


@pytest.mark.parametrize("axis", ["rows", "columns"])
@pytest.mark.parametrize("route", ["gram", "tsqr", "krylov"])
def test_one_two_and_four_workers_give_the_same_bits(route: str, axis: str) -> None:
    made = table.entry("noisy")  # 900 long: 18 panels
    options = {"axis": axis, "samples": axis, "route": route, "rank": 12, "panel_lines": 50}
    one, two, four = (bits(run(made.matrix, CENTRED, workers=workers, **options)) for workers in (1, 2, 4))
    assert one == two == four


def test_another_seed_draws_another_start_and_reaches_the_same_values() -> None:
    made, truth = table.entry("noisy"), table.truth("noisy", CENTRED)
    first, second = (run(made.matrix, CENTRED, route="krylov", rank=10, seed=seed) for seed in (1, 2))
    assert bits(first) != bits(second)
    for factors in (first, second):
        table.assert_factors_true(factors, truth)


# --------------------------------------------------------------------------------------- panels, precision, sources
@pytest.mark.parametrize("panels", [1, 3, 7, 160])
def test_any_number_of_panels_gives_true_factors(panels: int) -> None:
    made = table.entry("harmonic")
    factors = run(made.matrix, CENTRED, route="krylov", rank=made.rank, panel_lines=640 // panels)
    table.assert_factors_true(factors, table.truth("harmonic", CENTRED))


@pytest.mark.parametrize("precision", ["single", "double"])
@pytest.mark.parametrize("name", ["float32", "float32_offset", "counts", "complex64", "float32_huge", "float32_tiny"])
def test_forced_precision_is_used_or_a_remark_says_why_not(name: str, precision: str) -> None:
    made = table.entry(name)
    factors = run(made.matrix, CENTRED, route="krylov", rank=6, precision=precision)
    used, remarks = factors.attributes["precision"], " ".join(factors.attributes["remarks"])
    assert used == precision or used in remarks, f"{precision} was asked for, {used} was used, and nothing says so"
    table.assert_factors_true(factors, table.truth(name, CENTRED))


def test_file_formats_and_arrays_give_the_same_factors(tmp_path: Path) -> None:
    import dask.array
    import h5py
    import zarr

    made, truth = table.entry("counts"), table.truth("counts", CENTRED)
    matrix = np.ascontiguousarray(made.matrix)
    with h5py.File(tmp_path / "counts.h5", "w") as file:
        file.create_dataset("group/counts", data=matrix, chunks=(48, 40), compression="gzip", shuffle=True)
    array = zarr.create_array(str(tmp_path / "counts.zarr"), shape=matrix.shape, chunks=(50, 30), dtype=matrix.dtype)
    array[:] = matrix
    np.save(tmp_path / "counts.npy", matrix)
    sources = [tmp_path / "counts.h5", str(tmp_path / "counts.zarr"), tmp_path / "counts.npy", array, matrix]
    sources.append(dask.array.from_array(matrix, chunks=(60, 120)))
    for source in sources:
        factors = bigsvd.decompose(source, rank=made.rank, route="krylov", memory=CEILING)
        table.assert_factors_true(factors, truth)

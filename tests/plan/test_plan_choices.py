"""What the planner chooses and why: routes, axes, panels, ranks, and every option it refuses."""

from __future__ import annotations

import re
from dataclasses import replace
from itertools import pairwise

import pytest
from plan_samples import MIB, free_but, plan_of, spec

from bigsvd.errors import MemoryCeilingError, OptionError
from bigsvd.plan import Plan, Rate, krylov_widths
from bigsvd.plan.geometry import LEAST_PANEL_BYTES, MOST_PANEL_BYTES, cut, group, most_segments


# ------------------------------------------------------------------------------------------------------------ routes
def test_short_sides_take_a_whole_spectrum_and_long_ones_block_krylov() -> None:
    routes = {n: plan_of(spec(2_000_000, n, "f8"), rank=20).route for n in (200, 3000, 8000, 30_000)}
    assert routes[200] in ("gram", "tsqr")
    assert routes[3000] == routes[8000] == routes[30_000] == "krylov"


def test_the_gram_route_gives_way_to_krylov_once_as_the_short_side_grows() -> None:
    taken = [plan_of(spec(2_000_000, n, "f8"), rank=20).route == "krylov" for n in range(100, 6001, 100)]
    change = taken.index(True)
    assert change > 0
    assert all(taken[change:]), "beyond the crossing point the whole spectrum never pays again"


def test_the_gram_route_pays_longer_the_slower_the_file() -> None:
    def crossing(storage: str) -> int:
        sides = range(100, 6001, 100)
        return next(n for n in sides if plan_of(spec(2_000_000, n, "f8", storage=storage), rank=20).route == "krylov")

    assert crossing("compressed") > crossing("plain")


def test_the_gram_route_is_left_where_its_products_cost_more_than_the_sweeps_it_saves() -> None:
    # Krylov reads 2.8 times and a pilot, Gram twice. A worker reads 1 GB a second and makes so many flops of AᴴA, m·n²
    # in all: equal where n = (0.8 + pilot)·8 bytes·flops / 1e9.
    gram = 2.5e11
    rates = free_but(fetch={"plain": Rate(1e9)}, gram=Rate(gram), qr=Rate(1e6))

    def taken(n: int) -> Plan:
        return plan_of(spec(2_000_000, n, "f8"), rank=20, rates=rates, ceiling=4096 * MIB)

    krylov = plan_of(spec(2_000_000, 1600, "f8"), rank=20, rates=rates, ceiling=4096 * MIB, route="krylov")
    pilot = len(krylov.pilot_panels) / krylov.geometry.panels
    crossing = (krylov.expected_sweeps + pilot - 2) * 8 * gram / 1e9
    assert 1200 < crossing < 2000
    assert taken(round(crossing * 0.97)).route == "gram"
    assert taken(round(crossing * 1.03)).route == "krylov"


def test_householder_qr_is_taken_where_it_is_the_cheaper_whole_spectrum() -> None:
    matrix = spec(2_000_000, 500, "f8")
    for gram, qr, route in ((3e9, 5e9, "gram"), (2e9, 5e9, "tsqr")):
        # AᴴA takes m·n² flops, Householder QR 2·m·n².
        rates = free_but(gram=Rate(gram), qr=Rate(qr), products={"double": Rate(1e9)}, fetch={"plain": Rate(1e6)})
        assert plan_of(matrix, rank=20, rates=rates).route == route


def test_a_tighter_tolerance_wants_more_sweeps_and_turns_to_the_whole_spectrum() -> None:
    rates = free_but(fetch={"plain": Rate(1e9)}, gram=Rate(2.5e11), qr=Rate(1e6))
    plans = [
        plan_of(spec(2_000_000, 2500, "f8"), rank=20, rates=rates, ceiling=4096 * MIB, tolerance=tolerance)
        for tolerance in (1e-3, 1e-8)
    ]
    assert [plan.route for plan in plans] == ["krylov", "gram"]
    loose, default, tight = (
        plan_of(spec(2_000_000, 8000, "f8"), rank=20, tolerance=tolerance).expected_sweeps
        for tolerance in (1e-1, 1e-3, 1e-8)
    )
    assert 1 <= loose < default < tight


def test_blocks_are_wide_where_reading_costs_more_than_products_and_narrow_elsewhere() -> None:
    matrix = spec(2_000_000, 8000)
    wide, narrow = (krylov_widths(20, 8000, profile=profile) for profile in ("wide", "narrow"))
    # Wide blocks save 0.2 reads of 4 bytes an entry, and take so many columns more, 4 flops each.
    saved = 0.2 * 4
    columns = [
        widths.start + widths.test + (sweeps - 1) * (widths.grow + 2 * widths.test)
        for widths, sweeps in ((wide, 2.6), (narrow, 2.8))
    ]
    assert columns == pytest.approx([250.8, 204.4])
    equal = 4 * (columns[0] - columns[1]) / saved
    for factor, profile in ((0.8, "narrow"), (1.5, "wide")):
        rates = free_but(fetch={"plain": Rate(1e9)}, products={"single": Rate(1e9 * equal * factor)})
        plan = plan_of(matrix, rank=20, route="krylov", rates=rates)
        assert plan.widths.profile == profile
        assert dict(plan.reasons)["width"].count(f"; {profile} blocks, for") == 1


def test_a_rank_that_is_still_to_be_found_wants_wide_blocks() -> None:
    matrix = spec(2_000_000, 8000)
    assert plan_of(matrix, rank=20).widths.profile == "narrow"
    plan = plan_of(matrix, variance=0.9, max_rank=20)
    assert plan.widths.profile == "wide"
    assert dict(plan.reasons)["width"].endswith("wide blocks, for the rank is found while they grow")


def test_narrow_blocks_still_hold_the_neighbours_that_show_a_bulk() -> None:
    for rank in (1, 5, 10, 20, 200):
        widths = krylov_widths(rank, 10_000, profile="narrow")
        assert widths.start >= rank + max(10, rank)
        assert widths.start + widths.test >= 2 * rank + 10
        assert widths.keep == rank + max(10, rank) + 10


def test_more_components_favour_the_whole_spectrum() -> None:
    routes = [plan_of(spec(2_000_000, 1500, "f8"), rank=rank).route for rank in (5, 400)]
    assert routes[0] == "krylov"
    assert routes[1] in ("gram", "tsqr")


def test_a_matrix_that_fits_is_held_and_read_once() -> None:
    small = plan_of(spec(20_000, 300, "f4", storage="compressed"), rank=10)
    assert small.route == "direct"
    assert small.resident
    large = plan_of(spec(2_000_000, 300, "f4", storage="compressed"), rank=10)
    assert not large.resident
    assert large.route != "direct"


def test_whole_spectra_are_not_tried_beyond_their_longest_side() -> None:
    assert plan_of(spec(90_000, 6001, "f8"), ceiling=64_000 * MIB, rank=5000).route == "krylov"
    with pytest.raises(OptionError, match="short side is longer than 6,000") as refused:
        plan_of(spec(90_000, 6001, "f8"), axis="rows", route="gram")
    assert refused.value.remedy == "Give --route krylov."


def test_a_forced_route_and_axis_are_taken() -> None:
    for route in ("gram", "tsqr", "krylov"):
        for axis in ("rows", "columns"):
            plan = plan_of(spec(3000, 2000, "f8"), route=route, axis=axis)
            assert plan.route == route
            assert ("rows", "columns")[plan.geometry.axis] == axis


# -------------------------------------------------------------------------------------------------------------- axis
def test_panels_run_along_the_long_side_so_that_the_basis_is_short() -> None:
    tall, wide = plan_of(spec(500_000, 20_000)), plan_of(spec(20_000, 500_000))
    assert tall.geometry.axis == 0
    assert wide.geometry.axis == 1
    assert tall.geometry.across == wide.geometry.across == 20_000


def test_layout_turns_the_axis_where_panels_would_cut_chunks() -> None:
    # Chunks are whole columns: a panel of rows would decode every one of them.
    columns_stored = spec(60_000, 40_000, chunks=(60_000, 1), storage="compressed")
    assert plan_of(columns_stored, ceiling=4096 * MIB).geometry.axis == 1
    assert (
        plan_of(spec(60_000, 40_000, chunks=(1, 40_000), storage="compressed"), ceiling=4096 * MIB).geometry.axis == 0
    )


def test_samples_may_lie_on_either_axis_of_the_sweep() -> None:
    for samples, along in (("rows", True), ("columns", False)):
        plan = plan_of(spec(100_000, 5000), samples=samples, axis="rows")
        assert plan.geometry.lines_are_samples is along
        assert (plan.samples, plan.features) == ((100_000, 5000) if along else (5000, 100_000))


def test_orientation_is_said_in_words() -> None:
    plan = plan_of(spec(100_000, 5000), samples="rows")
    assert plan.orientation_words() == ("samples: rows (100,000); features: columns (5,000); centred per column")
    turned = plan_of(spec(100_000, 5000), samples="columns", center="none", scale="unit")
    assert turned.orientation_words() == (
        "samples: columns (5,000); features: rows (100,000); not centred, scaled to unit variance (n − 1) per row"
    )


# ------------------------------------------------------------------------------------------------------------ panels
def test_panels_are_large_enough_to_read_and_small_enough_to_sample() -> None:
    geometry = cut(spec(1_000_000, 1000, "f8"), 0, 0, 256 * MIB)
    assert geometry.panel_bytes <= MOST_PANEL_BYTES
    assert geometry.panels >= 160
    small = cut(spec(2000, 100, "f8"), 0, 0, 256 * MIB)
    assert small.panel_bytes >= LEAST_PANEL_BYTES - 800


def test_a_chunk_that_fits_is_never_cut() -> None:
    geometry = cut(spec(100_000, 1000, "f8", chunks=(4096, 250)), 0, 0, 64 * MIB)
    assert geometry.amplification == 1.0
    assert geometry.edges[1] == 4096


def test_a_chunk_that_does_not_fit_is_cut_and_the_cost_is_stated() -> None:
    # 1,000 lines of 8 kB fit; chunks of 1,500 lines are decoded by every panel that touches them: 1,000 lines touch one
    # or two of them, in all (1 + 2 + 1) · 1,500 lines for 3,000.
    geometry = cut(spec(3000, 1000, "f8", chunks=(1500, 1000)), 0, 0, 8000 * 1000)
    assert geometry.edges == (0, 1000, 2000, 3000)
    assert geometry.amplification == pytest.approx((1500 + 3000 + 1500) / 3000)


def test_cut_panels_are_named_among_the_reasons() -> None:
    matrix = spec(20_000, 30_000, "f8", chunks=(20_000, 100), storage="compressed")
    plan = plan_of(matrix, axis="rows", ceiling=2048 * MIB)
    words = dict(plan.reasons)["panels"]
    assert "panels are parts of chunks" in words
    assert f"decodes {plan.geometry.amplification:.2f} × the matrix" in words


def test_segments_of_full_waves_are_equal() -> None:
    waves = group(1000, 0.1, 1000, 8)
    sizes = {stop - first for wave in waves[:-1] for first, stop in wave}
    assert len(sizes) == 1
    assert all(len(wave) <= 8 for wave in waves[:-1])
    # Ten seconds a wave at most, eight segments or more where there are panels for them.
    assert len(waves) == 10
    assert group(3, 100.0, 1000, 8) == (((0, 1), (1, 2), (2, 3)),)


@pytest.mark.parametrize("leaves", [1, 2, 4, 8])
def test_the_last_segments_shrink_and_never_exceed_what_memory_is_planned_for(leaves: int) -> None:
    for panels in range(1, 3000, 7):
        waves = group(panels, 0.05, 10**6, leaves)
        segments = [segment for wave in waves for segment in wave]
        assert segments[0][0] == 0
        assert segments[-1][1] == panels
        assert all(before[1] == after[0] for before, after in pairwise(segments))
        assert max(map(len, waves)) <= most_segments(leaves)
        sizes = [stop - first for first, stop in segments]
        if leaves == 8 and panels > 100:
            # Whoever takes the last keeps the others waiting for a fraction of a whole segment.
            assert sizes[-1] <= max(1, 0.25 * sizes[0])


# ------------------------------------------------------------------------------------------------------------- pilot
def test_the_pilot_reads_a_twentieth_spread_over_the_file() -> None:
    plan = plan_of(spec(400_000, 8000, storage="compressed", chunks=(100, 8000)), rank=10)
    assert plan.route == "krylov"
    share = len(plan.pilot_panels) / plan.geometry.panels
    assert 0.01 <= share <= 0.05
    count = len(plan.pilot_panels)
    for part, panel in enumerate(plan.pilot_panels):
        assert plan.geometry.panels * part // count <= panel < plan.geometry.panels * (part + 1) // count


def test_another_seed_draws_another_pilot() -> None:
    matrix = spec(400_000, 8000, storage="compressed", chunks=(100, 8000))
    drawn = [plan_of(matrix, rank=10, seed=seed).pilot_panels for seed in (1, 1, 2)]
    assert drawn[0] == drawn[1] != drawn[2]


@pytest.mark.parametrize("panels", [7, 8])
def test_fewer_than_eight_panels_are_no_sample(panels: int) -> None:
    plan = plan_of(spec(panels * 100, 500, "f8"), route="krylov", axis="rows", panel_lines=100, rank=5)
    words = dict(plan.reasons)["pilot"]
    assert plan.mean_only == (panels < 8)
    assert ("fewer than 8 panels" in words) == (panels < 8)
    assert len(plan.pilot_panels) == 1


def test_without_centring_nothing_is_read_for_a_mean() -> None:
    plain = plan_of(spec(700, 500, "f8"), route="krylov", axis="rows", panel_lines=100, rank=5, center="none")
    assert plain.pilot_panels == ()


# -------------------------------------------------------------------------------------------------------------- rank
def test_rank_is_clipped_to_what_the_matrix_has_and_says_so() -> None:
    plan = plan_of(spec(1000, 30), rank=64)
    assert plan.rank == 30
    assert plan.remarks == ("rank clipped from 64 to 30, all that a 1,000 × 30 matrix has",)
    assert plan_of(spec(1000, 64), rank=64).remarks == ()


def test_the_default_of_fifty_is_clipped_without_a_remark() -> None:
    plan = plan_of(spec(1000, 30))
    assert plan.rank == 30
    assert plan.remarks == ()
    assert plan_of(spec(1000, 300)).rank == 50


def test_variance_plans_for_the_most_components_allowed() -> None:
    assert plan_of(spec(5000, 900), variance=0.9, max_rank=120).rank == 120
    assert plan_of(spec(5000, 90), variance=0.9).rank == 90


# --------------------------------------------------------------------------------------------------------- precision
@pytest.mark.parametrize("dtype", ["f2", "f4", "u2", "i1", "b1", "c8", "f8", "i4", "u4", "i8", "c16"])
def test_short_types_may_work_in_single_and_no_others(dtype: str) -> None:
    allowed = dtype in ("f2", "f4", "u2", "i1", "b1", "c8")
    plan = plan_of(spec(50_000, 7000, dtype), route="krylov", rank=5)
    assert plan.may_be_single is allowed
    assert dict(plan.reasons)["precision"].startswith("single if the pilot shows" if allowed else "double: products of")


def test_whole_spectra_are_always_in_double() -> None:
    assert not plan_of(spec(50_000, 700, "f4"), route="gram", rank=5).may_be_single


# ------------------------------------------------------------------------------------------------- samples and hints
def test_a_sure_marker_settles_which_axis_holds_the_samples_and_the_plan_says_so() -> None:
    hinted = spec(1000, 200, samples_hint="columns", hint_reason="its rows are named 'gene'")
    plan = plan_of(hinted)
    assert (plan.samples, plan.features, plan.request.samples) == (200, 1000, "columns")
    assert "samples: columns (200); features: rows (1,000)" in plan.orientation_words()
    assert plan.reading_words() == ["samples are its columns by the file: its rows are named 'gene'"]
    assert plan_of(replace(hinted, samples_hint="rows")).samples == 1000


def test_the_user_overrules_a_marker_and_the_plan_remarks_it() -> None:
    hinted = spec(1000, 200, samples_hint="columns", hint_reason="its rows are named 'gene'")
    plan = plan_of(hinted, samples="rows")
    assert plan.samples == 1000
    assert plan.remarks == (
        "--samples rows was given; the file says that samples are its columns (its rows are named 'gene')",
    )
    assert not plan.reading_words()
    assert not plan_of(hinted, samples="columns").remarks


def test_markers_that_contradict_each_other_stop_the_plan_until_it_is_said() -> None:
    hinted = spec(1000, 200, samples_hint="contradictory", hint_reason="rows: 'time'; columns: 'cell'")
    with pytest.raises(OptionError, match="contradict each other about which axis holds the samples") as refused:
        plan_of(hinted)
    assert refused.value.evidence == ("rows: 'time'; columns: 'cell'",)
    assert refused.value.remedy == "Say it: --samples rows or --samples columns."
    assert plan_of(hinted, samples="columns").samples == 200
    assert not plan_of(hinted, samples="rows").remarks


# ----------------------------------------------------------------------------------------------------------- refusals
@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"rank": 0}, "--rank must be a whole number of at least 1, not 0"),
        ({"rank": -3}, "--rank must be a whole number of at least 1, not -3"),
        ({"rank": 2.5}, "--rank must be a whole number of at least 1, not 2.5"),
        ({"rank": True}, "--rank must be a whole number of at least 1, not True"),
        ({"max_rank": 0}, "--max-rank must be a whole number of at least 1, not 0"),
        ({"max_rank": None}, "--max-rank must be a whole number of at least 1, not None"),
        ({"max_sweeps": 0}, "--max-sweeps must be a whole number of at least 1, not 0"),
        ({"workers": 0}, "--workers must be a whole number of at least 1, not 0"),
        ({"panel_lines": 0}, "--panel-lines must be a whole number of at least 1, not 0"),
        ({"memory": 0}, "--memory must be a whole number of at least 1, not 0"),
        ({"seed": -1}, "--seed must be a whole number of at least 0, not -1"),
        ({"variance": 0.0}, "--variance must lie above 0 and at most 1, not 0.0"),
        ({"variance": 1.5}, "--variance must lie above 0 and at most 1, not 1.5"),
        ({"variance": "much"}, "--variance must lie above 0 and at most 1, not 'much'"),
        ({"tolerance": 0.0}, "--tolerance must lie above 0 and at most 1, not 0.0"),
        ({"tolerance": float("nan")}, "--tolerance must lie above 0 and at most 1, not nan"),
        ({"tolerance": None}, "--tolerance must lie above 0 and at most 1, not None"),
        ({"rank": 5, "variance": 0.9}, "--rank and --variance were both given"),
        ({"samples": "genes"}, "--samples genes is not a choice"),
        ({"center": "samples"}, "--center samples is not a choice"),
        ({"scale": "sd"}, "--scale sd is not a choice"),
        ({"precision": "half"}, "--precision half is not a choice"),
        ({"route": "magic"}, "--route magic is not a choice"),
        ({"axis": "both"}, "--axis both is not a choice"),
    ],
)
def test_every_option_out_of_range_is_refused_with_a_remedy(options: dict[str, object], words: str) -> None:
    with pytest.raises(OptionError) as refused:
        plan_of(spec(1000, 200), **options)
    assert refused.value.problem == words
    assert refused.value.remedy


def test_choices_are_listed_in_the_remedy() -> None:
    with pytest.raises(OptionError) as refused:
        plan_of(spec(1000, 200), route="magic")
    assert refused.value.remedy == "Choose one of: auto, direct, gram, tsqr, krylov."


# ------------------------------------------------------------------------------------------------------------ memory
def test_a_refusal_lists_its_terms_and_they_add_up() -> None:
    with pytest.raises(MemoryCeilingError) as refused:
        plan_of(spec(500_000, 20_000), ceiling=100 * MIB, rank=40)
    assert "rank 40 needs at least" in refused.value.problem
    assert "--memory is 100 MiB" in refused.value.problem
    assert any("interpreter and libraries" in line for line in refused.value.evidence)
    assert any("basis and its products" in line for line in refused.value.evidence)
    assert refused.value.remedy.endswith("or lower --rank.")


def test_a_refusal_names_a_ceiling_that_cuts_no_chunk_if_that_is_not_much_more() -> None:
    # A panel of whole chunks is 40 MB.
    matrix = spec(40_000, 20_000, "u2", chunks=(1000, 500), storage="compressed")
    with pytest.raises(MemoryCeilingError) as refused:
        plan_of(matrix, ceiling=100 * MIB, rank=20, axis="rows")
    named = int(refused.value.remedy.split("--memory to ")[1].split("MiB")[0])
    assert f"needs at least {named} MiB to decode every chunk once, but --memory is 100 MiB" in refused.value.problem
    least, times = re.search(
        r"from (\d+) MiB on it would run, but cut chunks and decode them ([\d.]+) times", refused.value.evidence[-1]
    ).groups()
    assert int(least) < named <= 2 * int(least)
    tight, roomy = (plan_of(matrix, ceiling=size * MIB, rank=20, axis="rows") for size in (int(least), named))
    assert roomy.geometry.amplification == 1.0
    assert tight.geometry.amplification == pytest.approx(float(times), abs=0.06)
    assert tight.remarks == (
        f"panels cut chunks: every sweep decodes {times} × the matrix; --memory {named}MiB avoids it",
    )
    assert roomy.remarks == ()


def test_a_refusal_says_how_often_chunks_are_decoded_where_no_small_ceiling_avoids_it() -> None:
    matrix = spec(20_000, 30_000, "f8", chunks=(2000, 2000), storage="compressed")
    with pytest.raises(MemoryCeilingError) as refused:
        plan_of(matrix, ceiling=100 * MIB, rank=20)
    named = int(refused.value.remedy.split("--memory to ")[1].split("MiB")[0])
    plan = plan_of(matrix, ceiling=named * MIB, rank=20)
    assert plan.geometry.amplification > 2
    said = f"panels cut chunks, which are decoded {plan.geometry.amplification:.1f} times in every sweep"
    assert any(said in line for line in refused.value.evidence)
    assert any(re.fullmatch(r"from [\d.]+ GiB on they are decoded once", line) for line in refused.value.evidence)


def test_a_refusal_of_variance_speaks_of_its_largest_rank() -> None:
    with pytest.raises(MemoryCeilingError) as refused:
        plan_of(spec(500_000, 20_000), ceiling=100 * MIB, variance=0.9)
    assert "--variance with --max-rank 500 needs at least" in refused.value.problem
    assert refused.value.remedy.endswith("or lower --max-rank.")


def test_lowering_the_rank_lowers_what_is_needed() -> None:
    needed = []
    for rank in (100, 10):
        with pytest.raises(MemoryCeilingError) as refused:
            plan_of(spec(500_000, 20_000), ceiling=100 * MIB, rank=rank)
        needed.append(int(refused.value.problem.split("at least ")[1].split()[0]))
    assert needed[1] < needed[0]


def test_more_workers_run_where_their_buffers_fit() -> None:
    matrix = spec(400_000, 8000, storage="compressed", chunks=(100, 8000))
    roomy, tight = (plan_of(matrix, ceiling=size * MIB, processors=16, rank=10) for size in (8192, 512))
    assert roomy.workers > tight.workers >= 1
    assert "not the bits" in dict(roomy.reasons)["workers"]


def test_workers_that_do_not_fit_are_explained() -> None:
    matrix = spec(400_000, 8000, storage="compressed", chunks=(100, 8000))
    asked = plan_of(matrix, ceiling=512 * MIB, rank=10, workers=16)
    assert asked.workers < 16
    assert "for the 16 asked there is no room under the ceiling" in dict(asked.reasons)["workers"]
    assert dict(plan_of(matrix, rank=10, workers=2).reasons)["workers"] == "2, as asked"

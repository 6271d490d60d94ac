"""What phases are said to cost: exact sums at rates of which only one is not free."""

from __future__ import annotations

from dataclasses import replace

import pytest
from plan_samples import MIB, free_but, plan_of, spec

from bigsvd.plan import CALLER, SHARED, Plan, Rate, pass_costs, predict

GB = 1e9
LARGE = spec(400_000, 8000, storage="compressed", chunks=(100, 8000))


def krylov(**options: object) -> Plan:
    return plan_of(LARGE, rank=10, center="none", route="krylov", **options)


def pilot_share(plan: Plan) -> float:
    return len(plan.pilot_panels) / plan.geometry.panels


# ------------------------------------------------------------------------------------------------------------- sums
def test_every_phase_has_its_seconds_and_they_add_up() -> None:
    costs = predict(krylov())
    assert set(costs.shared) == set(SHARED)
    assert set(costs.caller) == set(CALLER)
    assert all(seconds > 0 for seconds in costs.wall.values())
    assert costs.seconds == pytest.approx(sum(costs.shared.values()) / 2 + sum(costs.caller.values()))
    assert krylov().nominal_phases == costs.wall


def test_workers_share_what_is_theirs() -> None:
    rates = free_but(products={"single": Rate(GB)})
    one, two = (predict(krylov(workers=workers), rates=rates) for workers in (1, 2))
    assert one.shared == two.shared
    assert one.wall["products"] == pytest.approx(2 * two.wall["products"])


def test_where_one_worker_at_a_time_gets_on_two_gain_nothing() -> None:
    rates = free_but(decode={"gzip": Rate(GB, 1.0)})
    one, two = (predict(krylov(workers=workers), rates=rates) for workers in (1, 2))
    assert one.wall["read"] == pytest.approx(two.wall["read"])


# ----------------------------------------------------------------------------------------------------------- reading
@pytest.mark.parametrize("sweeps", [1, 2, 2.5, 7])
def test_reading_costs_every_sweep_and_the_pilot_once(sweeps: float) -> None:
    plan = krylov()
    costs = predict(plan, sweeps, rates=free_but(decode={"gzip": Rate(GB)}))
    assert costs.shared["read"] == pytest.approx(LARGE.decoded_bytes * (sweeps + pilot_share(plan)) / GB)


def test_a_matrix_that_is_held_is_read_once() -> None:
    small = spec(20_000, 2000, storage="compressed")
    plan = plan_of(small, rank=10, route="krylov", ceiling=8192 * MIB)
    assert plan.resident
    one, three = (predict(plan, sweeps, rates=free_but(decode={"gzip": Rate(GB)})) for sweeps in (1, 3))
    assert one.shared["read"] == three.shared["read"]


def test_a_chain_costs_the_sum_of_its_codecs_and_unknown_ones_are_the_librarys() -> None:
    slow = {"zstd": Rate(GB), "shuffle": Rate(2 * GB), "library": Rate(4 * GB)}
    cost = {}
    for codecs in (("zstd",), ("shuffle",), ("shuffle", "zstd"), ("a codec of tomorrow",)):
        matrix = spec(400_000, 8000, storage="zarr", chunks=(100, 8000), codecs=codecs)
        plan = plan_of(matrix, rank=10, route="krylov")
        cost[codecs] = pass_costs(plan, 1.0, 50, single=True, rates=free_but(decode=slow)).shared["read"]
    assert cost["zstd",] == pytest.approx(matrix.decoded_bytes / GB)
    assert cost["shuffle", "zstd"] == pytest.approx(cost["zstd",] + cost["shuffle",])
    assert cost["a codec of tomorrow",] == pytest.approx(matrix.decoded_bytes / (4 * GB))


def test_chunks_at_the_edge_are_decoded_whole() -> None:
    even, edge = (
        spec(400_000, columns, storage="compressed", chunks=(100, 2000)) for columns in (8000, 8001)
    )  # fmt: skip
    seconds = [
        pass_costs(plan_of(matrix, rank=10, route="krylov"), 1.0, 50, single=True,
                   rates=free_but(decode={"gzip": Rate(GB)})).shared["read"]
        for matrix in (even, edge)
    ]  # fmt: skip
    assert seconds[1] / seconds[0] == pytest.approx(10_000 / 8000)


def test_cut_chunks_cost_every_time_they_are_decoded() -> None:
    matrix = spec(20_000, 30_000, "f8", chunks=(20_000, 100), storage="compressed")
    plan = plan_of(matrix, axis="rows", route="krylov", rank=10)
    assert plan.geometry.amplification > 2
    read = pass_costs(plan, 1.0, 50, single=False, rates=free_but(decode={"gzip": Rate(GB)})).shared["read"]
    assert read == pytest.approx(matrix.decoded_bytes * plan.geometry.amplification / GB)


def test_small_chunks_cost_more_than_large_ones() -> None:
    seconds = []
    for side in (50, 1000):
        plan = plan_of(spec(100_000, 5000, storage="compressed", chunks=(side, side)), rank=10, route="krylov")
        seconds.append(pass_costs(plan, 1.0, 50, single=True, rates=free_but(chunk=Rate(1000))).shared["read"])
    assert seconds == pytest.approx([200.0, 0.5])


# ---------------------------------------------------------------------------------------------------------- products
def test_products_cost_four_flops_an_entry_and_column_and_four_times_so_many_for_complex_entries() -> None:
    seconds = {}
    for dtype in ("f4", "c8"):
        plan = plan_of(spec(100_000, 5000, dtype), rank=10, route="krylov")
        costs = predict(plan, 2, columns=150, single=False, rates=free_but(products={"double": Rate(GB)}))
        pilot = pilot_share(plan) * 4 * plan.widths.start
        seconds[dtype] = costs.shared["products"] / (4 * 100_000 * 5000 * (150 + pilot) / GB)
    assert seconds == pytest.approx({"f4": 1.0, "c8": 4.0})


def test_the_precision_decides_the_rate() -> None:
    rates = free_but(products={"single": Rate(2 * GB), "double": Rate(GB)})
    single, double = (pass_costs(krylov(), 1, 50, single=one, rates=rates).shared["products"] for one in (True, False))
    assert double == pytest.approx(2 * single)
    single, double = (predict(krylov(), 2, single=one, rates=rates).shared["products"] for one in (True, False))
    # In single a few units are multiplied again.
    assert 0.5 * double < single < 0.6 * double
    assert predict(krylov(), 2, rates=rates).shared["products"] == single
    asked = replace(krylov(), request=replace(krylov().request, precision="double"))
    assert predict(asked, 2, rates=rates).shared["products"] == double


def test_later_sweeps_fold_and_read_back_more_columns() -> None:
    rates = free_but(fold=Rate(GB), scratch_read=Rate(GB), scratch_write=Rate(GB))
    one, two, three = (predict(krylov(), sweeps, rates=rates).shared for sweeps in (1, 2, 3))
    for phase in ("fold", "scratch"):
        assert 0 < one[phase] < two[phase] - one[phase] < three[phase] - two[phase]


# -------------------------------------------------------------------------------------------------------------- pace
def test_workers_wait_longer_for_the_last_of_few_segments() -> None:
    rates = free_but(products={"single": Rate(GB)})
    many, few = krylov(), replace(krylov(), waves=(((0, 1), (1, 2)),))
    assert sum(map(len, many.waves)) >= 8
    waiting = [predict(plan, rates=rates).caller["waiting"] for plan in (many, few)]
    assert waiting[1] == pytest.approx(waiting[0] * sum(map(len, many.waves)) / 2)
    assert predict(krylov(workers=1), rates=rates).caller["waiting"] == 0


def test_the_pace_of_a_machine_changes_its_phases_and_no_others() -> None:
    plan = krylov()
    known, slow = predict(plan).wall, predict(plan, pace={"read": 3.0}).wall
    assert slow["read"] == pytest.approx(3 * known["read"])
    assert {name: slow[name] for name in slow if name not in ("read", "waiting")} == {
        name: known[name] for name in known if name not in ("read", "waiting")
    }


def test_centring_and_scaling_cost_what_they_sum() -> None:
    rates = free_but(
        convert={"single": Rate(GB)}, sums={"single": Rate(GB), "double": Rate(GB)}, learn=Rate(GB), statistics=Rate(GB)
    )
    convert = []
    for options in ({"center": "none"}, {}, {"scale": "unit"}, {"samples": "columns"}):
        plan = plan_of(spec(100_000, 5000), route="krylov", axis="rows", rank=10, **{"center": "features"} | options)
        convert.append(predict(plan, 1, rates=rates).shared["convert"])
    plain, centred, scaled, lines = convert
    assert plain == pytest.approx(0, abs=1e-9)
    assert 0 < centred < scaled
    assert lines > centred

"""Plans of sparse matrices: products with or without zeros by their rates, panels by their nonzeros, refusals."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from plan_samples import MIB, free_but, spec

from bigsvd.errors import MemoryCeilingError
from bigsvd.plan import NOMINAL, Plan, Rate, Rates, Request, make_plan, predict, sparse_bytes
from bigsvd.source import MatrixSpec

GB = 1e9


def sparse(rows: int, columns: int, share: float, dtype: str = "f4", axis: int = 0) -> MatrixSpec:
    """Spec of a sparse matrix whose lines are all as full, in parts of a hundred lines."""
    lines, across = (rows, columns) if axis == 0 else (columns, rows)
    chunks = (min(100, lines), across)
    made = spec(rows, columns, dtype, chunks=chunks if axis == 0 else chunks[::-1], storage="sparse", codecs=())
    return replace(made, nonzeros=lines * round(share * across), compressed_axis=axis)


def even(matrix: MatrixSpec) -> Callable[[int, int], int]:
    """Lines that are all as full."""
    assert matrix.nonzeros is not None
    assert matrix.compressed_axis is not None
    each = matrix.nonzeros // matrix.shape[matrix.compressed_axis]
    return lambda first, stop: each * (stop - first)


def plan_of(matrix: MatrixSpec, *, ceiling: int = 2048 * MIB, rates: Rates = NOMINAL, **options: object) -> Plan:
    request = Request(**({"rank": 20} | options))  # type: ignore[arg-type]
    return make_plan(matrix, request, ceiling=ceiling, processors=2, rates=rates, line_nonzeros=even(matrix))


# ------------------------------------------------------------------------------------------------------------ products
@pytest.mark.parametrize(("precision", "work"), [("single", "single"), ("double", "double")])
def test_zeros_are_left_out_below_the_density_at_which_rates_cross(precision: str, work: str) -> None:
    rates = free_but(products={work: Rate(100 * GB)}, spmm={work: Rate(5 * GB)})
    for share, wanted in ((0.001, "sparse"), (0.045, "sparse"), (0.055, "dense"), (0.9, "dense")):
        plan = plan_of(sparse(200_000, 20_000, share), rates=rates, precision=precision)
        assert plan.products == wanted, share


def test_zeros_are_left_out_where_writing_them_costs_more() -> None:
    dear = free_but(fetch={"sparse": Rate(GB)}, products={"single": Rate(100 * GB)}, spmm={"single": Rate(5 * GB)})
    assert plan_of(sparse(200_000, 20_000, 0.08), rates=dear).products == "sparse"


def test_nominal_rates_leave_zeros_out_of_counts_and_not_of_half_full_matrices() -> None:
    assert plan_of(sparse(500_000, 20_000, 0.01)).products == "sparse"
    assert plan_of(sparse(500_000, 20_000, 0.5)).products == "dense"


def test_the_choice_can_be_forced_and_is_told() -> None:
    matrix = sparse(100_000, 20_000, 0.02)
    for asked in ("sparse", "dense"):
        plan = plan_of(matrix, products=asked)
        words = dict(plan.reasons)["products"]
        assert plan.products == asked
        assert "2 % of the entries are stored" in words
        assert "as asked" in words
    assert "against" in dict(plan_of(matrix).reasons)["products"]


def test_matrices_with_all_entries_stored_say_nothing_of_it() -> None:
    plan = make_plan(spec(20_000, 7000), Request(rank=5), ceiling=2048 * MIB)
    assert plan.products == "dense"
    assert "products" not in dict(plan.reasons)


def test_without_a_count_of_nonzeros_zeros_are_multiplied() -> None:
    plan = make_plan(sparse(100_000, 20_000, 0.001), Request(rank=5), ceiling=2048 * MIB)
    assert plan.products == "dense"


def test_routes_of_the_whole_spectrum_multiply_zeros() -> None:
    for route in ("gram", "tsqr"):
        assert plan_of(sparse(100_000, 800, 0.001), route=route).products == "dense"


# -------------------------------------------------------------------------------------------------------------- panels
def test_a_panel_takes_its_values_places_and_pointers() -> None:
    for code, entry in (("f4", 8), ("u2", 6), ("f8", 12), ("c16", 20)):
        matrix = sparse(100_000, 20_000, 0.01, code)
        plan = plan_of(matrix, products="sparse")
        lines = plan.geometry.edges[1]
        assert plan.geometry.nonzeros == 200 * lines
        assert plan.geometry.panel_bytes == 200 * lines * entry + 4 * (lines + 1)
        assert plan.geometry.panel_bytes == sparse_bytes(matrix, lines, 200 * lines)


def test_memory_is_planned_for_the_fullest_panel() -> None:
    matrix = sparse(100_000, 20_000, 0.01)

    def skewed(first: int, stop: int) -> int:
        # The last hundred lines hold as much as 10,000 others.
        return 200 * (stop - first) + 20_000 * max(0, stop - max(first, 99_900))

    request = Request(rank=20, products="sparse", panel_lines=1000)
    plans = [make_plan(matrix, request, ceiling=2048 * MIB, line_nonzeros=it) for it in (even(matrix), skewed)]
    assert plans[0].geometry.edges == plans[1].geometry.edges
    assert plans[0].geometry.nonzeros == 200_000
    assert plans[1].geometry.nonzeros == 2_200_000
    more = plans[1].geometry.panel_bytes - plans[0].geometry.panel_bytes
    assert more == 2_000_000 * 8
    assert plans[1].planned_bytes > plans[0].planned_bytes + plans[1].workers * more


@pytest.mark.parametrize("axis", [0, 1])
def test_panels_run_along_the_stored_lines(axis: int) -> None:
    shape = (200_000, 15_000) if axis == 0 else (15_000, 200_000)
    plan = plan_of(sparse(*shape, 0.01, axis=axis))
    assert plan.geometry.axis == axis
    assert plan.geometry.amplification == 1.0


def test_a_sparse_matrix_that_fits_is_held_unless_its_source_holds_it() -> None:
    matrix = sparse(100_000, 20_000, 0.01)
    # 160 MB without zeros, 8 GB with them.
    assert plan_of(matrix).resident
    assert not plan_of(replace(matrix, held_bytes=2 * 10**8)).resident
    assert not plan_of(matrix, ceiling=400 * MIB).resident


# --------------------------------------------------------------------------------------------------------------- costs
def test_products_without_zeros_cost_their_nonzeros() -> None:
    matrix = sparse(200_000, 20_000, 0.01)
    plan = plan_of(matrix, products="sparse", center="none", precision="double", ceiling=500 * MIB)
    assert not plan.resident
    assert matrix.nonzeros is not None
    pilot = len(plan.pilot_panels) / plan.geometry.panels
    costs = predict(plan, 2, columns=300, rates=free_but(spmm={"double": Rate(GB)}))
    flops = 4 * matrix.nonzeros * (300 + 4 * pilot * plan.widths.start)
    assert costs.shared["products"] == pytest.approx(flops / GB)
    costs = predict(plan, 2, rates=free_but(turn=Rate(GB)))
    assert costs.shared["convert"] == pytest.approx(matrix.nonzeros * (2 + 5 * pilot) / GB)
    costs = predict(plan, 2, rates=free_but(nonzero_sums=Rate(GB)))
    assert costs.shared["convert"] == pytest.approx(matrix.nonzeros * (1 + 2 * pilot) / GB)
    costs = predict(plan, 2, rates=free_but(fetch={"sparse": Rate(GB)}))
    assert costs.shared["read"] < 1e-9


def test_reading_costs_what_is_stored_and_zeros_that_are_written() -> None:
    matrix = sparse(200_000, 20_000, 0.01)
    assert matrix.nonzeros is not None
    for products, zeros in (("sparse", False), ("dense", True)):
        plan = plan_of(matrix, products=products, ceiling=500 * MIB)
        times = (2 + len(plan.pilot_panels) / plan.geometry.panels) * plan.geometry.amplification
        read = predict(plan, 2, rates=free_but(entries=Rate(GB))).shared["read"]
        assert read == pytest.approx(times * matrix.nonzeros / GB)
        cleared = predict(plan, 2, rates=free_but(fetch={"sparse": Rate(GB)})).shared["read"]
        assert cleared == pytest.approx(zeros * times * matrix.decoded_bytes / GB)
        decoded = predict(
            replace(plan, spec=replace(matrix, codecs=("gzip",))), 2, rates=free_but(decode={"gzip": Rate(GB)})
        )
        assert decoded.shared["read"] == pytest.approx(times * matrix.nonzeros * 8 / GB)


# ------------------------------------------------------------------------------------------------------------- refusal
def test_ranges_across_the_stored_lines_are_no_plan_where_each_would_decode_everything() -> None:
    # 3,000,000 samples as rows, stored by columns: a basis along the samples does not fit, nor do ranges of rows help.
    matrix = sparse(3_000_000, 2000, 0.01, axis=1)
    with pytest.raises(MemoryCeilingError) as refused:
        plan_of(matrix, ceiling=1024 * MIB, products="auto", route="krylov")
    assert "or store it by rows: X.tocsr() of SciPy" in refused.value.remedy
    assert "stored by columns" in " ".join(refused.value.evidence)
    assert "3,000,000 rows" in " ".join(refused.value.evidence)


def test_who_asks_for_the_other_axis_gets_it() -> None:
    matrix = sparse(300_000, 2000, 0.01, axis=1)
    plan = plan_of(matrix, ceiling=1024 * MIB, axis="rows", route="krylov")
    assert plan.geometry.axis == 0
    assert plan.products == "dense"
    assert plan.geometry.amplification > 16


def test_the_named_ceiling_plans() -> None:
    matrix = sparse(1_000_000, 2000, 0.01, "f8", axis=1)
    with pytest.raises(MemoryCeilingError) as refused:
        plan_of(matrix, ceiling=300 * MIB, route="krylov")
    named = int(refused.value.remedy.split("--memory to ")[1].split("MiB")[0])
    plan = plan_of(matrix, ceiling=named * MIB, route="krylov")
    assert plan.planned_bytes <= named * MIB


def test_plans_are_the_same_whatever_the_counter_returns_as_type() -> None:
    matrix = sparse(100_000, 20_000, 0.01)
    numpy_counter = lambda first, stop: np.int64(200) * (stop - first)  # noqa: E731
    plans = [
        make_plan(matrix, Request(rank=20), ceiling=2048 * MIB, line_nonzeros=it)
        for it in (even(matrix), numpy_counter)
    ]
    assert plans[0].memory == plans[1].memory
    assert plans[0].waves == plans[1].waves

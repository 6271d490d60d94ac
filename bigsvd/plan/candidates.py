"""Every plan that could be made for a matrix, with its memory, and its time at nominal rates."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace

from bigsvd.plan.geometry import Geometry, cut, group
from bigsvd.plan.memory import MemoryTerm, memory_terms
from bigsvd.plan.phases import predict
from bigsvd.plan.plan import Plan, mean_is_enough
from bigsvd.plan.rates import NOMINAL, Rates
from bigsvd.plan.request import Request
from bigsvd.plan.sparse import matrix_bytes
from bigsvd.plan.widths import NOMINAL_TOLERANCE, PROFILES, SWEEPS_PER_DECADE, Widths, closing_width, krylov_widths
from bigsvd.randomness import draw_without_repeat
from bigsvd.source import LineNonzeros, MatrixSpec

PILOT_SHARE = 0.05
# Workers that costs are compared with and memory is sized for; the number that really runs changes neither.
NOMINAL_WORKERS = 2
# Sweeps that restarts cost, by the growths there is room for.
RESTART_SWEEPS = {3: 0.0, 2: 0.3, 0: 1.5}
# Longest short side for which a route that computes the whole spectrum is considered.
LONGEST_SHORT_SIDE = 6000
SINGLE_KINDS = ("f2", "f4", "i1", "i2", "u1", "u2", "b1", "c8")
STREAM_PILOT = 1
# Panels across the lines of a sparse matrix decode all of it each; more than so many are no plan but for who asks.
MOST_SPARSE_REREADS = 16
# Shares of the ceiling that one panel may take, and segments per wave, that are tried.
_PANEL_SHARES = (8, 16, 32, 64, 128, 256)
_LEAVES = (8, 4, 2, 1)
# Below this nominal time exactness decides, not cost: the direct route comes first.
_NO_MATTER_SECONDS = 1.0
_ROUTE_ORDER = ("direct", "tsqr", "gram", "krylov")


def preference(plan: Plan) -> tuple[float, int]:
    """What the plans are ordered by: nominal time, and exactness where the time does not matter."""
    return max(plan.nominal_seconds, _NO_MATTER_SECONDS), _ROUTE_ORDER.index(plan.route)


def candidates(
    spec: MatrixSpec,
    request: Request,
    axis: int,
    samples_axis: int,
    route: str,
    ceiling: int,
    result_bytes: int,
    line_nonzeros: LineNonzeros | None = None,
) -> Iterator[Plan]:
    """Plans for one axis and route with their memory, from roomy to tight; `price` adds their cost."""
    for products in _products(spec, request, axis, route, line_nonzeros):
        counter = line_nonzeros if products == "sparse" else None
        yield from _of_products(spec, request, axis, samples_axis, route, ceiling, result_bytes, counter)


def _products(
    spec: MatrixSpec, request: Request, axis: int, route: str, line_nonzeros: LineNonzeros | None
) -> tuple[str, ...]:
    """How panels may be multiplied: without their zeros only along the axis whose lines are stored one by one."""
    may = line_nonzeros is not None and axis == spec.compressed_axis and route == "krylov" and bool(spec.nonzeros)
    possible = ("sparse", "dense") if may else ("dense",)
    return tuple(one for one in possible if request.products in ("auto", one))


def _of_products(
    spec: MatrixSpec,
    request: Request,
    axis: int,
    samples_axis: int,
    route: str,
    ceiling: int,
    result_bytes: int,
    line_nonzeros: LineNonzeros | None,
) -> Iterator[Plan]:
    """Plans for one axis, route and kind of products."""
    across = spec.shape[1 - axis]
    if route != "krylov" and across > LONGEST_SHORT_SIDE:
        return
    matrix = matrix_bytes(spec, "dense" if line_nonzeros is None else "sparse")
    may_be_single = route == "krylov" and spec.dtype.str[1:] in SINGLE_KINDS
    holdable = matrix <= ceiling // 2
    in_memory = spec.storage == "memory" or (spec.storage == "sparse" and spec.held_bytes >= matrix)
    seen: set[int] = set()
    for share in _PANEL_SHARES:
        geometry = cut(spec, axis, samples_axis, ceiling // share, request.panel_lines, line_nonzeros)
        if request.axis == "auto" and _rereads_sparse(spec, geometry):
            continue
        if geometry.panels in seen:
            continue
        seen.add(geometry.panels)
        pilot = _pilot(spec, geometry, request, route, ceiling)
        for widths, sweeps in _all_widths(request, across, route):
            more = 1 if route == "krylov" and mean_is_enough(route, geometry) else 0
            for resident in (True, False):
                if (resident and not holdable) or (not resident and route == "direct"):
                    continue
                if resident and in_memory and route != "direct":
                    continue
                for workers in (NOMINAL_WORKERS, 1):
                    for leaves in _LEAVES:
                        draft = Plan(
                            request, spec, geometry, route, resident, widths, leaves, pilot, may_be_single, workers,
                            (), ceiling, sweeps + more, result_bytes=result_bytes,
                        )  # fmt: skip
                        plan = replace(draft, memory=terms_of(draft, workers))
                        yield plan
                        if plan.planned_bytes <= ceiling:
                            # Fewer segments only cost time.
                            break


def _rereads_sparse(spec: MatrixSpec, geometry: Geometry) -> bool:
    """Whether panels run across the lines that a sparse matrix stores, so that each of many would read all of it."""
    across_lines = spec.compressed_axis is not None and geometry.axis != spec.compressed_axis
    return across_lines and geometry.amplification > MOST_SPARSE_REREADS


def price(plan: Plan, rates: Rates = NOMINAL) -> Plan:
    """The same plan with its nominal time."""
    return replace(plan, nominal_seconds=predict(plan, plan.expected_sweeps, rates=rates).seconds)


def _all_widths(request: Request, across: int, route: str) -> Iterator[tuple[Widths, float]]:
    """Columns of the basis for a route, and the sweeps they are expected to take."""
    assert request.rank is not None
    if route != "krylov":
        widths = krylov_widths(request.rank, across, growths=0)
        closing = closing_width(request.rank, across)
        yield replace(widths, start=closing, limit=min(across, closing + widths.grow + 2 * widths.test)), 2.0
        return
    for profile, sweeps in PROFILES.items():
        if request.variance is not None and profile != "wide":
            # How many components the share needs shows while sweeping, and a narrow basis gets there a sweep later.
            continue
        sweeps = max(1.0, sweeps - SWEEPS_PER_DECADE * math.log10(request.tolerance / NOMINAL_TOLERANCE))
        for growths, more in RESTART_SWEEPS.items():
            widths = krylov_widths(request.rank, across, growths=growths, profile=profile)
            if request.width_limit is not None:
                least = max(widths.start + widths.test, widths.keep + widths.grow + 2 * widths.test)
                widths = replace(widths, limit=min(across, max(least, request.width_limit)))
            yield widths, sweeps + more


def _pilot(spec: MatrixSpec, geometry: Geometry, request: Request, route: str, ceiling: int) -> tuple[int, ...]:
    """Panels of the pilot, drawn by seed and spread over the file."""
    if mean_is_enough(route, geometry):
        # One panel gives a first mean, which keeps large offsets out of the sums; it is held, not read twice.
        wanted = request.center != "none" or request.scale != "none"
        return tuple(draw_without_repeat(request.seed, STREAM_PILOT, geometry.panels, 1)) if wanted else ()
    most = min(PILOT_SHARE * matrix_bytes(spec, "sparse" if geometry.sparse else "dense"), ceiling / 8)
    count = max(1, int(most // max(1, geometry.panel_bytes)))
    return tuple(draw_without_repeat(request.seed, STREAM_PILOT, geometry.panels, min(count, geometry.panels)))


def terms_of(plan: Plan, workers: int) -> tuple[MemoryTerm, ...]:
    """Memory terms of a plan with so many workers."""
    pilot_bytes = len(plan.pilot_panels) * plan.geometry.panel_bytes
    held = plan.mean_only and not plan.resident
    return memory_terms(
        plan.spec, plan.geometry, plan.route, plan.widths,
        workers=workers, leaves=plan.leaves, pilot_bytes=pilot_bytes, hold_pilot=held, resident=plan.resident,
        scaled=plan.scaled, result_bytes=plan.result_bytes,
    )  # fmt: skip


def waves_of(plan: Plan, rates: Rates = NOMINAL) -> tuple[tuple[tuple[int, int], ...], ...]:
    """Segments and waves of a sweep, from nominal rates for the widest block."""
    alone = replace(plan, workers=1)
    if plan.route == "krylov":
        costs = predict(replace(alone, pilot_panels=()), 1, columns=plan.widths.block, single=False, rates=rates)
    else:
        costs = predict(alone, 1, rates=rates)
    geometry = plan.geometry
    return group(geometry.panels, sum(costs.shared.values()) / geometry.panels, geometry.panel_bytes, plan.leaves)

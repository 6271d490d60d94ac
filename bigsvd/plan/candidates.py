"""Every plan that could be made for a matrix, with its memory and its time at nominal rates."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace

from bigsvd.plan.geometry import Geometry, cut, group
from bigsvd.plan.memory import MemoryTerm, memory_terms
from bigsvd.plan.plan import Plan, mean_is_enough
from bigsvd.plan.rates import COMPLEX_FACTOR, DENSE_RATE, PRODUCT_RATE, QR_RATE, READ_RATE
from bigsvd.plan.request import Request
from bigsvd.plan.widths import Widths, closing_width, krylov_widths
from bigsvd.randomness import draw_without_repeat
from bigsvd.source import MatrixSpec

PILOT_SHARE = 0.05
# Workers that costs are compared with and memory is sized for; the number that really runs changes neither.
NOMINAL_WORKERS = 2
# Sweeps a block Krylov run is expected to take after the pilot (1/i spectrum, docs/method.md).
NOMINAL_SWEEPS = 3
# Sweeps that restarts cost, by the growths there is room for.
RESTART_SWEEPS = {3: 0.0, 2: 0.3, 0: 1.5}
# Longest short side for which a route that computes the whole spectrum is considered.
LONGEST_SHORT_SIDE = 6000
SINGLE_KINDS = ("f2", "f4", "i1", "i2", "u1", "u2", "b1", "c8")
STREAM_PILOT = 1
# Shares of the ceiling that one panel may take, and segments per wave, that are tried.
_PANEL_SHARES = (8, 16, 32, 64, 128, 256)
_LEAVES = (8, 4, 2, 1)
# Below this nominal time exactness decides, not cost: the direct route comes first.
_NO_MATTER_SECONDS = 2.0
_ROUTE_ORDER = ("direct", "tsqr", "gram", "krylov")


def preference(plan: Plan) -> tuple[float, int]:
    """What the plans are ordered by: nominal time, and exactness where the time does not matter."""
    return max(plan.nominal_seconds, _NO_MATTER_SECONDS), _ROUTE_ORDER.index(plan.route)


def candidates(
    spec: MatrixSpec, request: Request, axis: int, samples_axis: int, route: str, ceiling: int, result_bytes: int
) -> Iterator[Plan]:
    """Plans for one axis and route, from roomy to tight."""
    across = spec.shape[1 - axis]
    if route != "krylov" and across > LONGEST_SHORT_SIDE:
        return
    may_be_single = route == "krylov" and spec.dtype.str[1:] in SINGLE_KINDS
    holdable = spec.decoded_bytes <= ceiling // 2
    seen: set[int] = set()
    for share in _PANEL_SHARES:
        geometry = cut(spec, axis, samples_axis, ceiling // share, request.panel_lines)
        if geometry.panels in seen:
            continue
        seen.add(geometry.panels)
        pilot = _pilot(spec, geometry, request, route, ceiling)
        for growths in (3, 2, 0):
            widths = _widths(request, across, route, growths)
            for leaves in _LEAVES:
                for resident in (True, False):
                    if (resident and not holdable) or (not resident and route == "direct"):
                        continue
                    if resident and spec.storage == "memory" and route != "direct":
                        continue
                    for workers in (NOMINAL_WORKERS, 1):
                        draft = Plan(
                            request,
                            spec,
                            geometry,
                            route,
                            resident,
                            widths,
                            leaves,
                            pilot,
                            may_be_single,
                            workers,
                            (),
                            ceiling,
                            0.0,
                            0,
                            result_bytes=result_bytes,
                        )
                        seconds, sweeps = _nominal(draft, growths)
                        yield replace(
                            draft, memory=terms_of(draft, workers), nominal_seconds=seconds, nominal_sweeps=sweeps
                        )


def _widths(request: Request, across: int, route: str, growths: int) -> Widths:
    """Columns of the basis for a route, with room for so many growths before a restart."""
    assert request.rank is not None
    widths = krylov_widths(request.rank, across, growths=growths if route == "krylov" else 0)
    if route != "krylov":
        closing = closing_width(request.rank, across)
        return replace(widths, start=closing, limit=min(across, closing + widths.grow + 2 * widths.test))
    if request.width_limit is not None:
        least = max(widths.start + widths.test, widths.keep + widths.grow + 2 * widths.test)
        return replace(widths, limit=min(across, max(least, request.width_limit)))
    return widths


def _pilot(spec: MatrixSpec, geometry: Geometry, request: Request, route: str, ceiling: int) -> tuple[int, ...]:
    """Panels of the pilot, drawn by seed and spread over the file."""
    if mean_is_enough(route, geometry):
        # One panel gives a first mean, which keeps large offsets out of the sums; it is held, not read twice.
        wanted = request.center != "none" or request.scale != "none"
        return tuple(draw_without_repeat(request.seed, STREAM_PILOT, geometry.panels, 1)) if wanted else ()
    most = min(PILOT_SHARE * spec.decoded_bytes, ceiling / 8)
    count = max(1, int(most // max(1, geometry.panel_bytes)))
    return tuple(draw_without_repeat(request.seed, STREAM_PILOT, geometry.panels, min(count, geometry.panels)))


def terms_of(plan: Plan, workers: int) -> tuple[MemoryTerm, ...]:
    """Memory terms of a plan with so many workers."""
    pilot_bytes = len(plan.pilot_panels) * plan.geometry.panel_bytes
    held = plan.mean_only and not plan.resident
    return memory_terms(
        plan.spec, plan.geometry, plan.route, plan.widths,
        workers=workers, leaves=plan.leaves, pilot_bytes=pilot_bytes, hold_pilot=held, resident=plan.resident,
        result_bytes=plan.result_bytes,
    )  # fmt: skip


def _nominal(plan: Plan, growths: int) -> tuple[float, int]:
    """Seconds at nominal rates, and the sweeps they count."""
    m, n = plan.geometry.lines, plan.geometry.across
    factor = COMPLEX_FACTOR if plan.spec.dtype.kind == "c" else 1.0
    product = PRODUCT_RATE["single" if plan.may_be_single else "double"] / factor
    read = plan.spec.decoded_bytes * plan.geometry.amplification / READ_RATE[plan.spec.storage]
    again = plan.spec.decoded_bytes / READ_RATE["memory"] if plan.resident else read
    widths = plan.widths
    # Fewer segments leave a core idle at the end of each wave.
    idle = 1 + 0.05 / plan.leaves
    if plan.route == "krylov":
        sweeps = NOMINAL_SWEEPS + RESTART_SWEEPS[growths] + (1 if plan.mean_only else 0)
        columns = widths.start + widths.test + (sweeps - 1) * (widths.grow + 2 * widths.test)
        pilot = 0.0 if plan.mean_only else len(plan.pilot_panels) / max(1, plan.geometry.panels)
        work = 4.0 * m * n * columns / product * (1 + 2 * pilot)
        work += factor * sweeps * m * widths.limit**2 / QR_RATE
        seconds = (read * (1 + pilot) + (sweeps - 1) * again + work) / plan.workers * idle
        dense = factor * sweeps * 6 * n * widths.limit * widths.block / PRODUCT_RATE["double"]
        return seconds + dense, math.ceil(sweeps)
    closing = again + 4.0 * m * n * widths.start * factor / PRODUCT_RATE["double"]
    rate = PRODUCT_RATE["double"] if plan.route == "gram" else QR_RATE
    first = read + 2.0 * m * n * n * factor / rate
    return (first + closing) / plan.workers * idle + 12.0 * n**3 * factor / DENSE_RATE, 2


def waves_of(plan: Plan) -> tuple[tuple[tuple[int, int], ...], ...]:
    """Segments and waves of a sweep, from nominal rates for the widest block."""
    factor = COMPLEX_FACTOR if plan.spec.dtype.kind == "c" else 1.0
    lines = plan.geometry.edges[1] - plan.geometry.edges[0]
    work = 4.0 * lines * plan.geometry.across * plan.widths.block * factor / PRODUCT_RATE["double"]
    if plan.route == "gram":
        work = max(work, 2.0 * lines * plan.geometry.across**2 * factor / PRODUCT_RATE["double"])
    if plan.route in ("tsqr", "direct"):
        work = max(work, 2.0 * lines * plan.geometry.across**2 * factor / QR_RATE)
    seconds = plan.geometry.panel_bytes / READ_RATE[plan.spec.storage] + work
    return group(plan.geometry.panels, seconds, plan.leaves)

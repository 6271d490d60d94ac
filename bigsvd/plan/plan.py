"""The plan: every choice that touches the numbers, made from spec, options and ceiling alone."""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace

from bigsvd.errors import MemoryCeilingError, OptionError
from bigsvd.plan.geometry import Geometry, cut, group
from bigsvd.plan.memory import MemoryTerm, memory_terms, total
from bigsvd.plan.rates import COMPLEX_FACTOR, DENSE_RATE, PRODUCT_RATE, QR_RATE, READ_RATE
from bigsvd.plan.request import Request, check_request
from bigsvd.plan.widths import Widths, closing_width, krylov_widths
from bigsvd.randomness import draw_without_repeat
from bigsvd.source import MatrixSpec
from bigsvd.units import show_bytes, show_count, show_seconds, show_shape

PILOT_SHARE = 0.05
# Share of the matrix that the exact check on slices reads, for the estimate of bytes.
NOMINAL_SHARE_OF_SLICES = 0.01
FEWEST_PILOT_PANELS = 8
# Workers that costs are compared with and memory is sized for; the number that really runs changes neither.
NOMINAL_WORKERS = 2
# Sweeps a block Krylov run is expected to take after the pilot (1/i spectrum, docs/method.md).
NOMINAL_SWEEPS = 3
# Sweeps that restarts cost, by the growths there is room for.
RESTART_SWEEPS = {3: 0.0, 2: 0.3, 0: 1.5}
# Longest short side for which a route that computes the whole spectrum is considered.
LONGEST_SHORT_SIDE = 6000
STREAM_PILOT, STREAM_SLICES = 1, 2
# Shares of the ceiling that one panel may take, and segments per wave, that are tried.
_PANEL_SHARES = (8, 16, 32, 64, 128, 256)
_LEAVES = (8, 4, 2, 1)
# Below this nominal time exactness decides, not cost: the direct route comes first.
_NO_MATTER_SECONDS = 2.0
_ROUTE_ORDER = ("direct", "tsqr", "gram", "krylov")
SINGLE_KINDS = ("f2", "f4", "i1", "i2", "u1", "u2", "b1", "c8")


ResultBytes = Callable[[int], int]


def _nothing(rank: int) -> int:
    """Bytes of a result that is not written."""
    return 0


@dataclass(frozen=True)
class Plan:
    """Everything decided before the matrix is read.

    Attributes
    ----------
    request : Request
        The checked options.
    spec : MatrixSpec
    geometry : Geometry
        Axis and panels.
    route : str
        ``direct``, ``gram``, ``tsqr`` or ``krylov``.
    resident : bool
        The matrix is read once and held in its stored type.
    widths : Widths
        Columns of the basis.
    leaves : int
        Segments per wave.
    pilot_panels : tuple of int
        Panels read for the pilot (for other routes: for a first mean); empty for none.
    may_be_single : bool
        Whether the stored type allows products in single precision.
    workers : int
        Threads; changes nothing in the numbers.
    memory : tuple of MemoryTerm
    ceiling : int
        Bytes.
    nominal_seconds : float
        Time at nominal rates.
    nominal_sweeps : int
        Sweeps expected.
    reasons : tuple of (str, str)
        Each choice and why, in words.
    remarks : tuple of str
    waves : tuple of tuple of (int, int)
        Segments of every wave, as ranges of panels.
    result_bytes : int
        What writing the result holds.
    """

    request: Request
    spec: MatrixSpec
    geometry: Geometry
    route: str
    resident: bool
    widths: Widths
    leaves: int
    pilot_panels: tuple[int, ...]
    may_be_single: bool
    workers: int
    memory: tuple[MemoryTerm, ...]
    ceiling: int
    nominal_seconds: float
    nominal_sweeps: int
    reasons: tuple[tuple[str, str], ...] = ()
    remarks: tuple[str, ...] = ()
    waves: tuple[tuple[tuple[int, int], ...], ...] = field(default=())
    result_bytes: int = 0

    @property
    def planned_bytes(self) -> int:
        """Planned peak of the resident size."""
        return total(self.memory)

    @property
    def nominal_dense_seconds(self) -> float:
        """Nominal time of folding Y and of the small dense steps, over all sweeps."""
        factor = COMPLEX_FACTOR if self.spec.dtype.kind == "c" else 1.0
        width, n = self.widths.limit, self.geometry.across
        folding = self.geometry.lines * width**2 / QR_RATE / max(1, self.workers)
        return factor * self.nominal_sweeps * (folding + 6 * n * width * self.widths.block / PRODUCT_RATE["double"])

    @property
    def mean_only(self) -> bool:
        """Whether the pilot gives a first mean only, and its panel is held for the first sweep."""
        return _mean_only(self.route, self.geometry)

    @property
    def rank(self) -> int:
        """Components wanted; for ``--variance`` the most there may be."""
        assert self.request.rank is not None
        return self.request.rank

    @property
    def samples(self) -> int:
        """Rows of the decomposed matrix."""
        return self.geometry.lines if self.geometry.lines_are_samples else self.geometry.across

    @property
    def features(self) -> int:
        """Columns of the decomposed matrix."""
        return self.geometry.across if self.geometry.lines_are_samples else self.geometry.lines

    @property
    def centred(self) -> bool:
        """Whether features are centred."""
        return self.request.center == "features"

    @property
    def scaled(self) -> bool:
        """Whether features are scaled to unit variance."""
        return self.request.scale == "unit"

    def orientation_words(self) -> str:
        """Which axis holds what, and what is done to it, in words.

        For example ``samples: rows (100,000); features: columns (5,000); centred per column``.
        """
        samples, features = ("rows", "columns") if self.request.samples == "rows" else ("columns", "rows")
        one = features[:-1]
        done = [f"centred per {one}"] if self.centred else ["not centred"]
        if self.scaled:
            done.append(f"scaled to unit variance (n − 1) per {one}")
        counts = show_count(self.samples), show_count(self.features)
        return f"samples: {samples} ({counts[0]}); features: {features} ({counts[1]}); {', '.join(done)}"


def make_plan(
    spec: MatrixSpec,
    request: Request,
    *,
    ceiling: int,
    processors: int | None = None,
    result_bytes: ResultBytes = _nothing,
) -> Plan:
    """Decide how a matrix will be decomposed.

    Parameters
    ----------
    spec : MatrixSpec
    request : Request
    ceiling : int
        Bytes the process may hold.
    processors : int or None
        Processors at hand; decides only how many workers run.
    result_bytes : callable
        Bytes that writing a result of so many components holds.

    Returns
    -------
    Plan
        The cheapest at nominal rates among all that fit.

    Raises
    ------
    OptionError
        If an option is out of range.
    MemoryCeilingError
        If nothing fits; names the least that would.
    """
    request, remarks = check_request(request, spec)
    samples_axis = 0 if request.samples == "rows" else 1
    axes = {"auto": (0, 1), "rows": (0,), "columns": (1,)}[request.axis]
    routes = ("direct", "gram", "tsqr", "krylov") if request.route == "auto" else (request.route,)
    assert request.rank is not None
    written = result_bytes(request.rank)

    def drafts(bytes_allowed: int) -> list[Plan]:
        return [
            plan
            for axis in axes
            for route in routes
            for plan in _candidates(spec, request, axis, samples_axis, route, bytes_allowed, written)
        ]

    found = [plan for plan in drafts(ceiling) if plan.planned_bytes <= ceiling]
    if not found:
        raise _too_small(request, ceiling, drafts)
    best = min(found, key=_preference)
    workers = request.workers or processors or os.cpu_count() or 1
    workers = _fitting_workers(best, min(workers, 2 * best.leaves))
    reasons = (*_reasons(best, found, request), ("workers", _worker_words(workers, request, best)))
    return replace(
        best, workers=workers, memory=_terms(best, workers), reasons=reasons, remarks=remarks, waves=_waves(best)
    )


def _preference(plan: Plan) -> tuple[float, int]:
    """What the plans are ordered by: nominal time, and exactness where the time does not matter."""
    return max(plan.nominal_seconds, _NO_MATTER_SECONDS), _ROUTE_ORDER.index(plan.route)


def _candidates(
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
                            draft, memory=_terms(draft, workers), nominal_seconds=seconds, nominal_sweeps=sweeps
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
    if _mean_only(route, geometry):
        # One panel gives a first mean, which keeps large offsets out of the sums; it is held, not read twice.
        wanted = request.center != "none" or request.scale != "none"
        return tuple(draw_without_repeat(request.seed, STREAM_PILOT, geometry.panels, 1)) if wanted else ()
    most = min(PILOT_SHARE * spec.decoded_bytes, ceiling / 8)
    count = max(1, int(most // max(1, geometry.panel_bytes)))
    return tuple(draw_without_repeat(request.seed, STREAM_PILOT, geometry.panels, min(count, geometry.panels)))


def _mean_only(route: str, geometry: Geometry) -> bool:
    """Whether a sample would serve for nothing but a first mean."""
    return route != "krylov" or geometry.panels < FEWEST_PILOT_PANELS


def _terms(plan: Plan, workers: int) -> tuple[MemoryTerm, ...]:
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


def _waves(plan: Plan) -> tuple[tuple[tuple[int, int], ...], ...]:
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


def _fitting_workers(plan: Plan, wanted: int) -> int:
    """The most workers, up to those wanted, that fit under the ceiling."""
    for workers in range(wanted, 1, -1):
        if total(_terms(plan, workers)) <= plan.ceiling:
            return workers
    return 1


def _worker_words(workers: int, request: Request, plan: Plan) -> str:
    """Why so many workers."""
    if request.workers is not None and workers == request.workers:
        return f"{workers}, as asked"
    if request.workers is not None:
        return f"{workers}; for the {request.workers} asked there is no room under the ceiling, or no segment"
    return f"{workers}, one BLAS thread each; the number changes the time, not the bits"


def _reasons(best: Plan, found: list[Plan], request: Request) -> tuple[tuple[str, str], ...]:
    """Why this axis, these panels, this route and width."""
    spec, geometry = best.spec, best.geometry
    other = [plan for plan in found if plan.geometry.axis != geometry.axis]
    along = ("rows", "columns")[geometry.axis]
    if request.axis != "auto":
        why = "as asked"
    elif not other:
        why = "the other axis does not fit under the ceiling"
    else:
        rival = min(plan.nominal_seconds for plan in other)
        why = f"nominally {show_seconds(best.nominal_seconds)} against {show_seconds(rival)} along the other axis"
    axis = f"panels are ranges of {along}; {why}"
    lines = geometry.edges[1] - geometry.edges[0]
    panels = (
        f"{show_count(geometry.panels)} panels of {show_count(lines)} {along}, {show_bytes(geometry.panel_bytes)} each"
    )
    if geometry.amplification > 1.001:
        panels += (
            f"; whole chunks of {show_shape(spec.chunks)} do not fit under the ceiling, so panels are parts of chunks"
            f" and each sweep decodes {geometry.amplification:.2f} × the matrix"
        )
    elif spec.chunks[geometry.axis] > 1:
        panels += f", whole chunks of {show_count(spec.chunks[geometry.axis])}"
    rivals = {plan.route: plan.nominal_seconds for plan in sorted(found, key=lambda plan: -plan.nominal_seconds)}
    words = {
        "direct": "the matrix fits in memory: it is read once, folded by QR, and LAPACK does the rest",
        "gram": f"the short side is {show_count(geometry.across)}: one sweep builds AᴴA in double, one closes",
        "tsqr": f"the short side is {show_count(geometry.across)}: one sweep folds R by Householder QR, one closes",
        "krylov": "a pilot finds the first directions, each sweep adds a block Krylov step and certifies",
    }[best.route]
    if request.route != "auto":
        words += "; as asked"
    elif len(rivals) > 1:
        words += "; nominal times: " + ", ".join(f"{name} {show_seconds(rivals[name])}" for name in reversed(rivals))
    if best.resident and best.route != "direct":
        words += "; the matrix fits in memory, so only the first sweep reads the file"
    reasons = [("axis", axis), ("panels", panels), ("route", words)]
    if best.route == "krylov":
        reasons.append(("pilot", _pilot_words(best)))
        reasons.append(
            (
                "width",
                f"starts with {best.widths.start} + {best.widths.test} test columns, grows by up to "
                f"{best.widths.grow + 2 * best.widths.test}, restarts at {best.widths.limit}",
            )
        )
    if not best.may_be_single:
        why = (
            f"products of {spec.dtype} in double"
            if best.route == "krylov"
            else "sums over the whole spectrum in double"
        )
        reasons.append(("precision", f"double: {why}"))
    elif request.precision == "auto":
        reasons.append(
            (
                "precision",
                "single if the pilot shows that its rounding stays below a quarter of the tolerance, else double",
            )
        )
    else:
        reasons.append(("precision", f"{request.precision}, as asked"))
    return tuple(reasons)


def _pilot_words(plan: Plan) -> str:
    """What the pilot reads, or why there is none."""
    if plan.mean_only:
        return f"none: fewer than {FEWEST_PILOT_PANELS} panels would make a poor sample; Gaussian start, one more sweep"
    share = len(plan.pilot_panels) / plan.geometry.panels
    return f"{show_count(len(plan.pilot_panels))} panels drawn by seed over the whole file, {100 * share:.1f} % of it"


def _too_small(request: Request, ceiling: int, drafts: Callable[[int], list[Plan]]) -> OptionError:
    """The error that names the least that would do."""
    now = drafts(ceiling)
    if not now:
        return OptionError(
            f"--route {request.route} does not suit this matrix: its short side is longer than"
            f" {show_count(LONGEST_SHORT_SIDE)}, or it does not fit in half the ceiling",
            remedy="Give --route krylov.",
        )
    # Panels follow from the ceiling, so the least is found by planning at others, to a MiB.
    low, high = ceiling >> 20, min(plan.planned_bytes for plan in now) >> 20
    while not _fits(drafts, high):
        low, high = high, high * 2
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if _fits(drafts, middle) else (middle, high)
    least = min(drafts(high << 20), key=lambda plan: plan.planned_bytes)
    evidence = [f"{show_bytes(term.size):>9}  {term.what}" for term in least.memory]
    what = f"rank {request.rank}" if request.variance is None else f"--variance with --max-rank {request.rank}"
    lower = "--rank" if request.variance is None else "--max-rank"
    return MemoryCeilingError(
        f"{what} needs at least {high} MiB, but --memory is {show_bytes(ceiling)}:",
        evidence=evidence,
        remedy=f"Raise --memory to {high}MiB, or lower {lower}.",
    )


def _fits(drafts: Callable[[int], list[Plan]], mebibytes: int) -> bool:
    """Whether any plan fits under so many MiB."""
    ceiling = mebibytes << 20
    return any(plan.planned_bytes <= ceiling for plan in drafts(ceiling))

"""Why a plan is what it is, in words."""

from __future__ import annotations

from bigsvd.plan.plan import FEWEST_PILOT_PANELS, Plan
from bigsvd.plan.request import Request
from bigsvd.plan.sparse import stored_share
from bigsvd.units import show_bytes, show_count, show_seconds, show_shape


def explain(best: Plan, found: list[Plan], request: Request) -> tuple[tuple[str, str], ...]:
    """Why this axis, these panels, this route and width."""
    spec, geometry = best.spec, best.geometry
    other = [plan for plan in found if plan.geometry.axis != geometry.axis]
    along = best.along
    if request.axis != "auto":
        why = "as asked"
    elif not other and spec.storage == "sparse":
        why = "along the other axis nothing fits under the ceiling, or every panel would decode the whole matrix"
    elif not other:
        why = "the other axis does not fit under the ceiling"
    else:
        rival = min(other, key=lambda plan: plan.nominal_seconds)
        seconds = show_seconds(best.nominal_seconds), show_seconds(rival.nominal_seconds)
        why = f"nominally {seconds[0]} against {seconds[1]} along the other axis"
        if spec.unfolding is not None and geometry.amplification < 1.05 < rival.geometry.amplification:
            why += ", which would decode chunks several times"
    swept = f"swept along {along}"
    if spec.unfolding is None:
        swept = f"panels are ranges of {along}"
    else:
        swept += f" {spec.unfolding.tile_words(geometry.axis)}".rstrip()
    axis = f"{swept}; {why}"
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
    if spec.storage == "sparse":
        reasons.append(("products", _product_words(best, found)))
    if best.route == "krylov":
        reasons.append(("pilot", _pilot_words(best)))
        widths = best.widths
        grows = f"grows by up to {widths.grow + 2 * widths.test}, restarts at {widths.limit}"
        starts = f"starts with {widths.start} + {widths.test} test columns"
        reasons.append(("width", f"{starts}, {grows}; {_width_words(best, found)}"))
    if not best.may_be_single:
        why = (
            f"products of {spec.dtype} in double"
            if best.route == "krylov"
            else "sums over the whole spectrum in double"
        )
        reasons.append(("precision", f"double: {why}"))
    elif request.precision == "auto" and best.mean_only:
        reasons.append(("precision", "double: there is no pilot to show that single would do"))
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


def _product_words(best: Plan, found: list[Plan]) -> str:
    """Why zeros are multiplied or not."""
    done = {
        "sparse": "panels are multiplied without their zeros, and means are subtracted from the products",
        "dense": "panels are multiplied with their zeros",
    }[best.products]
    share = f"{100 * stored_share(best.spec):.2g} % of the entries are stored"
    other = [plan.nominal_seconds for plan in found if plan.products != best.products]
    if best.request.products != "auto":
        return f"{done}; {share}; as asked"
    if not other:
        only = (
            "with them nothing fits under the ceiling"
            if best.products == "sparse"
            else "the route needs them, or nothing else fits"
        )
        return f"{done}; {share}; {only}"
    least = min(other)
    return f"{done}: {share}; nominally {show_seconds(best.nominal_seconds)} against {show_seconds(least)}"


def _width_words(best: Plan, found: list[Plan]) -> str:
    """Why blocks are wide or narrow."""
    profile = best.widths.profile
    if best.request.variance is not None:
        return "wide blocks, for the rank is found while they grow"
    other = [plan.nominal_seconds for plan in found if plan.route == best.route and plan.widths.profile != profile]
    why = {
        "wide": "wide blocks, for reading costs more than products",
        "narrow": "narrow blocks, for products cost more than reading",
    }[profile]
    if not other:
        return why
    return f"{why}: nominally {show_seconds(best.nominal_seconds)} against {show_seconds(min(other))}"


def _pilot_words(plan: Plan) -> str:
    """What the pilot reads, or why there is none."""
    if plan.mean_only:
        return f"none: fewer than {FEWEST_PILOT_PANELS} panels would make a poor sample; Gaussian start, one more sweep"
    share = len(plan.pilot_panels) / plan.geometry.panels
    return f"{show_count(len(plan.pilot_panels))} panels drawn by seed over the whole file, {100 * share:.1f} % of it"


def worker_words(workers: int, request: Request, plan: Plan) -> str:
    """Why so many workers."""
    if request.workers is not None and workers == request.workers:
        return f"{workers}, as asked"
    if request.workers is not None:
        return f"{workers}; for the {request.workers} asked there is no room under the ceiling, or no segment"
    return f"{workers}, one BLAS thread each; the number changes the time, not the bits"

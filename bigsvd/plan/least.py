"""The least ceiling that would do, and the error that names it."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from bigsvd.errors import MemoryCeilingError, OptionError
from bigsvd.plan.candidates import LONGEST_SHORT_SIDE, preference, price
from bigsvd.plan.plan import Plan
from bigsvd.plan.rates import Rates
from bigsvd.plan.request import Request
from bigsvd.source import MatrixSpec
from bigsvd.units import show_bytes, show_count

# All plans that could be made under a ceiling of so many bytes.
Drafts = Callable[[int], Iterator[Plan]]
# A plan that decodes more than this many times the matrix in a sweep cuts chunks needlessly.
MOST_AMPLIFICATION = 1.05
# A ceiling that spares cut chunks is named in place of the least if it is at most this many times as large.
WORTH = 2.0
AXES, FORMS = ("rows", "columns"), ("csr", "csc")
# A thousand TiB: no machine has more.
MOST_MEBIBYTES = 2**30


def least_mebibytes(drafts: Drafts, low: int, whole: Rates | None = None) -> int | None:
    """The least ceiling above `low` MiB under which anything fits.

    Parameters
    ----------
    drafts : callable
    low : int
        MiB under which nothing fits.
    whole : Rates or None
        Where the plan that is made at these rates must decode every chunk once.

    Returns
    -------
    int or None
        MiB; None where no ceiling helps. Panels follow from the ceiling, so it is found by planning at others.
    """

    def fits(mebibytes: int) -> bool:
        fitting = _fitting(drafts, mebibytes)
        if whole is None:
            return next(fitting, None) is not None
        cheapest = _cheapest(fitting, whole)
        return cheapest is not None and cheapest.geometry.amplification <= MOST_AMPLIFICATION

    high = max(1, 2 * low)
    while not fits(high):
        low, high = high, high * 2
        if high > MOST_MEBIBYTES:
            return None
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if fits(middle) else (middle, high)
    return high


def too_small(spec: MatrixSpec, request: Request, ceiling: int, drafts: Drafts, rates: Rates) -> OptionError:
    """The error that names the least ceiling that would do.

    A slightly larger one under which no chunk is cut is named in its place; where there is none, how often chunks are
    decoded is said.
    """
    if next(drafts(ceiling), None) is None:
        if request.products == "sparse":
            return OptionError(
                "--products sparse does not suit: zeros can be left out only of a sparse matrix, along the axis by"
                " which it is stored, on the route krylov",
                remedy="Give --products auto.",
            )
        return OptionError(
            f"--route {request.route} does not suit this matrix: its short side is longer than"
            f" {show_count(LONGEST_SHORT_SIDE)}, or it does not fit in half the ceiling",
            remedy="Give --route krylov.",
        )
    least = least_mebibytes(drafts, ceiling >> 20)
    assert least is not None
    named, notes, once = least, [], ""
    plan = _cheapest(_fitting(drafts, least), rates)
    assert plan is not None
    cut = plan.geometry.amplification
    if cut > MOST_AMPLIFICATION:
        times = f"{cut:.1f} times in every sweep"
        whole = least_mebibytes(drafts, least, rates) if request.panel_lines is None else None
        if whole is None or whole > WORTH * least:
            notes.append(f"under so little, panels cut chunks, which are decoded {times}")
        else:
            named, once = whole, " to decode every chunk once"
            notes.append(f"from {least} MiB on it would run, but cut chunks and decode them {times}")
        if whole is not None and whole != named:
            notes.append(f"from {show_bytes(whole << 20)} on they are decoded once")
    plan = _cheapest(_fitting(drafts, named), rates)
    assert plan is not None
    evidence = [f"{show_bytes(term.size):>9}  {term.what}" for term in plan.memory]
    turn = ""
    if spec.compressed_axis is not None and spec.shape[1 - spec.compressed_axis] > spec.shape[spec.compressed_axis]:
        notes.append(_long_lines(spec))
        turn = f", or store it by {AXES[1 - spec.compressed_axis]}: X.to{FORMS[1 - spec.compressed_axis]}() of SciPy"
    what = f"rank {request.rank}" if request.variance is None else f"--variance with --max-rank {request.rank}"
    lower = "--rank" if request.variance is None else "--max-rank"
    return MemoryCeilingError(
        f"{what} needs at least {named} MiB{once}, but --memory is {show_bytes(ceiling)}:",
        evidence=[*evidence, *notes],
        remedy=f"Raise --memory to {named}MiB, or lower {lower}{turn}.",
    )


def _long_lines(spec: MatrixSpec) -> str:
    """Why a sparse matrix that is stored along its short side needs so much."""
    assert spec.compressed_axis is not None
    stored, other = AXES[spec.compressed_axis], AXES[1 - spec.compressed_axis]
    length = show_count(spec.shape[1 - spec.compressed_axis])
    return (
        f"it is stored by {stored}, so panels are ranges of {stored}, and every vector of the basis has an entry for"
        f" each of {length} {other}; ranges of {other} would decode all of it for every panel"
    )


def cut_remark(plan: Plan, drafts: Drafts, rates: Rates) -> tuple[str, ...]:
    """What a plan that cuts chunks costs, and the ceiling that avoids it."""
    words = f"panels cut chunks: every sweep decodes {plan.geometry.amplification:.1f} × the matrix"
    whole = least_mebibytes(drafts, plan.ceiling >> 20, rates)
    return (words if whole is None else f"{words}; --memory {whole}MiB avoids it",)


def _fitting(drafts: Drafts, mebibytes: int) -> Iterator[Plan]:
    """Plans that fit under so many MiB."""
    ceiling = mebibytes << 20
    return (plan for plan in drafts(ceiling) if plan.planned_bytes <= ceiling)


def _cheapest(plans: Iterator[Plan], rates: Rates) -> Plan | None:
    """The plan that would be made."""
    return min((price(plan, rates) for plan in plans), key=preference, default=None)

"""The choice among plans: the cheapest that fits, or the least ceiling that would do."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from dataclasses import replace

from bigsvd.plan.candidates import candidates, preference, price, terms_of, waves_of
from bigsvd.plan.least import MOST_AMPLIFICATION, cut_remark, too_small
from bigsvd.plan.memory import total
from bigsvd.plan.phases import predict
from bigsvd.plan.plan import Plan
from bigsvd.plan.rates import NOMINAL, Rates
from bigsvd.plan.reasons import explain, worker_words
from bigsvd.plan.request import Request, check_request
from bigsvd.source import LineNonzeros, MatrixSpec

WORTH_READING_ONCE = 2.0
ResultBytes = Callable[[int], int]


def _nothing(rank: int) -> int:
    """Bytes of a result that is not written."""
    return 0


def make_plan(
    spec: MatrixSpec,
    request: Request,
    *,
    ceiling: int,
    processors: int | None = None,
    result_bytes: ResultBytes = _nothing,
    rates: Rates = NOMINAL,
    line_nonzeros: LineNonzeros | None = None,
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
    rates : Rates
        What costs are compared with; others than the nominal ones make other plans.
    line_nonzeros : callable, optional
        Of a sparse matrix, how many entries of lines first … stop along its compressed axis are stored. Without it the
        zeros of panels are multiplied too.

    Returns
    -------
    Plan
        The cheapest at nominal rates among all that fit; of an unfolded array one that decodes every chunk once a
        sweep, unless it is twice as dear.

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

    def drafts(bytes_allowed: int) -> Iterator[Plan]:
        for axis in axes:
            for route in routes:
                yield from candidates(spec, request, axis, samples_axis, route, bytes_allowed, written, line_nonzeros)

    found = [price(plan, rates) for plan in drafts(ceiling) if plan.planned_bytes <= ceiling]
    if not found:
        raise too_small(spec, request, ceiling, drafts, rates)
    best = _best(found)
    workers = request.workers or processors or os.cpu_count() or 1
    workers = _fitting_workers(best, min(workers, 2 * best.leaves))
    reasons = (*explain(best, found, request), ("workers", worker_words(workers, request, best)))
    if best.geometry.amplification > MOST_AMPLIFICATION and request.panel_lines is None:
        remarks += cut_remark(best, drafts, rates)
    made = replace(
        best, workers=workers, memory=terms_of(best, workers), reasons=reasons, remarks=remarks,
        waves=waves_of(best, rates),
    )  # fmt: skip
    return replace(made, nominal_phases=predict(made, rates=rates).wall)


def _best(found: Sequence[Plan]) -> Plan:
    """The plan that is made."""
    best = min(found, key=preference)
    if best.spec.unfolding is None or best.geometry.amplification <= MOST_AMPLIFICATION:
        return best
    # Nominal rates are those of files in the page cache, which stacks outgrow: reading 40 times is no bargain then.
    once = (plan for plan in found if plan.geometry.amplification <= MOST_AMPLIFICATION)
    spared = min(once, key=preference, default=best)
    return spared if spared.nominal_seconds <= WORTH_READING_ONCE * best.nominal_seconds else best


def _fitting_workers(plan: Plan, wanted: int) -> int:
    """The most workers, up to those wanted, that fit under the ceiling."""
    for workers in range(wanted, 1, -1):
        if total(terms_of(plan, workers)) <= plan.ceiling:
            return workers
    return 1

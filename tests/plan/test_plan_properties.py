"""What holds of every plan, whatever the matrix, the options and the ceiling."""

from __future__ import annotations

import re
from dataclasses import fields, replace
from itertools import pairwise

import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from plan_samples import MIB, requests, specs

from bigsvd.errors import MemoryCeilingError, OptionError
from bigsvd.plan import Plan, Request, make_plan
from bigsvd.plan.geometry import most_segments
from bigsvd.source import MatrixSpec

CEILINGS = st.sampled_from([200, 256, 300, 512, 1024, 4096, 65536]).map(lambda size: size * MIB)
# What may differ between plans for another number of workers: how many run, what their buffers take and how long their
# phases, and the words.
OF_WORKERS = {"workers", "memory", "reasons", "request", "nominal_phases"}
checks = [HealthCheck.too_slow, HealthCheck.filter_too_much]
many = settings(max_examples=50, deadline=None, suppress_health_check=checks)
few = settings(max_examples=25, deadline=None, suppress_health_check=checks)


def made(matrix: MatrixSpec, request: Request, ceiling: int, processors: int = 2) -> Plan:
    """The plan, or a refusal that the property does not speak of."""
    try:
        return make_plan(matrix, request, ceiling=ceiling, processors=processors)
    except OptionError:
        assume(False)
        raise


def refused(matrix: MatrixSpec, request: Request, mebibytes: int) -> MemoryCeilingError:
    """The refusal of a ceiling that is too small, or a plan or refusal that the property does not speak of."""
    try:
        make_plan(matrix, request, ceiling=mebibytes * MIB, processors=4)
    except MemoryCeilingError as refusal:
        return refusal
    except OptionError:
        pass
    assume(False)
    raise AssertionError


@many
@given(specs(), requests(), CEILINGS)
def test_panels_cover_every_line_once(matrix: MatrixSpec, request: Request, ceiling: int) -> None:
    geometry = made(matrix, request, ceiling).geometry
    assert geometry.edges[0] == 0
    assert geometry.edges[-1] == geometry.lines == matrix.shape[geometry.axis]
    assert all(low < high for low, high in pairwise(geometry.edges))
    assert geometry.across == matrix.shape[1 - geometry.axis]
    heights = {b - a for a, b in pairwise(geometry.edges[:-1])}
    assert len(heights) <= 1, "all panels but the last are equal"
    longest = max(b - a for a, b in pairwise(geometry.edges))
    assert geometry.panel_bytes == longest * geometry.across * matrix.dtype.itemsize


@many
@given(specs(), requests(), CEILINGS)
def test_panels_are_whole_chunks_unless_the_amplification_says_otherwise(
    matrix: MatrixSpec, request: Request, ceiling: int
) -> None:
    geometry = made(matrix, request, ceiling).geometry
    unit = min(matrix.chunks[geometry.axis], geometry.lines)
    decoded = 0
    for start, stop in pairwise(geometry.edges):
        last = min(-(-stop // unit) * unit, geometry.lines)
        decoded += last - start // unit * unit
    assert geometry.amplification == pytest.approx(decoded / geometry.lines, rel=1e-12)
    whole = all(edge % unit == 0 for edge in geometry.edges[:-1])
    assert whole == (geometry.amplification == 1.0)


@many
@given(specs(), requests(), CEILINGS)
def test_waves_cover_all_panels_in_order_within_the_leaves(matrix: MatrixSpec, request: Request, ceiling: int) -> None:
    plan = made(matrix, request, ceiling)
    segments = [segment for wave in plan.waves for segment in wave]
    assert segments[0][0] == 0
    assert segments[-1][1] == plan.geometry.panels
    assert all(first < stop for first, stop in segments)
    assert all(before[1] == after[0] for before, after in pairwise(segments))
    assert all(1 <= len(wave) <= plan.leaves for wave in plan.waves[:-1])
    assert 1 <= len(plan.waves[-1]) <= most_segments(plan.leaves)
    assert all(0 <= panel < plan.geometry.panels for panel in plan.pilot_panels)
    assert len(set(plan.pilot_panels)) == len(plan.pilot_panels)


@many
@given(specs(), requests(), CEILINGS, st.integers(1, 64))
def test_planned_memory_is_within_the_ceiling(
    matrix: MatrixSpec, request: Request, ceiling: int, processors: int
) -> None:
    plan = made(matrix, request, ceiling, processors)
    assert plan.planned_bytes == sum(term.size for term in plan.memory) <= ceiling
    assert all(term.size >= 0 and term.what for term in plan.memory)
    assert 1 <= plan.workers <= processors


@many
@given(specs(), requests(), CEILINGS, st.integers(1, 64), st.integers(1, 64))
def test_processors_and_workers_change_nothing_that_touches_the_numbers(
    matrix: MatrixSpec, request: Request, ceiling: int, processors: int, workers: int
) -> None:
    plans = [
        made(matrix, request, ceiling, 2),
        made(matrix, request, ceiling, processors),
        made(matrix, replace(request, workers=workers), ceiling, processors),
    ]
    for field in fields(Plan):
        if field.name not in OF_WORKERS:
            first, *others = (getattr(plan, field.name) for plan in plans)
            assert all(other == first for other in others), field.name
    assert plans[2].workers <= workers


@few
@given(specs(), requests(), st.sampled_from([1, 100, 200, 300, 600]))
def test_the_ceiling_that_a_refusal_names_is_enough(matrix: MatrixSpec, request: Request, mebibytes: int) -> None:
    refusal = refused(matrix, request, mebibytes)
    named = re.search(r"Raise --memory to (\d+)MiB", refusal.remedy)
    assert named, refusal.remedy
    assert int(named[1]) > mebibytes
    assert f"needs at least {named[1]} MiB" in refusal.problem
    plan = make_plan(matrix, request, ceiling=int(named[1]) * MIB, processors=4)
    assert plan.planned_bytes <= int(named[1]) * MIB
    assert (plan.geometry.amplification > 1.05) == any("under so little" in line for line in refusal.evidence)
    assert plan.geometry.amplification <= 1.05 or "every chunk once" not in refusal.problem


@many
@given(specs(), requests(), CEILINGS)
def test_widths_fit_the_matrix_and_hold_the_components(matrix: MatrixSpec, request: Request, ceiling: int) -> None:
    plan = made(matrix, request, ceiling)
    widths, across = plan.widths, plan.geometry.across
    assert plan.rank <= min(matrix.shape)
    assert max(widths.start, widths.test, widths.grow, widths.keep, widths.limit) <= across
    assert plan.rank <= widths.limit
    assert widths.block <= widths.limit
    # A restart leaves room for a whole block beside what it keeps.
    assert widths.limit == across or plan.route != "krylov" or widths.keep + widths.grow <= widths.limit


@many
@given(specs(), requests(), CEILINGS)
def test_every_plan_says_why(matrix: MatrixSpec, request: Request, ceiling: int) -> None:
    plan = made(matrix, request, ceiling)
    topics = [topic for topic, _ in plan.reasons]
    assert {"axis", "panels", "route", "precision", "workers"} <= set(topics)
    assert ("pilot" in topics) == (plan.route == "krylov")
    assert all(words.strip() for _, words in plan.reasons)
    assert plan.nominal_seconds > 0
    assert plan.nominal_sweeps >= 1


@many
@given(specs(), requests(), CEILINGS)
def test_the_same_question_has_the_same_answer(matrix: MatrixSpec, request: Request, ceiling: int) -> None:
    assert made(matrix, request, ceiling) == made(matrix, request, ceiling)

"""What a decomposition would do and cost: the plan in words, in short before a run, and as one JSON object."""

from __future__ import annotations

from dataclasses import replace
from typing import Protocol

from bigsvd.plan import Costs, Plan
from bigsvd.report.layout import labelled, table
from bigsvd.report.plain import Json, plain
from bigsvd.source import MatrixSpec
from bigsvd.units import show_bytes, show_seconds, show_shape

AXES = ("rows", "columns")
PROBE_FROM = "64 MB"


class Foresight(Protocol):
    """What the forecast of a run offers."""

    @property
    def plan(self) -> Plan:
        """The plan of the run."""
        ...

    @property
    def seconds(self) -> float | None:
        """Time predicted from a probe; None where there was none."""
        ...

    def costs(self, sweeps: float | None = None) -> Costs:
        """Cost by phase of a run that takes so many sweeps; by default those that the plan expects."""
        ...

    @property
    def probe_bytes(self) -> int:
        """Decoded bytes that the probe read."""
        ...

    @property
    def bytes_to_read(self) -> int:
        """Decoded bytes that the run is expected to read."""
        ...


def plan_lines(forecast: Foresight, width: int) -> list[str]:
    """Lay out a plan.

    Parameters
    ----------
    forecast : Foresight
        The plan and its price.
    width : int
        Cells of a line.

    Returns
    -------
    list of str
        Matrix, orientation, each choice with its reason, memory term by term, bytes and time.
    """
    plan = forecast.plan
    spec = plan.spec
    stored = f", {show_bytes(spec.stored_bytes)} stored" if spec.stored_bytes is not None else ""
    head = [
        ("matrix", f"{spec.name}: {show_shape(spec.shape)} {spec.dtype}"),
        ("", f"{_size_words(plan)}{stored}{f'; {spec.encoding}' if spec.encoding else ''}"),
        ("", plan.orientation_words()),
        *reading_words(spec),
        *(("", words) for words in plan.reading_words()),
        *(("caution", caution) for caution in spec.cautions),
    ]
    goal = f"rank {plan.rank}" if plan.request.variance is None else f"{plan.request.variance:g} of the variance"
    most = f", at most {plan.rank} components" if plan.request.variance is not None else ""
    strict = ", the bulk counted as unmet" if plan.request.strict else ""
    asked = f"{goal}{most}; intervals within {plan.request.tolerance:g} of the value{strict}; seed {plan.request.seed}"
    return [
        *labelled([*head, ("asked", asked), *(("remark", remark) for remark in plan.remarks)], width),
        "",
        *labelled(
            [(name, words if name != "route" else f"{plan.route}: {words}") for name, words in plan.reasons], width
        ),
        "",
        "Memory at the peak:",
        *_memory_lines(plan),
        "",
        *labelled(_cost_words(forecast), width),
    ]


def announcement(forecast: Foresight, width: int) -> list[str]:
    """Say a plan in short, before a run."""
    plan = forecast.plan
    panels = f"{plan.geometry.panels:,} {'panel' if plan.geometry.panels == 1 else 'panels'} of {plan.along}"
    memory = f"{show_bytes(plan.planned_bytes)} planned, ceiling {show_bytes(plan.ceiling)}"
    spec = plan.spec
    matrix = f"{spec.name}: {show_shape(spec.shape)} {spec.dtype}, {_size_words(plan)}"
    pairs = [
        ("matrix", matrix),
        ("", plan.orientation_words()),
        *reading_words(spec),
        *(("", words) for words in plan.reading_words()),
        ("route", f"{plan.route}, {panels}, {plan.workers} {'worker' if plan.workers == 1 else 'workers'}"),
        ("memory", memory),
        ("time", _time_words(forecast)),
        *(("remark", remark) for remark in plan.remarks),
        *(("caution", caution) for caution in spec.cautions),
    ]
    return labelled(pairs, width)


def _source_facts(spec: MatrixSpec) -> Json:
    """The matrix; of an unfolded array its axes in words, not every edge of its tiles."""
    facts: Json = plain(replace(spec, edges=(None, None), unfolding=None))
    del facts["edges"]
    return facts | {"unfolding": None if spec.unfolding is None else plain(spec.unfolding.facts())}


def plan_facts(forecast: Foresight) -> Json:
    """All of a plan as one JSON object; its keys are documented in docs/json.md."""
    plan = forecast.plan
    geometry = plan.geometry
    facts = {
        "source": _source_facts(plan.spec),
        "request": plan.request,
        "orientation": plan.orientation_words(),
        "understood": plan.reading_words(),
        "samples": plan.samples,
        "features": plan.features,
        "rank": plan.rank,
        "route": plan.route,
        "axis": AXES[geometry.axis],
        "products": plan.products,
        "panels": geometry.panels,
        "panel_lines": geometry.edges[1] - geometry.edges[0],
        "panel_bytes": geometry.panel_bytes,
        "panel_nonzeros": geometry.nonzeros,
        "amplification": geometry.amplification,
        "width": plan.widths,
        "pilot_panels": plan.pilot_panels,
        "leaves": plan.leaves,
        "waves": len(plan.waves),
        "segments": sum(len(wave) for wave in plan.waves),
        "resident": plan.resident,
        "may_be_single": plan.may_be_single,
        "workers": plan.workers,
        "memory": plan.memory,
        "planned_bytes": plan.planned_bytes,
        "memory_bytes": plan.ceiling,
        "matrix_bytes": plan.spec.decoded_bytes,
        "bytes_to_read": forecast.bytes_to_read,
        "probe_bytes": forecast.probe_bytes,
        "sweeps": plan.nominal_sweeps,
        "nominal_seconds": sum(plan.nominal_phases.values()),
        "nominal_phases": plan.nominal_phases,
        "predicted_seconds": forecast.seconds,
        "predicted_by_sweeps": [
            {"sweeps": sweeps, "seconds": forecast.costs(sweeps).seconds}
            for sweeps in range(_least_sweeps(plan), plan.request.max_sweeps + 1)
        ],
        "reasons": [{"choice": name, "reason": words} for name, words in plan.reasons],
        "remarks": plan.remarks,
    }
    result: Json = plain(facts)
    return result


def _size_words(plan: Plan) -> str:
    """Size of a matrix, and of what: a sparse one is made dense panel by panel, never as a whole."""
    return f"{show_bytes(plan.spec.decoded_bytes)} {'decoded' if plan.spec.nonzeros is None else 'if made dense'}"


def reading_words(spec: MatrixSpec) -> list[tuple[str, str]]:
    """What is made of entries as they are read, each with its label."""
    pairs = [("decoded", spec.decoded)] if spec.decoded else []
    return pairs + ([("missing", spec.missing.words)] if spec.missing is not None else [])


def _memory_lines(plan: Plan) -> list[str]:
    """Terms of the memory plan with their sum against the ceiling."""
    rows = [[show_bytes(term.size), term.what] for term in plan.memory if term.size]
    rows.append([show_bytes(plan.planned_bytes), f"in all; the ceiling is {show_bytes(plan.ceiling)}"])
    lines = ["  " + line for line in table(["", ""], rows, "rl")]
    return [*lines[:-1], "  " + "–" * max(len(row[0]) for row in rows), lines[-1]]


def _cost_words(forecast: Foresight) -> list[tuple[str, str]]:
    """Bytes and time that the run is expected to take."""
    plan = forecast.plan
    matrix = plan.spec.decoded_bytes
    times = f" ({forecast.bytes_to_read / matrix:.2f} × the matrix)" if matrix else ""
    missing = plan.spec.missing
    counted = " and one that counts missing entries" if missing is not None and missing.bytes else ""
    sweeps = f"{plan.nominal_sweeps} {'sweep' if plan.nominal_sweeps == 1 else 'sweeps'}"
    probe = (
        f"{show_bytes(forecast.probe_bytes)} were read for this plan"
        if forecast.probe_bytes
        else f"nothing was read for this plan: a probe is made from {PROBE_FROM} on"
    )
    return [
        ("reads", f"{show_bytes(forecast.bytes_to_read)}{times}, expected in {sweeps}{counted}; the spectrum decides"),
        ("time", _time_words(forecast)),
        ("probe", probe),
    ]


def _time_words(forecast: Foresight) -> str:
    """Predicted time, for the expected sweeps and for the fewest, and what the prediction rests on."""
    plan, least = forecast.plan, _least_sweeps(forecast.plan)
    words = f"about {show_seconds(forecast.costs().seconds)} in {plan.nominal_sweeps} sweeps"
    if least < plan.nominal_sweeps:
        words += f", {show_seconds(forecast.costs(least).seconds)} if {'one is' if least == 1 else 'two are'} enough"
    if forecast.seconds is None:
        return f"{words}, at nominal rates"
    return f"{words}, from a probe of {show_bytes(forecast.probe_bytes)} on this machine"


def _least_sweeps(plan: Plan) -> int:
    """Fewest sweeps that a run can take."""
    return 1 if plan.route == "krylov" else 2

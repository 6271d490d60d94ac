"""What plan says: every choice, the memory term by term, bytes and time."""

from __future__ import annotations

import json
from dataclasses import dataclass

import numpy as np
import pytest

from bigsvd.plan import Costs, Plan, Request, make_plan
from bigsvd.report import announcement, plan_facts, plan_lines
from bigsvd.source import MatrixSpec

SPEC = MatrixSpec(
    "pool.h5:/frames", (100_000, 20_000), np.dtype("f4"), (500, 2000), "compressed",
    "chunks 500 × 2,000, gzip 1", 3 << 30,
    cautions=("attribute scale_factor is not applied",),
)  # fmt: skip


@dataclass(frozen=True)
class Forecast:
    plan: Plan
    seconds: float | None
    probe_bytes: int
    bytes_to_read: int

    def costs(self, sweeps: float | None = None) -> Costs:
        """40 seconds, and 30 for every sweep."""
        sweeps = self.plan.nominal_sweeps if sweeps is None else sweeps
        return Costs({"read": 60.0 * sweeps}, {"start": 40.0}, 2)


def forecast(seconds: float | None = 130.0, **options: object) -> Forecast:
    request = Request(**({"rank": 20} | options))  # type: ignore[arg-type]
    plan = make_plan(SPEC, request, ceiling=1 << 30, processors=2)
    return Forecast(plan, seconds, 0 if seconds is None else 64 << 20, 3 * SPEC.decoded_bytes)


def test_plan_says_matrix_orientation_choices_bytes_and_time() -> None:
    said = " ".join(" ".join(plan_lines(forecast(), 100)).split())
    for fact in (
        "pool.h5:/frames: 100,000 × 20,000 float32",
        "7.45 GiB decoded, 3 GiB stored; chunks 500 × 2,000, gzip 1",
        "samples: rows (100,000); features: columns (20,000); centred per column",
        "attribute scale_factor is not applied",
        "rank 20; intervals within 0.001 of the value; seed 0",
        "in all; the ceiling is 1 GiB",
        "22.4 GiB (3.00 × the matrix)",
        "about 2 min 10 s in 3 sweeps, 1 min 10 s if one is enough, from a probe of 64 MiB",
        "64 MiB were read for this plan",
    ):
        assert fact in said, fact


def test_every_choice_of_the_plan_is_said_with_its_reason() -> None:
    foreseen = forecast()
    said = " ".join(" ".join(plan_lines(foreseen, 100)).split())
    for _, words in foreseen.plan.reasons:
        assert " ".join(words.split()) in said


def test_every_term_of_memory_is_said_and_nothing_that_takes_none() -> None:
    foreseen = forecast()
    lines = plan_lines(foreseen, 100)
    for term in foreseen.plan.memory:
        assert any(line.endswith(term.what) for line in lines) is bool(term.size)


def test_without_a_probe_the_time_is_nominal_and_says_so() -> None:
    said = " ".join(plan_lines(forecast(None), 100))
    assert "at nominal rates" in said
    assert "a probe is made from 64 MB on" in said


def test_variance_is_said_with_the_most_components_it_may_take() -> None:
    said = " ".join(" ".join(plan_lines(forecast(rank=None, variance=0.9, max_rank=30, strict=True), 100)).split())
    assert "0.9 of the variance, at most 30 components" in said
    assert "the bulk counted as unmet" in said


def test_the_announcement_is_short() -> None:
    lines = announcement(forecast(), 100)
    assert len(lines) <= 8
    assert any("planned, ceiling 1 GiB" in line for line in lines)
    assert any("samples: rows (100,000)" in line for line in lines)


@pytest.mark.parametrize("width", [80, 120])
def test_lines_fit_the_terminal(width: int) -> None:
    lines = [line for line in plan_lines(forecast(), width) if not line.endswith(("QR", "decoding"))]
    assert max(map(len, [*lines, *announcement(forecast(), width)])) <= width


def test_json_holds_the_whole_plan() -> None:
    foreseen = forecast()
    facts = json.loads(json.dumps(plan_facts(foreseen), allow_nan=False))
    assert facts["planned_bytes"] == sum(term["size"] for term in facts["memory"]) == foreseen.plan.planned_bytes
    assert facts["source"]["dtype"] == "float32"
    assert facts["request"]["rank"] == 20
    assert facts["segments"] == sum(map(len, foreseen.plan.waves))
    assert len(facts["reasons"]) == len(foreseen.plan.reasons)

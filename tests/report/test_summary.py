"""What is said of a finished run, and the same as JSON."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from certificates import attributes, certificate, states

from bigsvd.certify import SliceCheck
from bigsvd.report import decomposition_facts, summary_lines, xarray_line

OUT = Path("pool.zarr")


def text(**changes: object) -> str:
    """The summary with its line breaks taken out."""
    record = changes.pop("record", attributes())
    return " ".join(" ".join(summary_lines(certificate(3, **changes), record, OUT, 100)).split())


def test_the_summary_says_what_was_found_and_what_it_cost() -> None:
    said = text()
    for fact in (
        "pool.h5:/frames: 20,000 × 26,844 float32",
        "samples: rows (20,000); features: columns (26,844); centred per column",
        "3 of 3 components resolved to 0.001; order proved for all. Tolerance 0.001 met.",
        "90.00 % of the total variance",
        "has a value above 1.24; wrong with a probability of at most 1e-10",
        "at most 1.2e-09, proved",
        "1e-15 (left) and 2e-15 (right)",
        "1 of the file, up to 100 × 40",
        "every bound held",
        "krylov along rows, double precision",
        "9 GiB (4.50 × the matrix) in 4 sweeps",
        "1 min 15 s (predicted 1 min 10 s) with 2 workers",
        "600 MiB at its peak; 700 MiB planned; 1 GiB ceiling",
        'xarray.open_zarr("pool.zarr")',
    ):
        assert fact in said, fact


def test_a_tolerance_that_was_not_met_is_said() -> None:
    said = text(
        tolerance_met=False,
        state=states("resolved", "open", "open"),
        verdict="1 of 3 components resolved to 0.001; 2 open",
    )
    assert "2 open. Tolerance 0.001 not met." in said


def test_a_broken_bound_on_a_slice_is_said_loudly_and_placed() -> None:
    good, bad = SliceCheck((0, 5), (0, 9), 2, 1e-15, 0.0, True), SliceCheck((10, 15), (0, 9), 2, 0.5, 0.1, False)
    said = text(slices=(good, bad))
    assert "BOUNDS BROKEN in 1 of them, first at rows 10–14, columns 0–8" in said
    assert "every bound held" not in said


def test_no_slices_and_no_bound_are_said() -> None:
    said = text(slices=(), missed_bound=float("inf"))
    assert "a single chunk is more than 1 % of the matrix" in said
    assert "no bound on what lies outside" in said


def test_a_certain_bound_names_no_probability() -> None:
    said = text(failure_probability=0.0, missed_how="energy that the factors leave")
    assert "; certain (energy that the factors leave)" in said


def test_without_a_prediction_none_is_made_up() -> None:
    assert "predicted" not in text(record=attributes(predicted_seconds=None))


def test_a_prediction_for_other_sweeps_says_for_how_many() -> None:
    assert "(predicted 1 min 10 s for 3 sweeps)" in text(record=attributes(predicted_sweeps=3))
    assert "(predicted 1 min 10 s)" in text(record=attributes(predicted_sweeps=4))


def phase(predicted: float, measured: float, worker_seconds: float | None = None) -> dict[str, float | None]:
    return {"predicted": predicted, "measured": measured, "worker_seconds": worker_seconds}


def test_phases_are_told_beside_what_was_predicted_and_add_up() -> None:
    phases = {"read": phase(10.0, 12.0, 24.0), "products": phase(20.0, 19.0, 38.0), "slices": phase(0.01, 0.02)}
    lines = summary_lines(certificate(3), attributes(phases=phases), OUT, 100)
    at = lines.index("Seconds by phase, predicted for 4 sweeps like these; work of 2 workers counted once:")
    told = [line.split() for line in lines[at + 1 : at + 5]]
    assert told == [
        ["predicted", "taken"],
        ["read", "and", "decode", "10.00", "12.00"],
        ["products", "20.00", "19.00"],
        ["in", "all", "30.01", "31.02"],
    ]
    assert decomposition_facts(certificate(3), attributes(phases=phases), OUT)["phases"] == phases


def test_a_record_without_phases_has_no_table_of_them() -> None:
    assert "Seconds by phase" not in text()


@pytest.mark.parametrize(("times", "words"), [(1, "once"), (3, "3 times")])
def test_a_run_that_was_cut_says_what_came_before(times: int, words: str) -> None:
    cut = {"resumed": times, "earlier_seconds": 125.0, "phases": {"read": phase(1.0, 2.0)}}
    found = text(record=attributes() | cut)
    assert f"after 2 min 5 s of processes that were cut ({words})" in found
    assert "taken by the last process:" in found
    assert "cut" not in text(record=attributes() | {"resumed": 0, "earlier_seconds": 0.0})


def test_an_uncentred_matrix_has_energy_not_variance() -> None:
    record = attributes(preparation={"words": "not centred", "center": "none", "constant_features": 2})
    said = text(record=record)
    assert "of the total energy ‖A‖²" in said
    assert "2 constant features, kept as zeros" in said


def test_the_xarray_line_can_be_typed_for_any_name() -> None:
    assert xarray_line(Path('a "b".zarr')) == 'xarray.open_zarr("a \\"b\\".zarr")'


ASKED = [
    "route",
    "axis",
    "sweeps",
    "bytes_read",
    "matrix_bytes",
    "seconds",
    "predicted_seconds",
    "peak_resident_bytes",
    "memory_bytes",
    "planned_bytes",
    "workers",
    "precision",
    "rank",
    "tolerance",
    "tolerance_met",
    "verdict",
    "singular_values",
    "lower",
    "upper",
    "index_proved",
    "state",
    "missed_bound",
    "failure_probability",
    "captured_share",
    "slices",
    "out",
]


def test_json_holds_what_scripts_ask_for() -> None:
    facts = decomposition_facts(certificate(3, state=states("resolved", "open", "bulk")), attributes(), OUT)
    again = json.loads(json.dumps(facts, allow_nan=False))
    assert not set(ASKED) - set(again)
    assert again["state"] == ["resolved", "open", "bulk"]
    assert again["singular_values"] == [100.0, 50.0, 100 / 3]
    assert again["index_proved"] == [True, True, True]
    assert again["slices"][0]["rows"] == [0, 100]


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_json_never_holds_nan_or_infinity(bad: float) -> None:
    broken = certificate(
        2,
        angle_bound=np.array([bad, 0.1]),
        missed_bound=bad,
        left_defect=bad,
        slices=(SliceCheck((0, 1), (0, 1), 1, bad, bad, True),),
    )
    facts = json.loads(json.dumps(decomposition_facts(broken, attributes(seconds=bad), None), allow_nan=False))
    assert facts["angle_bound"] == [None, 0.1]
    assert facts["missed_bound"] is None
    assert facts["seconds"] is None
    assert facts["out"] is None


@pytest.mark.parametrize("width", [80, 120])
def test_lines_fit_the_terminal(width: int) -> None:
    assert max(map(len, summary_lines(certificate(200), attributes(remarks=["word " * 60]), OUT, width))) <= width


def test_output_has_no_escape_codes() -> None:
    assert "\x1b" not in text()

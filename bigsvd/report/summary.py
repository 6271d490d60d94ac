"""What a decomposition found and what it cost, in words after the table and as one JSON object."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from bigsvd.certify import Certificate, SliceCheck
from bigsvd.report.components import component_lines, shares
from bigsvd.report.layout import labelled, table, wrap
from bigsvd.report.numbers import show_angle, show_captured, show_probability, show_up
from bigsvd.report.plain import Json, plain
from bigsvd.source import Missing
from bigsvd.units import show_bytes, show_count, show_seconds, show_shape

# Phases as people read them; others go by their own names.
PHASES = {
    "read": "read and decode",
    "convert": "convert, energy and means",
    "fold": "QR",
    "start": "start and probe",
    "waiting": "workers waiting",
    "dense": "dense steps",
    "store": "left vectors and store",
}
LEAST_SHOWN = 0.01
# Components whose strongest features are named, and letters of a name.
MOST_NAMED, LONGEST_NAME = 10, 40
Strongest = Sequence[Sequence[tuple[str, float]]]


def summary_lines(
    certificate: Certificate,
    attributes: Mapping[str, Any],
    out: Path | None,
    width: int,
    strongest: Strongest | None = None,
) -> list[str]:
    """Say everything about a finished decomposition.

    Parameters
    ----------
    certificate : Certificate
        What is known of the components.
    attributes : mapping
        What the run recorded, as `Factors.attributes` holds it.
    out : Path or None
        The result store.
    width : int
        Cells of a line.
    strongest : list of list of (str, float), optional
        As `Factors.strongest_features` gives them.

    Returns
    -------
    list of str
    """
    source = attributes["source"]
    head = [
        ("matrix", f"{source['name']}: {show_shape(tuple(source['shape']))} {source['dtype']}"),
        ("", attributes["preparation"]["words"]),
        *(("", words) for words in attributes["preparation"].get("understood", ())),
    ]
    absent = source.get("absent")
    if absent:
        filled = f"{show_count(absent['chunks'])} of {show_count(absent['of'])} chunks were never written"
        head.append(("", f"{filled} and were read as {absent['read_as']}"))
    if source.get("decoded"):
        head.append(("decoded", source["decoded"]))
    if source.get("missing"):
        head.append(("missing", Missing(**source["missing"]).words))
    constant = attributes["preparation"].get("constant_features") or 0
    if constant:
        head.append(
            ("", f"{show_count(constant)} constant {'feature' if constant == 1 else 'features'}, kept as zeros")
        )
    return [
        *labelled(head, width),
        "",
        *component_lines(certificate, width),
        *strongest_lines(certificate, strongest, width),
        "",
        *wrap(verdict_words(certificate), width),
        "",
        *labelled([*accuracy_words(certificate, attributes), *cost_words(attributes)], width),
        *phase_lines(attributes),
        *([] if out is None else ["", f"Open it:  {xarray_line(out)}"]),
    ]


def strongest_lines(certificate: Certificate, strongest: Strongest | None, width: int) -> list[str]:
    """Name the features that weigh most, of components whose vectors may be read singly."""
    if strongest is None:
        return []
    single = np.isfinite(certificate.angle_bound) & (certificate.tied_first == certificate.tied_last)
    shown = [int(i) for i in np.flatnonzero(single & ~certificate.null)[:MOST_NAMED]]
    if not shown:
        return []
    words = [
        (str(i + 1), ", ".join(f"{_short(name)} {f'{value:.2f}'.replace('-', '−')}" for name, value in strongest[i]))
        for i in shown
    ]
    head = "Strongest features, with their entries in the right vectors:"
    return ["", head, *labelled([(number.rjust(3), text) for number, text in words], width)]


def _short(name: str) -> str:
    """A name cut to what a line can hold."""
    return name if len(name) <= LONGEST_NAME else f"{name[:LONGEST_NAME]}…"


def verdict_words(certificate: Certificate) -> str:
    """The verdict as sentences."""
    words = certificate.verdict.rstrip(".")
    met = "met" if certificate.tolerance_met else "not met"
    return f"{words[:1].upper()}{words[1:]}. Tolerance {certificate.tolerance:g} {met}."


def accuracy_words(certificate: Certificate, attributes: Mapping[str, Any]) -> list[tuple[str, str]]:
    """What was captured, what may have been missed, rounding, orthonormality and slices, each with its label."""
    centred = attributes["preparation"].get("center") == "features"
    of_what = "the total variance" if centred else "the total energy ‖A‖²"
    bound, rounding = certificate.missed_bound, certificate.rounding
    pairs = [("captured", f"{show_captured(certificate.captured_share)} of {of_what}")]
    if np.isfinite(bound):
        sure = show_probability(certificate.failure_probability)
        text = f"no direction outside the computed space has a value above {show_up(bound, 3)}"
        pairs.append(("missed", f"{text}; {sure} ({certificate.missed_how})"))
    else:
        pairs.append(("missed", "no bound on what lies outside the computed space"))
    pairs.append(("rounding", f"at most {show_up(rounding)}, {certificate.rounding_how}; the intervals include it"))
    defects = [certificate.left_defect, certificate.right_defect]
    if np.all(np.isfinite(defects)):
        left, right = (show_up(defect) for defect in defects)
        pairs.append(("vectors", f"orthonormal as stored to {left} (left) and {right} (right)"))
    pairs.append(("slices", slice_words(certificate.slices)))
    return pairs


def slice_words(slices: tuple[SliceCheck, ...]) -> str:
    """How the exact check on slices of the file went."""
    if not slices:
        return "none: a single chunk is more than 1 % of the matrix"
    values = max(check.value_difference for check in slices)
    angles = [check.angle for check in slices if np.isfinite(check.angle)]
    turned = f", vectors by at most {show_angle(max(angles))}" if angles else ""
    broken = [check for check in slices if not check.within_bounds]
    largest = max(((rows[1] - rows[0], columns[1] - columns[0]) for rows, columns in _places(slices)), key=np.prod)
    text = (
        f"{len(slices)} of the file, up to {show_shape(largest)}, decomposed the same way and exactly by LAPACK: "
        f"values of resolved components differ by at most {show_up(values)} of the largest{turned}; "
    )
    if not broken:
        return f"{text}every bound held"
    first = broken[0]
    where = f"rows {first.rows[0]:,}–{first.rows[1] - 1:,}, columns {first.columns[0]:,}–{first.columns[1] - 1:,}"
    return f"{text}BOUNDS BROKEN in {len(broken)} of them, first at {where}: do not rely on this result"


def _places(slices: tuple[SliceCheck, ...]) -> list[tuple[tuple[int, int], tuple[int, int]]]:
    """Rows and columns of the slices."""
    return [(check.rows, check.columns) for check in slices]


def cost_words(attributes: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Sweeps, bytes, time and memory of a run, each with its label."""
    matrix, read = attributes["matrix_bytes"], attributes["bytes_read"]
    sweeps, workers = attributes["sweeps"], attributes["workers"]
    times = f" ({read / matrix:.2f} × the matrix)" if matrix else ""
    predicted = attributes.get("predicted_seconds")
    assumed = attributes.get("predicted_sweeps")
    for_sweeps = "" if assumed in (None, sweeps) else f" for {assumed} sweeps"
    later = _later_words(attributes)
    guess = f" (predicted {show_seconds(predicted)}{for_sweeps}{later})" if predicted is not None else ""
    plan = attributes["plan"]
    sweep_words = f"{sweeps} {'sweep' if sweeps == 1 else 'sweeps'}"
    if plan.get("resident") and sweeps > 1:
        sweep_words += ", of which the first read the file and the others what it held"
    pairs = [
        ("route", f"{plan['route']} along {plan['axis']}, {attributes['precision']} precision"),
        ("read", f"{show_bytes(read)}{times} in {sweep_words}, all checks included"),
        (
            "time",
            f"{show_seconds(attributes['seconds'])}{guess} with {workers} {'worker' if workers == 1 else 'workers'}"
            f"{_earlier_words(attributes)}",
        ),
    ]
    sizes = [("planned", attributes.get("planned_bytes")), ("ceiling", attributes.get("memory_bytes"))]
    parts = [f"{show_bytes(size)} {what}" for what, size in sizes if size]
    pairs.append(("memory", "; ".join([f"{show_bytes(attributes['peak_resident_bytes'])} at its peak", *parts])))
    pairs += [("remarks", remark) for remark in attributes.get("remarks", ())]
    return pairs


def _later_words(attributes: Mapping[str, Any]) -> str:
    """What the pilot made of the prediction."""
    seconds, sweeps = attributes.get("pilot_predicted_seconds"), attributes.get("pilot_predicted_sweeps")
    if seconds is None or sweeps == attributes.get("predicted_sweeps"):
        return ""
    return f", after the pilot {show_seconds(seconds)} for {sweeps}"


def _earlier_words(attributes: Mapping[str, Any]) -> str:
    """What earlier processes spent on a run that was cut."""
    times = attributes.get("resumed") or 0
    if not times:
        return ""
    spent = show_seconds(attributes.get("earlier_seconds") or 0.0)
    return f", after {spent} of processes that were cut ({'once' if times == 1 else f'{times} times'})"


def phase_lines(attributes: Mapping[str, Any]) -> list[str]:
    """Time by phase, predicted and taken; phases below a hundredth of the whole are left to the last line."""
    phases: Mapping[str, Mapping[str, Any]] = attributes.get("phases") or {}
    if not phases:
        return []
    sums = {which: sum(float(one[which]) for one in phases.values()) for which in ("predicted", "measured")}
    rows = [
        [PHASES.get(name, name), f"{one['predicted']:.2f}", f"{one['measured']:.2f}"]
        for name, one in phases.items()
        if any(float(one[which]) >= LEAST_SHOWN * sums[which] for which in sums)
    ]
    rows.append(["in all", f"{sums['predicted']:.2f}", f"{sums['measured']:.2f}"])
    workers, sweeps = attributes["workers"], attributes["sweeps"]
    shared = "" if workers == 1 else f"; work of {workers} workers counted once"
    last = "; taken by the last process" if attributes.get("resumed") else ""
    made = "one sweep" if sweeps == 1 else f"{sweeps} sweeps"
    head = f"Seconds by phase, predicted for {made} like these{shared}{last}:"
    return ["", head, *("  " + line for line in table(["", "predicted", "taken"], rows, "lrr"))]


def xarray_line(out: Path) -> str:
    """The line that opens a result in xarray.

    >>> xarray_line(Path("night.zarr"))
    'xarray.open_zarr("night.zarr")'
    """
    return f"xarray.open_zarr({json.dumps(str(out), ensure_ascii=False)})"


def decomposition_facts(
    certificate: Certificate, attributes: Mapping[str, Any], out: Path | None, strongest: Strongest | None = None
) -> Json:
    """All of it as one JSON object; its keys are documented in docs/json.md."""
    share, cumulative = shares(certificate)
    plan = attributes["plan"]
    names = (
        "sweeps",
        "bytes_read",
        "matrix_bytes",
        "seconds",
        "predicted_seconds",
        "predicted_sweeps",
        "pilot_predicted_seconds",
        "pilot_predicted_sweeps",
        "resumed",
        "earlier_seconds",
        "peak_resident_bytes",
        "memory_bytes",
    )
    facts = {
        "out": None if out is None else str(out),
        "source": attributes["source"],
        "preparation": attributes["preparation"],
        "route": plan["route"],
        "axis": plan["axis"],
        "plan": plan,
        **{name: attributes.get(name) for name in names},
        "planned_bytes": attributes.get("planned_bytes"),
        "workers": attributes["workers"],
        "precision": attributes["precision"],
        "rank": certificate.rank,
        "seed": attributes.get("seed"),
        "tolerance": certificate.tolerance,
        "strict": certificate.strict,
        "tolerance_met": certificate.tolerance_met,
        "verdict": certificate.verdict,
        "singular_values": certificate.value,
        "lower": certificate.lower,
        "upper": certificate.upper,
        "share": share,
        "cumulative_share": cumulative,
        "residual": certificate.residual,
        "state": certificate.state_words,
        "index_proved": certificate.index_proved,
        "angle_bound": certificate.angle_bound,
        "tied_first": certificate.tied_first,
        "tied_last": certificate.tied_last,
        "null": certificate.null,
        "below_noise": certificate.below_noise,
        "missed_bound": certificate.missed_bound,
        "missed_how": certificate.missed_how,
        "failure_probability": certificate.failure_probability,
        "rounding": certificate.rounding,
        "rounding_how": certificate.rounding_how,
        "captured_share": certificate.captured_share,
        "total_energy": certificate.total_energy,
        "left_defect": certificate.left_defect,
        "right_defect": certificate.right_defect,
        "slices": certificate.slices,
        "strongest_features": None
        if strongest is None
        else [[{"name": name, "value": value} for name, value in one] for one in strongest],
        "remarks": attributes.get("remarks", []),
        "timings": attributes.get("timings", {}),
        "phases": attributes.get("phases", {}),
        "versions": attributes.get("versions", {}),
    }
    result: Json = plain(facts)
    return result

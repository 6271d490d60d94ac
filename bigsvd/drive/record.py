"""What a result says of the run that made it: spectrum and attributes."""

from __future__ import annotations

import platform
import time
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

import numpy as np

from bigsvd import machine
from bigsvd.certify import Certificate, spectrum_intervals
from bigsvd.drive.outcome import Outcome
from bigsvd.plan import BASE_BYTES, CALLER, SHARED
from bigsvd.sweep import Control

if TYPE_CHECKING:
    from bigsvd.drive.probe import Forecast

_REQUEST = ("samples", "center", "scale", "tolerance", "strict", "seed", "rank", "variance", "max_rank", "max_sweeps")
_VERSIONS = ("bigsvd", "numpy", "scipy", "dask", "zarr", "h5py")


def spectrum_record(outcome: Outcome, certificate: Certificate) -> dict[str, np.ndarray]:
    """All computed values with their ends, variances and shares, each of shape (computed,).

    The first k rows repeat the certificate; the others are Ritz values with ends by index.
    """
    theta = outcome.evidence.theta[: min(outcome.plan.samples, outcome.plan.features)]
    count = len(theta)
    lower, upper = spectrum_intervals(outcome.evidence)
    value = theta.copy()
    lower, upper = lower[:count].copy(), upper[:count].copy()
    rank = certificate.rank
    value[:rank], lower[:rank], upper[:rank] = certificate.value, certificate.lower, certificate.upper
    freedom = max(1, outcome.plan.samples - 1)
    energy = outcome.evidence.energy
    share = value**2 / energy if energy > 0 else np.zeros(count)
    return {
        "value": value,
        "lower": lower,
        "upper": upper,
        "variance": value**2 / freedom,
        "variance_share": share,
        "cumulative_share": np.minimum(np.cumsum(share), 1.0),
    }


def run_record(
    outcome: Outcome, foreseen: Forecast, control: Control, started: float, held_before: int
) -> dict[str, Any]:
    """Attributes of the result: source, preparation, plan, costs, versions."""
    plan, spec, geometry = outcome.plan, outcome.plan.spec, outcome.plan.geometry
    request = asdict(plan.request)
    peak = machine.peak_resident_bytes()
    seconds = time.perf_counter() - started
    # Called from a program that already held more than an empty interpreter, the ceiling bounds the growth.
    counted = peak - max(0, held_before - BASE_BYTES)
    return {
        "source": {
            "name": spec.name,
            "shape": list(spec.shape),
            "dtype": str(spec.dtype),
            "encoding": spec.encoding,
            "storage": spec.storage,
            "decoded_bytes": spec.decoded_bytes,
            "stored_bytes": spec.stored_bytes,
            "nonzeros": spec.nonzeros,
            "fingerprint": spec.fingerprint,
            "absent": None if spec.absent is None else asdict(spec.absent),
            "unfolding": None if spec.unfolding is None else spec.unfolding.facts(),
            "decoded": spec.decoded,
            "missing": None if spec.missing is None else asdict(spec.missing),
            "layout": spec.layout,
            "marker": spec.marker,
            "row_names": None if spec.row_names is None else spec.row_names.words,
            "column_names": None if spec.column_names is None else spec.column_names.words,
        },
        "preparation": {
            "words": plan.orientation_words(),
            "understood": plan.reading_words(),
            "samples": plan.request.samples,
            "center": plan.request.center,
            "scale": plan.request.scale,
            "constant_features": outcome.constant,
        },
        "plan": {
            "route": plan.route,
            "axis": ("rows", "columns")[geometry.axis],
            "products": plan.products,
            "panels": geometry.panels,
            "panel_bytes": geometry.panel_bytes,
            "width": outcome.state.width,
            "restarts": outcome.state.restarts,
            "leaves": plan.leaves,
            "pilot_panels": len(plan.pilot_panels),
            "resident": plan.resident,
            "reasons": [list(pair) for pair in plan.reasons],
            "memory": [[term.size, term.what] for term in plan.memory],
        },
        "request": {name: request[name] for name in _REQUEST},
        "width": outcome.state.width,
        "sweeps": outcome.sweeps,
        "bytes_read": control.bytes_read,
        "matrix_bytes": spec.decoded_bytes,
        "seconds": seconds,
        "predicted_seconds": foreseen.seconds,
        "predicted_sweeps": plan.nominal_sweeps,
        "pilot_predicted_seconds": _after_pilot(outcome, foreseen),
        "pilot_predicted_sweeps": outcome.expected_sweeps,
        "phases": phase_record(outcome, foreseen, control, seconds),
        "peak_resident_bytes": counted,
        "memory_bytes": plan.ceiling,
        "planned_bytes": plan.planned_bytes,
        "workers": plan.workers,
        "precision": outcome.precision,
        "seed": plan.request.seed,
        "remarks": [*plan.remarks, *outcome.remarks],
        "timings": control.timings(),
        "versions": {name: machine.package_version(name) for name in _VERSIONS} | {"python": platform.python_version()},
    }


def _after_pilot(outcome: Outcome, foreseen: Forecast) -> float | None:
    """Seconds of the whole run that the pilot let expect; None where it did not tell, or nothing was probed."""
    if outcome.expected_sweeps is None or foreseen.seconds is None:
        return None
    return foreseen.costs(outcome.expected_sweeps, single=outcome.precision == "single").seconds


def phase_record(
    outcome: Outcome, foreseen: Forecast, control: Control, seconds: float
) -> dict[str, dict[str, float | None]]:
    """What every phase took beside what was predicted of it, for the sweeps, columns and precision that it came to.

    Parameters
    ----------
    outcome : Outcome
    foreseen : Forecast
    control : Control
    seconds : float
        Of the whole run.

    Returns
    -------
    dict of str to dict
        ``predicted`` and ``measured``, seconds on the clock, and ``worker_seconds``, the sum over the workers, of the
        phases that they share.
    """
    plan, wall, spent = outcome.plan, control.timings(), control.spent()
    made = foreseen.costs(outcome.sweeps, columns=outcome.scratch.stored, single=outcome.precision == "single").wall
    stages = ("pilot", "sweep", "certificate", "slices", "write")
    took = {stage: wall.get(stage, 0.0) for stage in stages}
    beside = {stage: took[stage] - sum(control.spent(stage).values()) / plan.workers for stage in ("pilot", "sweep")}
    caller = {
        "start": seconds - sum(took.values()),
        "waiting": max(0.0, beside["sweep"]),
        # What the pilot solves lies between its products.
        "dense": took["certificate"] + max(0.0, beside["pilot"]),
        "slices": took["slices"],
        "store": took["write"],
    }
    shared: dict[str, dict[str, float | None]] = {
        name: {
            "predicted": made[name],
            "measured": spent.get(name, 0.0) / plan.workers,
            "worker_seconds": spent.get(name, 0.0),
        }
        for name in SHARED
    }
    return shared | {
        name: {"predicted": made[name], "measured": caller[name], "worker_seconds": None} for name in CALLER
    }

"""What a plan will cost on this machine, from a probe of a few panels."""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np

from bigsvd.plan import NOMINAL_SHARE_OF_SLICES, Plan
from bigsvd.prepare import Preparation
from bigsvd.source import Source
from bigsvd.sweep import Control, Engine, PanelReader, SweepTask

# Below this size a run is over before a probe would say anything.
LEAST_PROBED = 64 * 2**20
# Panels read by every worker.
PROBE_PANELS = 2


@dataclass(frozen=True)
class Forecast:
    """A plan and its price.

    Attributes
    ----------
    plan : Plan
    seconds : float or None
        Predicted from the probe; None below 64 MB, where nothing is probed.
    probe_bytes : int
        Decoded bytes that the probe read.
    bytes_to_read : int
        Decoded bytes that the run is expected to read, pilot, probe and slices included.
    """

    plan: Plan
    seconds: float | None
    probe_bytes: int
    bytes_to_read: int


def make_forecast(source: Source, plan: Plan, control: Control, *, probe: bool) -> Forecast:
    """Probe a few panels and predict the time. The prediction changes nothing in the plan.

    Parameters
    ----------
    source : Source
    plan : Plan
    control : Control
    probe : bool
        Whether to read at all.

    Returns
    -------
    Forecast
    """
    spec, geometry = plan.spec, plan.geometry
    pilot = len(plan.pilot_panels) / geometry.panels
    sweeps = 1 if plan.resident else plan.nominal_sweeps
    expected = spec.decoded_bytes * (sweeps * geometry.amplification + pilot + NOMINAL_SHARE_OF_SLICES)
    if not probe or spec.decoded_bytes < LEAST_PROBED or geometry.panels < 2:
        return Forecast(plan, None, 0, int(expected))
    before = control.bytes_read
    workers = min(plan.workers, geometry.panels)
    count = min(geometry.panels, PROBE_PANELS * workers)
    panels = [geometry.panels * part // count for part in range(count)]
    lines = sum(geometry.edges[p + 1] - geometry.edges[p] for p in panels)
    control.begin("probe", lines * geometry.across * spec.dtype.itemsize)
    wide = np.dtype(np.complex128 if spec.dtype.kind == "c" else np.float64)
    single = np.dtype(np.complex64 if spec.dtype.kind == "c" else np.float32)
    work = single if plan.may_be_single and plan.request.precision != "double" else wide
    block = np.full((geometry.across, plan.widths.block), 1.0 / geometry.across, work)
    preparation = Preparation(geometry.lines_are_samples, plan.centred, plan.scaled)
    task = SweepTask(PanelReader(source, geometry, control), preparation, work, "basis", block)
    engine = Engine(plan.workers)
    try:
        start = time.perf_counter()
        engine.sweep(task, [[(panel, panel + 1) for panel in panels]])
        seconds = time.perf_counter() - start
    finally:
        engine.close()
    sweep = seconds * geometry.lines / lines
    # Folding, scratch and the small dense steps come on top of what the probe does; the nominal model knows their
    # share.
    predicted = sweep * (plan.nominal_sweeps + pilot * 3) + plan.nominal_dense_seconds
    return Forecast(plan, predicted, control.bytes_read - before, int(expected) + control.bytes_read - before)

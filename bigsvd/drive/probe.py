"""What a plan will cost on this machine: nominal times, at the pace that a probe of a few panels finds."""

from __future__ import annotations

import threading
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from bigsvd.plan import NOMINAL_SHARE_OF_SLICES, Costs, Geometry, Plan, pass_costs, predict
from bigsvd.prepare import Preparation
from bigsvd.source import Source
from bigsvd.sweep import Control, Engine, Panel, PanelReader, SweepTask

# Below this size a run is over before a probe would say anything.
LEAST_PROBED = 64 * 2**20
# Panels that every worker reads: the first warms up, the second is timed.
PROBE_PANELS = 2
# A phase that a probe cannot see goes at the pace of one that it can: products for what is in the processor, conversion
# for what moves bytes about.
SEEN = ("read", "convert", "products")
LIKE = {
    "fold": "products", "dense": "products", "slices": "products", "waiting": "products",
    "scratch": "convert", "store": "convert", "start": "convert",
}  # fmt: skip


@dataclass(frozen=True)
class Forecast:
    """A plan and its price.

    Attributes
    ----------
    plan : Plan
    seconds : float or None
        Predicted from the probe for the sweeps that the plan expects; None below 64 MB, where nothing is probed.
    probe_bytes : int
        Decoded bytes that the probe read.
    bytes_to_read : int
        Decoded bytes that the run is expected to read, pilot, probe and slices included.
    pace : mapping of str to float
        By phase, time on this machine over nominal time; empty without a probe.
    """

    plan: Plan
    seconds: float | None
    probe_bytes: int
    bytes_to_read: int
    pace: Mapping[str, float] = field(default_factory=dict)

    def costs(self, sweeps: float | None = None, *, columns: float | None = None, single: bool | None = None) -> Costs:
        """Cost by phase on this machine, of a run that takes so many sweeps; see `bigsvd.plan.predict`."""
        return predict(self.plan, sweeps, columns=columns, single=single, pace=self.pace)


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
    expected = int(spec.decoded_bytes * (sweeps * geometry.amplification + pilot + NOMINAL_SHARE_OF_SLICES))
    if spec.missing is not None:
        expected += spec.missing.bytes
    if not probe or spec.decoded_bytes < LEAST_PROBED or geometry.panels < PROBE_PANELS:
        return Forecast(plan, None, 0, expected)
    before = control.bytes_read
    pace = _measure(source, plan, control)
    read = control.bytes_read - before
    forecast = Forecast(plan, None, read, expected + read, pace)
    return replace(forecast, seconds=forecast.costs().seconds)


class _Readings(Control):
    """Keeps what every segment spent."""

    def __init__(self) -> None:
        super().__init__()
        self.each: list[dict[str, float]] = []

    def spend(self, seconds: dict[str, float]) -> None:
        """Note the seconds of a segment."""
        self.each.append(seconds)


class _WarmReader(PanelReader):
    """Gives every thread the same buffer again, as the many panels of a segment share one, and reads no panel twice."""

    def __init__(self, source: Source, geometry: Geometry, control: Control) -> None:
        super().__init__(source, geometry, control)
        self._mine = threading.local()
        self._held: dict[int, Panel] = {}

    def buffer(self) -> np.ndarray:
        """Memory for the largest panel."""
        if not hasattr(self._mine, "buffer"):
            self._mine.buffer = super().buffer()
        buffer: np.ndarray = self._mine.buffer
        return buffer

    def fetch(self, panel: int, buffer: np.ndarray) -> Panel:
        """The panel, read into the buffer unless that was done in the sweep before."""
        if panel not in self._held:
            if self.geometry.sparse:
                # It has no buffer that is used again.
                self._held.pop(panel - 1, None)
            self._held[panel] = super().fetch(panel, buffer)
        return self._held[panel]


def _measure(source: Source, plan: Plan, control: Control) -> dict[str, float]:
    """Pace of every phase: each worker sweeps a panel twice to warm up, then one that is timed."""
    geometry = plan.geometry
    columns = plan.widths.start + plan.widths.test
    single = plan.may_be_single and plan.request.precision != "double"
    workers = min(plan.workers, geometry.panels // PROBE_PANELS)
    firsts = [geometry.panels * part // workers for part in range(workers)]
    size = workers * PROBE_PANELS * geometry.panel_bytes
    control.begin("probe", size)
    readings = _Readings()
    task = _task(source, plan, readings, columns, single=single)
    engine = Engine(workers)
    try:
        for part in (0, *range(PROBE_PANELS)):
            readings.each.clear()
            engine.sweep(task, [[(first + part, first + part + 1) for first in firsts]])
    finally:
        engine.close()
    control.advance(size, read=readings.bytes_read)
    expected = pass_costs(replace(plan, workers=workers), 1 / geometry.panels, columns, single=single).shared
    # The fastest worker: what another program took from one for a moment, it will not take from a whole run.
    seen = {phase: min(each.get(phase, 0.0) for each in readings.each) / expected[phase] for phase in SEEN}
    return seen | {phase: seen[like] for phase, like in LIKE.items()}


def _task(source: Source, plan: Plan, control: Control, columns: int, *, single: bool) -> SweepTask:
    """A sweep with columns of 1/n, prepared as later sweeps are, about a mean of zero."""
    wide = np.dtype(np.complex128 if plan.spec.dtype.kind == "c" else np.float64)
    narrow = np.dtype(np.complex64 if plan.spec.dtype.kind == "c" else np.float32)
    across, work = plan.geometry.across, narrow if single else wide
    across_features = plan.geometry.lines_are_samples
    preparation = Preparation(
        across_features, plan.centred, plan.scaled,
        shift=np.zeros(across, work) if across_features and plan.centred else None,
        inverse_scale=np.ones(across) if across_features and plan.scaled else None,
    )  # fmt: skip
    block = np.full((across, columns), 1 / across, work)
    return SweepTask(
        _WarmReader(source, plan.geometry, control), preparation, work, "basis", block,
        line_features=not across_features and (plan.centred or plan.scaled),
    )  # fmt: skip

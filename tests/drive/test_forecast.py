"""What is predicted, what a probe finds, and what a run records of its phases."""

from __future__ import annotations

import time
from pathlib import Path

import numpy as np
import pytest

import bigsvd
from bigsvd.drive import make_forecast
from bigsvd.plan import CALLER, SHARED, Request, make_plan
from bigsvd.source import Source
from bigsvd.sweep import Control, one_blas_thread

ROWS, COLUMNS = 16_000, 1200


class Slow:
    """A source that takes its time over every panel."""

    def __init__(self, source: Source, seconds: float) -> None:
        self.source, self.seconds, self.spec = source, seconds, source.spec
        self.read_bytes = 0

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        time.sleep(self.seconds)
        self.read_bytes += out.nbytes
        self.source.read(rows, columns, out)

    def close(self) -> None:
        self.source.close()


@pytest.fixture(scope="module")
def matrix() -> np.ndarray:
    random = np.random.default_rng(1)
    values = (random.standard_normal((ROWS, 40)) / np.arange(1, 41)) @ random.standard_normal((40, COLUMNS))
    return values.astype("f4")


def test_a_probe_finds_the_phase_that_is_slow_and_changes_nothing_in_the_plan(matrix: np.ndarray) -> None:
    source = bigsvd.open_matrix(matrix)
    plan = make_plan(source.spec, Request(rank=10, route="krylov"), ceiling=2**30, processors=2)
    paces = {}
    with one_blas_thread():
        for seconds in (0.0, 0.2):
            slow, control = Slow(source, seconds), Control()
            forecast = make_forecast(slow, plan, control, probe=True)
            assert forecast.plan == plan
            assert forecast.probe_bytes == slow.read_bytes == control.bytes_read == 4 * plan.geometry.panel_bytes
            assert forecast.seconds == forecast.costs().seconds
            paces[seconds] = forecast.pace
    assert set(paces[0.2]) == {*SHARED, *CALLER}
    # Nominally a panel of so few bytes is read in less than a millisecond.
    assert paces[0.2]["read"] > 100 * 0.2
    assert paces[0.2]["products"] < 20
    assert make_forecast(source, plan, Control(), probe=False).pace == {}


def test_small_matrices_are_not_probed() -> None:
    source = bigsvd.open_matrix(np.ones((2000, 30)))
    plan = make_plan(source.spec, Request(rank=3), ceiling=2**30)
    forecast = make_forecast(source, plan, Control(), probe=True)
    assert (forecast.seconds, forecast.probe_bytes) == (None, 0)
    assert forecast.costs().wall == plan.nominal_phases


def test_phases_of_a_run_add_up_to_its_time(matrix: np.ndarray, tmp_path: Path) -> None:
    factors = bigsvd.decompose(matrix, tmp_path / "out", rank=10, route="krylov", workers=2)
    record = factors.attributes
    phases = record["phases"]
    assert set(phases) == {*SHARED, *CALLER}
    assert sum(one["measured"] for one in phases.values()) == pytest.approx(record["seconds"], rel=0.02)
    for name in SHARED:
        assert phases[name]["worker_seconds"] == pytest.approx(2 * phases[name]["measured"])
        assert phases[name]["measured"] > 0
    for name in CALLER:
        assert phases[name]["worker_seconds"] is None
    assert all(one["predicted"] > 0 for one in phases.values())
    assert record["predicted_sweeps"] == 3

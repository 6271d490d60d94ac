"""Subspace iterations of the pilot end when they are settled, and not before."""

from __future__ import annotations

import numpy as np
import pytest

from bigsvd.plan import Geometry
from bigsvd.prepare import Preparation
from bigsvd.solve import take_pilot
from bigsvd.solve.pilot import PILOT_ITERATIONS
from bigsvd.source import open_source
from bigsvd.sweep import Control, Engine, PanelReader, SweepTask
from bigsvd.sweep.partial import Partial

LINES, ACROSS, PANEL = 640, 120, 64


def planted(values: np.ndarray) -> np.ndarray:
    random = np.random.default_rng(8)
    left = np.linalg.qr(random.standard_normal((LINES, ACROSS)))[0]
    right = np.linalg.qr(random.standard_normal((ACROSS, ACROSS)))[0]
    return (left * values) @ right.T


@pytest.mark.parametrize(
    ("decay", "products"),
    # Two iterations settle the fast one (a third shows it); one more sweep measures.
    [(10.0 ** -np.arange(ACROSS), 4), (1 / np.arange(1.0, ACROSS + 1) ** 0.5, PILOT_ITERATIONS + 1)],
    ids=["fast", "slow"],
)
def test_iterations_follow_the_decay(decay: np.ndarray, products: int, monkeypatch: pytest.MonkeyPatch) -> None:
    matrix = planted(decay)
    geometry = Geometry(0, LINES, ACROSS, True, (*range(0, LINES, PANEL), LINES), 1.0, PANEL * ACROSS * 8)
    reader = PanelReader(open_source(matrix), geometry, Control(), keep=True)
    engine = Engine(1)
    multiplied = []
    plain = engine.sweep

    def counted(task: SweepTask, waves: list[list[tuple[int, int]]]) -> Partial:
        if task.block is not None:
            multiplied.append(task.block.shape[1])
        return plain(task, waves)

    monkeypatch.setattr(engine, "sweep", counted)
    try:
        pilot = take_pilot(
            reader, engine, tuple(range(geometry.panels)), 2, Preparation(True, False, False),
            directions=16, may_be_single=False, seed=0,
        )  # fmt: skip
    finally:
        engine.close()
    assert len(multiplied) == products
    # The sample is the whole matrix here: the leading values are its own.
    np.testing.assert_allclose(pilot.theta[:4], decay[:4], rtol=2e-2)

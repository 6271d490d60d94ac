"""A sweep that fails leaves no thread behind that still works for it."""

from __future__ import annotations

import threading
from pathlib import Path

import numpy as np
import pytest
from sweep_samples import geometry_of

from bigsvd.prepare import Preparation
from bigsvd.source import Source, open_source
from bigsvd.sweep import Control, Engine, PanelReader, Scratch, SweepTask


class FailingSource:
    """Reads like its parent, but fails in the second half, once another worker has begun to write."""

    def __init__(self, parent: Source, writing: threading.Event) -> None:
        self.parent, self.spec, self.writing = parent, parent.spec, writing

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        if rows[0] >= self.spec.shape[0] // 2:
            assert self.writing.wait(10)
            raise OSError("the disk is gone")
        self.parent.read(rows, columns, out)

    def close(self) -> None:
        self.parent.close()


class SlowScratch(Scratch):
    """Counts the writes that have begun and not ended; each lasts until well after the other worker has failed."""

    def __init__(self, folder: Path, lines: int, writing: threading.Event) -> None:
        super().__init__(folder, lines, np.dtype(float))
        self.writing, self.unfinished = writing, 0

    def write(self, block: int, start: int, values: np.ndarray) -> None:
        self.unfinished += 1
        self.writing.set()
        threading.Event().wait(0.3)
        super().write(block, start, values)
        self.unfinished -= 1


def test_no_worker_writes_to_the_scratch_once_a_failed_sweep_has_returned(tmp_path: Path) -> None:
    matrix = np.random.default_rng(1).standard_normal((64, 8))
    writing = threading.Event()
    source = FailingSource(open_source(matrix), writing)
    scratch = SlowScratch(tmp_path, len(matrix), writing)
    reader = PanelReader(source, geometry_of(matrix, 0, 16), Control())
    block = np.linalg.qr(np.random.default_rng(2).standard_normal((8, 3)))[0]
    target = scratch.add_block(3)
    task = SweepTask(
        reader, Preparation(True, False, False), np.dtype(float), "basis", block, scratch=scratch, target=target
    )
    engine = Engine(2)
    try:
        with pytest.raises(OSError, match="the disk is gone"):
            engine.sweep(task, [[(0, 2), (2, 4)]])
        assert writing.is_set()
        assert scratch.unfinished == 0
    finally:
        engine.close()
        scratch.close()
    assert not list(tmp_path.iterdir())

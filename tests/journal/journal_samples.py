"""Matrices with a fingerprint, runs that are cut at a chosen place, and what has to be the same afterwards."""

from __future__ import annotations

import threading
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import table

import bigsvd
from bigsvd.source import MatrixSpec
from bigsvd.sweep import Progress

OPTIONS: dict[str, Any] = {"memory": "1GiB", "panel_lines": 40, "save_every": 0.0}
KRYLOV: dict[str, Any] = {"route": "krylov", "axis": "rows", "rank": 6, "tolerance": 1e-6}


class Cut(BaseException):
    """Ends a run in the middle, as a signal or a lost machine would; nobody catches it on the way."""


class Kept:
    """A matrix in memory that is told from others by a fingerprint, as a file is, and counts what is read.

    Parameters
    ----------
    matrix : ndarray
    fingerprint : str
    """

    def __init__(self, matrix: np.ndarray, fingerprint: str = "as it was") -> None:
        self.matrix = matrix
        # A class of which no panel is held from one sweep to the next.
        self.spec = MatrixSpec("pool.h5:/frames", matrix.shape, matrix.dtype, (1, 1), "memory", fingerprint=fingerprint)
        self.bytes = 0
        self.by_stage: dict[str, int] = {}
        self.stage = ""
        self._lock = threading.Lock()

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        """Read a rectangle."""
        with self._lock:
            self.bytes += out.nbytes
            self.by_stage[self.stage] = self.by_stage.get(self.stage, 0) + out.nbytes
        out[...] = self.matrix[rows[0] : rows[1], columns[0] : columns[1]]

    def listen(self, event: Progress) -> None:
        """Book what is read under the stage that was announced last."""
        self.stage = event.stage

    def close(self) -> None:
        """Nothing is open."""


def cut_at(sweep: int, share: float, error: BaseException | None = None) -> Callable[[Progress], None]:
    """Listen until that share of a sweep is done, then end the run."""

    def listen(event: Progress) -> None:
        if event.sweep == sweep and event.bytes_done >= share * event.bytes_total:
            raise error or Cut

    return listen


def cut_in(stage: str) -> Callable[[Progress], None]:
    """Listen until that stage, then end the run."""

    def listen(event: Progress) -> None:
        if event.stage == stage:
            raise Cut

    return listen


@cache
def slow_decay(dtype: str = "f8", shape: tuple[int, int] = (1600, 120)) -> np.ndarray:
    """1/√i, so that a few sweeps are needed at a tolerance of 1e-6."""
    made = table.planted(np.arange(1, shape[1] + 1) ** -0.5, shape, 31, imaginary=np.dtype(dtype).kind == "c")
    made = np.asarray(made + 0.2, dtype)
    made.setflags(write=False)
    return made


def begin(source: Any, out: Path, listener: Callable[[Progress], None], **options: Any) -> None:
    """Start a run that ends in the middle."""
    with pytest.raises(Cut):
        bigsvd.decompose(source, out, progress=listener, **(OPTIONS | options))


def bits(out: Path) -> dict[str, bytes]:
    """Every file of a result by its name, but for the root document, which holds times."""
    files = {path.relative_to(out).as_posix(): path for path in out.rglob("*") if path.is_file()}
    return {name: path.read_bytes() for name, path in files.items() if name != "zarr.json"}


def assert_same_bits(out: Path, other: Path) -> None:
    """Compare two results file by file."""
    found, wanted = bits(out), bits(other)
    assert found.keys() == wanted.keys()
    assert [name for name in found if found[name] != wanted[name]] == []


def left_in(folder: Path) -> list[str]:
    """Names in a folder, but for logs."""
    return sorted(path.name for path in folder.iterdir() if path.suffix != ".log")

"""Matrices cut into panels, swept by the engine, and the same sums taken by NumPy in double."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np

from bigsvd.plan import Geometry
from bigsvd.prepare import Preparation
from bigsvd.source import open_source
from bigsvd.sweep import Control, Engine, PanelReader, Partial, Scratch, SweepTask


def stored_matrix(code: str, shape: tuple[int, int], seed: int = 1) -> np.ndarray:
    """Entries about 3 with deviations about 1, counts about 900, or truth values, in the type of that code."""
    random = np.random.default_rng(seed)
    values = random.standard_normal(shape) + 3
    kind = np.dtype(code).kind
    if kind == "c":
        values = values + 1j * (random.standard_normal(shape) - 2)
    if kind == "b":
        return values > 3
    if kind in "iu":
        values = np.round(values * 30)
        return np.asarray(np.clip(values, 0 if kind == "u" else -100, 250), code)
    return np.asarray(values, code)


def wide_type(code: str) -> np.dtype:
    return np.dtype(np.complex128 if np.dtype(code).kind == "c" else np.float64)


def geometry_of(matrix: np.ndarray, axis: int, panel_lines: int, *, samples: bool = True) -> Geometry:
    """Panels of so many lines along an axis."""
    lines, across = matrix.shape[axis], matrix.shape[1 - axis]
    edges = (*range(0, lines, panel_lines), lines)
    tallest = max(stop - start for start, stop in pairwise(edges))
    return Geometry(axis, lines, across, samples, edges, 1.0, tallest * across * matrix.dtype.itemsize)


def reader_of(matrix: np.ndarray, axis: int, panel_lines: int, **options: Any) -> PanelReader:
    return PanelReader(open_source(matrix), geometry_of(matrix, axis, panel_lines), Control(), **options)


@dataclass(eq=False)
class Swept:
    """A finished sweep."""

    sums: Partial
    tall: np.ndarray | None


def sweep(task: SweepTask, *, segments: int = 3, workers: int = 2, scratch: Scratch | None = None) -> Swept:
    """Run a task over all panels in waves of two segments."""
    panels = task.reader.geometry.panels
    edges = sorted({panels * part // segments for part in range(segments + 1)})
    runs = list(pairwise(edges))
    waves = [runs[first : first + 2] for first in range(0, len(runs), 2)]
    engine = Engine(workers)
    try:
        sums = engine.sweep(task, waves)
    finally:
        engine.close()
    tall = None if scratch is None else scratch.read(0, task.reader.geometry.lines)
    return Swept(sums, tall)


def prepared(matrix: np.ndarray, axis: int, preparation: Preparation) -> np.ndarray:
    """Lines by across, prepared by NumPy in double."""
    wide = np.complex128 if matrix.dtype.kind == "c" else np.float64
    lines = (matrix if axis == 0 else matrix.T).astype(wide)
    if preparation.across_features:
        if preparation.shift is not None:
            lines = lines - preparation.shift
        return lines * preparation.inverse_scale if preparation.inverse_scale is not None else lines
    mean = lines.mean(axis=1, keepdims=True)
    spread = np.std(lines, axis=1, ddof=1, keepdims=True)
    centred = lines - mean if preparation.center else lines
    still = (lines == lines[:, :1]).all(axis=1, keepdims=True)
    return centred / np.where(still, 1, spread) if preparation.scale else centred


def assert_close(found: np.ndarray, wanted: np.ndarray, terms: int, epsilon: float) -> None:
    """Agreement to the rounding of a sum of so many terms, relative to the largest entry."""
    assert found.shape == wanted.shape
    largest = float(np.abs(wanted).max(initial=0.0))
    np.testing.assert_allclose(found, wanted, rtol=0, atol=4 * np.sqrt(terms) * epsilon * largest + 1e-300)


def assert_same_gram(triangle: np.ndarray, block: np.ndarray, epsilon: float) -> None:
    """R is upper triangular and RᴴR = XᴴX."""
    assert np.array_equal(triangle, np.triu(triangle))
    assert_close(triangle.conj().T @ triangle, block.conj().T @ block, len(block), epsilon)

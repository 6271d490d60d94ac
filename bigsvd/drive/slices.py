"""The exact check on slices: small rectangles of the user's own file, through the run's own route, against LAPACK."""

from __future__ import annotations

from contextlib import suppress
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from bigsvd.certify import STATES, SliceCheck
from bigsvd.drive.outcome import Outcome
from bigsvd.drive.run import run
from bigsvd.errors import OptionError
from bigsvd.plan import SLICE_ENTRIES, Plan, make_plan
from bigsvd.prepare import Preparation, line_statistics, prepare_unit
from bigsvd.randomness import draw_without_repeat
from bigsvd.source import MatrixSpec, Source, line_counter
from bigsvd.sweep import Control

if TYPE_CHECKING:
    from scipy.sparse import csr_array

STREAM_SLICES = 2
MOST_SLICES = 3
# All slices together read at most this share of the matrix.
SLICE_SHARE = 0.01
# The product of longer side and square of the shorter that keep an exact decomposition within about a
# second.
MOST_FLOPS = 2.5e8
LEAST_PANELS = 4
# Room for a restart of a run for ten components.
LEAST_ACROSS = 256
SLICE_RANK = 10
# LAPACK's own rounding, relative to the largest value.
LAPACK_ROUNDING = 1e-12


@dataclass(frozen=True)
class Rectangle:
    """A half-open rectangle of the stored matrix."""

    rows: tuple[int, int]
    columns: tuple[int, int]


class SliceSource:
    """A rectangle of another source, as a source of its own.

    Parameters
    ----------
    parent : Source
    rectangle : Rectangle
    """

    def __init__(self, parent: Source, rectangle: Rectangle) -> None:
        self.parent, self.rectangle = parent, rectangle
        rows, columns = rectangle.rows, rectangle.columns
        shape = (rows[1] - rows[0], columns[1] - columns[0])
        self._spec = replace(
            parent.spec, name=f"{parent.spec.name}[{rows[0]}:{rows[1]}, {columns[0]}:{columns[1]}]", shape=shape,
            chunks=(1, 1), stored_bytes=None, samples_hint=None, fingerprint="", row_names=None, column_names=None,
            edges=(None, None), unfolding=None,
            # What is left of a sparse matrix is read as a dense rectangle.
            nonzeros=None, compressed_axis=None,
        )  # fmt: skip

    @property
    def spec(self) -> MatrixSpec:
        """What is known of the rectangle."""
        return self._spec

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        """Read part of the rectangle."""
        top, left = self.rectangle.rows[0], self.rectangle.columns[0]
        self.parent.read((top + rows[0], top + rows[1]), (left + columns[0], left + columns[1]), out)

    def close(self) -> None:
        """Nothing to release: the parent is not ours."""


def draw_slices(spec: MatrixSpec, axis: int, seed: int) -> tuple[Rectangle, ...]:
    """Draw rectangles of whole chunks by seed, clipped to what LAPACK does in about a second.

    Parameters
    ----------
    spec : MatrixSpec
    axis : int
        Axis of the sweep; the slices are longer along it.
    seed : int

    Returns
    -------
    tuple of Rectangle
        Empty where a single chunk is more than 1 % of the matrix.
    """
    allowed = SLICE_SHARE * spec.shape[0] * spec.shape[1]
    unit = [min(spec.chunks[side], spec.shape[side]) for side in (0, 1)]
    count = min(MOST_SLICES, int(allowed // (unit[0] * unit[1])))
    if count == 0:
        return ()
    size = _grow(unit, spec.shape, min(allowed / count, SLICE_ENTRIES), axis)
    places = [
        draw_without_repeat(
            seed, STREAM_SLICES + 64 * (side + 1), max(1, (spec.shape[side] - size[side]) // unit[side] + 1), count
        )
        if (spec.shape[side] - size[side]) // unit[side] + 1 >= count
        else [0] * count
        for side in (0, 1)
    ]
    clipped = _clip(size, axis)
    rectangles = []
    for number, (row, column) in enumerate(zip(places[0], reversed(places[1]), strict=True)):
        starts = []
        for side, place in enumerate((row, column)):
            slack = min(size[side], spec.shape[side] - place * unit[side]) - clipped[side]
            inside = draw_without_repeat(seed, STREAM_SLICES + 256 * (number + 1) + side, max(0, slack) + 1, 1)[0]
            starts.append(place * unit[side] + inside)
        rectangles.append(Rectangle((starts[0], starts[0] + clipped[0]), (starts[1], starts[1] + clipped[1])))
    return tuple(rectangles)


def _grow(unit: list[int], shape: tuple[int, int], entries: float, axis: int) -> list[int]:
    """Enlarge a chunk by whole chunks towards the allowed number of entries, lines three times the width."""
    size = list(unit)
    while True:
        longer = axis if size[axis] < 3 * size[1 - axis] else 1 - axis
        for side in (longer, 1 - longer):
            grown = list(size)
            grown[side] = min(size[side] + max(unit[side], size[side] // unit[side] // 2 * unit[side]), shape[side])
            if grown != size and grown[0] * grown[1] <= entries:
                size = grown
                break
        else:
            return size


def _clip(size: list[int], axis: int) -> tuple[int, int]:
    """Cut a slice down to an affordable exact decomposition, no wider than long or than a restart needs."""
    lines, across = size[axis], min(size[1 - axis], max(size[axis], LEAST_ACROSS))
    while max(lines, across) * min(lines, across) ** 2 > MOST_FLOPS:
        if lines > 2 * across:
            lines = lines * 9 // 10
        else:
            across = across * 9 // 10
    return (lines, across) if axis == 0 else (across, lines)


def check_slices(
    source: Source, plan: Plan, precision: str, scratch_folder: Path, control: Control, *, seed: int
) -> tuple[SliceCheck, ...]:
    """The exact check on slices of the user's own file.

    Parameters
    ----------
    source : Source
        The whole matrix.
    plan : Plan
        Of the whole run.
    precision : str
        ``single`` or ``double``, as the run settled it.
    scratch_folder : Path
    control : Control
    seed : int
        Of their places.

    Returns
    -------
    tuple of SliceCheck
        Without those whose own entries are too small to be decomposed alone, though the whole matrix is not.
    """
    rectangles = draw_slices(plan.spec, plan.geometry.axis, seed)
    control.begin("slices", len(rectangles))
    checks = []
    for rectangle in rectangles:
        with suppress(OptionError):
            checks.append(check_slice(source, rectangle, plan, precision, scratch_folder, control))
        control.advance(1, read=0)
    return tuple(checks)


def check_slice(
    source: Source, rectangle: Rectangle, plan: Plan, precision: str, scratch_folder: Path, control: Control
) -> SliceCheck:
    """Decompose a slice by the run's own route, and exactly, and compare.

    Parameters
    ----------
    source : Source
        The whole matrix.
    rectangle : Rectangle
    plan : Plan
        Of the whole run: its route, axis and preparation are used.
    precision : str
        ``single`` or ``double``, as the run settled it.
    scratch_folder : Path
    control : Control
        Counts what is read.

    Returns
    -------
    SliceCheck
    """
    part = SliceSource(source, rectangle)
    shape = part.spec.shape
    lines = shape[plan.geometry.axis]
    rank = max(1, min(plan.rank, SLICE_RANK, min(shape) // 2))
    request = replace(
        plan.request, rank=rank, variance=None, axis=("rows", "columns")[plan.geometry.axis], route=plan.route,
        precision=precision, panel_lines=max(1, lines // (2 * LEAST_PANELS)), width_limit=1, memory=None,
        max_sweeps=max(8, plan.request.max_sweeps), least_sweeps=2,
    )  # fmt: skip
    kept = np.empty(shape, part.spec.dtype)
    part.read((0, shape[0]), (0, shape[1]), kept)
    control.bytes_read += _decoded(source.spec, rectangle)
    # Whatever the whole matrix keeps open is there already.
    spec = replace(part.spec, held_bytes=0)
    if plan.geometry.sparse:
        spec = replace(spec, nonzeros=int(np.count_nonzero(kept)), compressed_axis=source.spec.compressed_axis)
    held = _Kept(spec, kept)
    # A slice of nothing but zeros has none to leave out.
    request = replace(request, products=plan.products if held.spec.nonzeros else "auto")
    small = make_plan(
        held.spec, request, ceiling=max(plan.ceiling, 2**30), processors=plan.workers, line_nonzeros=line_counter(held)
    )
    small = replace(small, resident=True)
    quiet = Control()
    outcome = run(held, small, quiet, scratch_folder)
    try:
        return _compare(outcome, _prepared(kept, plan), rectangle)
    finally:
        outcome.scratch.close()


class _Kept:
    """The slice as it was read through the run's own source."""

    def __init__(self, spec: MatrixSpec, values: np.ndarray) -> None:
        self.spec, self.values = spec, values

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        out[...] = self.values[rows[0] : rows[1], columns[0] : columns[1]]

    def read_lines(self, first: int, stop: int) -> csr_array:
        from scipy.sparse import csr_array

        return csr_array(self._lines(first, stop))

    def lines_nonzeros(self, first: int, stop: int) -> int:
        return int(np.count_nonzero(self._lines(first, stop)))

    def _lines(self, first: int, stop: int) -> np.ndarray:
        return (self.values if self.spec.compressed_axis == 0 else self.values.T)[first:stop]

    def close(self) -> None:
        """Nothing is open."""


def _decoded(spec: MatrixSpec, rectangle: Rectangle) -> int:
    """Bytes decoded to read a rectangle: whole chunks."""
    sides = []
    for side, (start, stop) in enumerate((rectangle.rows, rectangle.columns)):
        first, last = spec.whole_chunks(side, start, stop)
        sides.append(last - first)
    return sides[0] * sides[1] * spec.dtype.itemsize


def _prepared(stored: np.ndarray, plan: Plan) -> np.ndarray:
    """The slice, lines by across, prepared in double with its own statistics, features handled as whole lines."""
    wide = np.result_type(stored.dtype, np.float64)
    lines = stored if plan.geometry.axis == 0 else stored.T
    by_feature = lines.T if plan.geometry.lines_are_samples else lines
    statistics = line_statistics(by_feature, scale=plan.scaled)
    out = np.empty(by_feature.shape, wide)
    preparation = Preparation(across_features=False, center=plan.centred, scale=plan.scaled)
    prepare_unit(by_feature, preparation, statistics, slice(0, by_feature.shape[1]), out)
    return out.T if plan.geometry.lines_are_samples else out


def _compare(outcome: Outcome, exact: np.ndarray, rectangle: Rectangle) -> SliceCheck:
    """Differences in values and angles, and whether every bound held."""
    from scipy.linalg import svd

    _, value, right = svd(exact, full_matrices=False, lapack_driver="gesdd")
    certificate = outcome.certificate
    rank = certificate.rank
    top = max(float(value[0]), np.finfo(float).tiny)
    slack = LAPACK_ROUNDING * top
    proved = certificate.index_proved
    held = bool(
        np.all((certificate.lower <= value[:rank] + slack)[proved])
        and np.all((value[:rank] <= certificate.upper + slack)[proved])
    )
    for i in np.flatnonzero(~proved):
        held &= bool(np.any((value >= certificate.lower[i] - slack) & (value <= certificate.upper[i] + slack)))
    vectors = outcome.state.used @ outcome.ritz.rotation[:, :rank]
    largest = float("nan")
    bounded = np.isfinite(certificate.angle_bound)
    ties = set(zip(certificate.tied_first[bounded], certificate.tied_last[bounded], strict=True))
    for first, last in sorted(ties):
        group = slice(int(first), int(last) + 1)
        outside = vectors[:, group] - right[group].conj().T @ (right[group] @ vectors[:, group])
        angle = float(np.arcsin(min(1.0, float(np.linalg.norm(outside, 2)))))
        largest = float(np.fmax(largest, angle))
        speak = (certificate.tied_first == first) & (certificate.tied_last == last)
        held &= bool(angle <= certificate.angle_bound[speak].min() + 1e-7)
    # Components in the slice's own bulk have wide intervals, which were checked above; a difference means something for
    # the rest.
    resolved = certificate.state == STATES.index("resolved")
    difference = float(np.max(np.abs(value[:rank] - certificate.value)[resolved] / top, initial=0.0))
    return SliceCheck(rectangle.rows, rectangle.columns, int(resolved.sum()), difference, largest, held)

"""How a stored matrix is cut: the axis the panels run along, their edges, and the grouping into segments and waves."""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

from bigsvd.plan.sparse import SPARSE_UNIT_LINES, matrix_bytes, sparse_bytes
from bigsvd.source import LineNonzeros, MatrixSpec

# A wave lasts at most this long on one worker at nominal rates, so that little is lost when a run is cut; and no more
# bytes than a slow device, at 20 MB/s, reads in a minute.
WAVE_SECONDS = 10.0
MOST_WAVE_BYTES = 1200 * 10**6
# Panels of whole chunks are made small enough for a pilot of several and a full pipeline, large enough to read well.
MOST_PANEL_BYTES = 64 * 2**20
LEAST_PANEL_BYTES = 32 * 2**10
WANTED_PANELS = 160
FEWEST_PANELS = 40
# A panel is converted and multiplied in units: single-precision sums stay within 512 terms (docs/method.md).
UNIT_LINES = 512
# The last segments of a sweep shrink, so that no worker waits long for another's: each takes at most this share of the
# panels left, and no less than this share of a whole segment.
TAPER_SHARE, LEAST_TAPERED = 0.25, 0.2
# That makes so many segments more, whose sums take memory: waves of fewer segments than this do not shrink.
TAPERED_LEAVES, TAPERED_MORE = 8, 8


@dataclass(frozen=True)
class Geometry:
    """One way to sweep a stored matrix.

    Attributes
    ----------
    axis : int
        Stored axis the panels run along (0: panels are ranges of stored rows).
    lines, across : int
        Entries along that axis and across it: a panel is panel_lines × across, the basis across × width.
    lines_are_samples : bool
        Whether the swept axis holds the samples (means are then taken along the sweep).
    edges : tuple of int
        Panel p covers lines edges[p] … edges[p + 1].
    amplification : float
        Bytes read over bytes of the matrix; above 1 where panels are parts of chunks.
    panel_bytes : int
        Largest panel in the stored type, in the form in which it is multiplied.
    nonzeros : int or None
        Of panels that are multiplied without their zeros, the nonzeros of the fullest; None where zeros are multiplied.
    unit_nonzeros : int
        Those of the fullest lines that are multiplied at a time.
    """

    axis: int
    lines: int
    across: int
    lines_are_samples: bool
    edges: tuple[int, ...]
    amplification: float
    panel_bytes: int
    nonzeros: int | None = None
    unit_nonzeros: int = 0

    @property
    def sparse(self) -> bool:
        """Whether panels are multiplied without their zeros."""
        return self.nonzeros is not None

    @property
    def unit_lines(self) -> int:
        """Lines that are multiplied at a time."""
        return SPARSE_UNIT_LINES if self.sparse else UNIT_LINES

    @property
    def panels(self) -> int:
        """Number of panels."""
        return len(self.edges) - 1

    def rectangle(self, panel: int) -> tuple[tuple[int, int], tuple[int, int]]:
        """Stored rows and columns of a panel."""
        along = (self.edges[panel], self.edges[panel + 1])
        return (along, (0, self.across)) if self.axis == 0 else ((0, self.across), along)


def cut(
    spec: MatrixSpec,
    axis: int,
    samples_axis: int,
    room: int,
    panel_lines: int | None = None,
    line_nonzeros: LineNonzeros | None = None,
) -> Geometry:
    """Cut a matrix into panels of whole chunks along an axis.

    Parameters
    ----------
    spec : MatrixSpec
    axis : int
        Stored axis the panels run along.
    samples_axis : int
        Stored axis that holds the samples.
    room : int
        Bytes one panel may take in its stored type.
    panel_lines : int or None
        Lines per panel where the caller insists.
    line_nonzeros : callable or None
        Where panels are to be multiplied without their zeros: how many entries of a range of lines are stored.

    Returns
    -------
    Geometry
        With panels of part of a chunk, and the amplification that costs, where a whole chunk does not fit in `room`.
    """
    lines, across = spec.shape[axis], spec.shape[1 - axis]
    unit = min(spec.chunks[axis], lines)
    if line_nonzeros is None:
        line_bytes, worth = max(1, across * spec.dtype.itemsize), UNIT_LINES
    else:
        # On average: the panels are of equal lines, whatever their nonzeros.
        line_bytes, worth = -(-matrix_bytes(spec, "sparse") // lines), SPARSE_UNIT_LINES
    # Products are added up once per unit, so panels of whole units are wanted even where that leaves fewer of them.
    wanted = max(lines * line_bytes // WANTED_PANELS, min(worth * line_bytes, lines * line_bytes // FEWEST_PANELS))
    target = max(min(room, MOST_PANEL_BYTES, wanted), LEAST_PANEL_BYTES) // line_bytes
    if target > worth:
        target = target // worth * worth
    amplification = 1.0
    edges = spec.edges[axis]
    if edges is not None and panel_lines is None and room // line_bytes >= unit:
        return _uneven(axis, lines, across, axis == samples_axis, _together(edges, target), line_bytes)
    if panel_lines is not None:
        height = panel_lines
        if (edges is not None or height % unit) and height < lines:
            amplification = _amplification(spec, axis, height)
    elif room // line_bytes >= unit:
        height = max(1, target // unit) * unit
    else:
        height = max(1, room // line_bytes)
        amplification = _amplification(spec, axis, height)
    cuts = (*range(0, lines, height), lines)
    tallest = min(height, lines)
    if line_nonzeros is None:
        return Geometry(axis, lines, across, axis == samples_axis, cuts, amplification, tallest * line_bytes)
    fullest = int(max(line_nonzeros(start, stop) for start, stop in pairwise(cuts)))
    units = (
        line_nonzeros(first, min(first + SPARSE_UNIT_LINES, stop))
        for start, stop in pairwise(cuts)
        for first in range(start, stop, SPARSE_UNIT_LINES)
    )
    held = sparse_bytes(spec, tallest, fullest)
    return Geometry(axis, lines, across, axis == samples_axis, cuts, amplification, held, fullest, int(max(units)))


def _together(edges: tuple[int, ...], target: int) -> tuple[int, ...]:
    """Edges of panels of whole chunks of unequal size, each of at most `target` lines or of one chunk."""
    kept = [0]
    for before, edge in pairwise(edges):
        if edge - kept[-1] > target and before > kept[-1]:
            kept.append(before)
    return (*kept, edges[-1])


def _uneven(
    axis: int, lines: int, across: int, lines_are_samples: bool, edges: tuple[int, ...], line_bytes: int
) -> Geometry:
    """A geometry of panels of unequal height."""
    highest = max(stop - start for start, stop in pairwise(edges))
    return Geometry(axis, lines, across, lines_are_samples, edges, 1.0, highest * line_bytes)


def _amplification(spec: MatrixSpec, axis: int, height: int) -> float:
    """Lines decoded over lines needed, when panels of `height` lines cut chunks."""
    decoded, lines = 0, spec.shape[axis]
    for start in range(0, lines, height):
        first, last = spec.whole_chunks(axis, start, min(start + height, lines))
        decoded += last - first
    return decoded / lines


def group(panels: int, panel_seconds: float, panel_bytes: int, leaves: int) -> tuple[tuple[tuple[int, int], ...], ...]:
    """Group panels into waves of segments.

    Parameters
    ----------
    panels : int
    panel_seconds : float
        Nominal time of one panel on one worker.
    panel_bytes : int
        Decoded bytes of one panel.
    leaves : int
        Segments per wave; see `most_segments` for the last.

    Returns
    -------
    tuple of waves, each a tuple of (first panel, one past the last) segments
        Every segment has the same number of panels, but in the last wave they shrink towards the end.
    """
    most = min(WAVE_SECONDS / max(panel_seconds, 1e-9), MOST_WAVE_BYTES / max(panel_bytes, 1))
    per_wave = max(leaves, min(panels, int(most)))
    waves = math.ceil(panels / per_wave)
    run = max(1, math.ceil(panels / (waves * leaves)))
    last = max(0, math.ceil(panels / run / leaves) - 1) * leaves * run
    segments = _equal(0, last, run)
    whole = tuple(segments[first : first + leaves] for first in range(0, len(segments), leaves))
    end = _tapered(last, panels, run) if leaves >= TAPERED_LEAVES else _equal(last, panels, run)
    return (*whole, end) if end else whole


def most_segments(leaves: int) -> int:
    """Segments that a wave of so many leaves may have, whose partial sums memory must hold."""
    return leaves + (TAPERED_MORE if leaves >= TAPERED_LEAVES else 0)


def _equal(first: int, stop: int, run: int) -> tuple[tuple[int, int], ...]:
    """Segments of `run` panels; what is left is the last."""
    return tuple((start, min(start + run, stop)) for start in range(first, stop, run))


def _tapered(first: int, stop: int, run: int) -> tuple[tuple[int, int], ...]:
    """Segments of at most `run` panels, which shrink towards the end."""
    least = max(1, round(LEAST_TAPERED * run))
    segments = []
    while first < stop:
        taken = min(run, max(least, int(TAPER_SHARE * (stop - first))), stop - first)
        segments.append((first, first + taken))
        first += taken
    return tuple(segments)

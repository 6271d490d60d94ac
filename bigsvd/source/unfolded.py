"""An array of several axes as a matrix: boxes of the array, read straight to where they belong in a rectangle."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from bigsvd.errors import OptionError
from bigsvd.source.axes import CONTRADICTORY
from bigsvd.source.axis_choice import AxisChoice, check_mask, plan_unfolding, region_of, sample_axes_of
from bigsvd.source.axis_labels import load_coordinates, load_mask
from bigsvd.source.complete import check_complete
from bigsvd.source.names import Names
from bigsvd.source.names_derived import take_names
from bigsvd.source.rectangle import BAND_BYTES, Box, Span, require_rectangle, sides_of
from bigsvd.source.spec import ArraySource, MatrixSpec, Source
from bigsvd.source.stamp import digest
from bigsvd.source.unfolding import Side, Unfolding
from bigsvd.units import show_count, show_shape

# Entries decoded over entries taken, above which the plan says so.
_WORTH_SAYING = 1.05


@dataclass(frozen=True)
class _Part:
    """A part of one side: where it goes in the buffer, where it lies in the region, and which of that is wanted."""

    target: slice
    box: Box
    pick: slice | np.ndarray | None

    @property
    def size(self) -> int:
        """Entries of the box."""
        return math.prod(sides_of(self.box))


class UnfoldedSource:
    """Reads rectangles of an array whose axes are run together into samples and features.

    Parameters
    ----------
    parent : ArraySource
        The array.
    unfolding : Unfolding
    said : tuple of str
        What was asked for, for the fingerprint.
    """

    def __init__(self, parent: ArraySource, unfolding: Unfolding, said: tuple[object, ...]) -> None:
        self.parent = parent
        self.unfolding = unfolding
        self._said = said
        order = (*unfolding.row_axes, *unfolding.column_axes)
        self._back = tuple(order.index(axis) for axis in range(len(order)))
        self._order = order
        self.spec = self._spec()

    @property
    def path(self) -> str | None:
        """The file of the array, where names are looked for by their path; None in memory."""
        return getattr(self.parent, "path", None)

    def __repr__(self) -> str:
        return f"UnfoldedSource({self.parent!r}, {self.unfolding.words()!r})"

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Read the half-open rectangle rows × columns into `out`; see `Source.read`."""
        require_rectangle(self.spec, rows, columns, out)
        if out.size == 0:
            return
        across = list(_parts(self.unfolding.columns, columns))
        for row in _parts(self.unfolding.rows, rows):
            for column in across:
                target = out[row.target, column.target]
                if row.pick is None and column.pick is None:
                    self._read_box(row.box, column.box, target)
                else:
                    self._read_picked(row, column, target)

    def _read_picked(self, row: _Part, column: _Part, target: np.ndarray) -> None:
        """Read entries that are not all of a box, through a temporary: a chunk, or where there are none a band."""
        step = row.size
        if self.parent.axes.chunks is None and row.pick is None and len(row.box) == 1:
            step = max(1, BAND_BYTES // (column.size * target.itemsize))
        for first in range(0, row.size, step):
            box, part = row.box, target
            if step < row.size:
                start = row.box[0][0] + first
                box = ((start, min(start + step, row.box[0][1])),)
                part = target[first : first + step]
            work = np.empty((math.prod(sides_of(box)), column.size), target.dtype)
            self._read_box(box, column.box, work)
            found = work if row.pick is None else work[row.pick]
            part[...] = found if column.pick is None else found[:, column.pick]

    def _read_box(self, rows: Box, columns: Box, target: np.ndarray) -> None:
        """Read all of a box into a rectangle of entries that lie as far apart as they like."""
        # Splitting the axes of a rectangle needs no copy, whatever its strides.
        folded = _split(target, sides_of(rows), sides_of(columns)).transpose(self._back)
        box = self._in_array((*rows, *columns))
        if sides_of(box) == folded.shape:
            self.parent.read_box(box, folded)
            return
        raw = np.empty(sides_of(box), target.dtype)
        self.parent.read_box(box, raw)
        folded[...] = raw[tuple(slice(None, None, step) for step in self.unfolding.steps)]

    def _in_array(self, spans: Box) -> Box:
        """Where a box of the region, rows before columns, lies in the array, axis by axis."""
        unfolding, box = self.unfolding, []
        for at, start, step in zip(self._back, unfolding.starts, unfolding.steps, strict=True):
            first, stop = spans[at]
            box.append((start + first * step, start + (stop - 1) * step + 1))
        return tuple(box)

    def announce(self, rows: Span, columns: Span) -> None:
        """Have the system fetch a rectangle that will be read soon."""
        announce = getattr(self.parent, "announce_box", None)
        if announce is None:
            return
        across = list(_parts(self.unfolding.columns, columns))
        for row in _parts(self.unfolding.rows, rows):
            for column in across:
                announce(self._in_array((*row.box, *column.box)))

    def require_complete(self) -> None:
        """Look for parts of the whole array that are absent; see `check_complete`."""
        check_complete(self.parent)
        if self.parent.spec.absent != self.spec.absent:
            self.spec = self._spec()

    def close(self) -> None:
        """Release the array. Reading again opens it again."""
        self.parent.close()

    def _spec(self) -> MatrixSpec:
        unfolding, spec = self.unfolding, self.parent.spec
        shape = unfolding.rows.size, unfolding.columns.size
        samples = "rows" if unfolding.samples_are_rows else "columns"
        return replace(
            spec,
            shape=shape,
            chunks=self._chunks(),
            edges=self._edges(),
            samples_hint=samples,
            hint_reason=self.parent.axes.why or "as unfolded",
            stored_bytes=spec.stored_bytes if math.prod(shape) == math.prod(self.parent.axes.shape) else None,
            fingerprint=digest(spec.fingerprint, *self._said) if spec.fingerprint else "",
            cautions=spec.cautions + self._cautions(),
            decode_bytes=spec.decode_bytes + self._temporary_bytes(),
            unfolding=unfolding,
            row_names=self._names(unfolding.row_axes, unfolding.rows),
            column_names=self._names(unfolding.column_axes, unfolding.columns),
        )

    def _names(self, axes: tuple[int, ...], side: Side) -> Names | None:
        """Names of rows or columns that stand for a single axis, unless its labels are kept as numbers."""
        if len(axes) > 1 or (self.unfolding.coordinates and self.unfolding.coordinates[axes[0]] is not None):
            return None
        axis, places = axes[0], np.arange(side.lengths[0])
        if side.chosen is not None:
            places = np.flatnonzero(side.chosen)
        return take_names(
            self.parent.axes.labels(axis), self.unfolding.starts[axis] + places * self.unfolding.steps[axis]
        )

    def _chunks(self) -> tuple[int, int]:
        """The smallest rectangle that is read without reading anything twice."""
        unfolding, axes = self.unfolding, self.parent.axes
        if axes.chunks is not None:
            return unfolding.rows.unit, unfolding.columns.unit
        if self.parent.spec.chunks == (1, 1):
            return 1, 1
        stored = range(len(axes.shape))[:: -1 if axes.reversed else 1]
        slowest = next((axis for axis in stored if axes.shape[axis] > 1), stored[0])
        if slowest in unfolding.row_axes:
            return 1, unfolding.columns.size
        # Lines of either kind lie in runs, unless the rows hold the axis that runs fastest.
        return (unfolding.rows.size, 1) if stored[-1] in unfolding.row_axes else (1, 1)

    def _edges(self) -> tuple[tuple[int, ...] | None, tuple[int, ...] | None]:
        if self.parent.axes.chunks is None:
            return None, None
        rows, columns = (
            None if side.even else tuple(side.edges.tolist()) for side in (self.unfolding.rows, self.unfolding.columns)
        )
        return rows, columns

    def _temporary_bytes(self) -> int:
        """What `_read_picked` and `_read_box` hold, beside the panel."""
        item, unfolding = self.parent.spec.dtype.itemsize, self.unfolding
        partial = unfolding.features.chosen is not None or max(unfolding.steps) > 1
        if self.parent.axes.chunks is None:
            row = math.prod(unfolding.columns.largest) * max(unfolding.steps) * item
            return (BAND_BYTES + 2 * row) if partial else BAND_BYTES
        # A chunk as it is read, and where places are left out, what is taken of it.
        return math.prod(self.parent.axes.chunks) * item * (2 if partial else 1)

    def _cautions(self) -> tuple[str, ...]:
        unfolding, axes = self.unfolding, self.parent.axes
        words = []
        if unfolding.lengths != axes.shape:
            region = ", ".join(
                f"{name} {show_span(start, step, length)}"
                for name, start, step, length, side in zip(
                    unfolding.names, unfolding.starts, unfolding.steps, unfolding.lengths, axes.shape, strict=True
                )
                if length < side
            )
            words.append(f"part of {show_shape(axes.shape)}: {region}")
        chosen = unfolding.features.chosen
        if chosen is not None:
            words.append(f"mask: {show_count(unfolding.features.size)} of {show_count(chosen.size)} features are taken")
        more = self._decoded_share()
        if axes.chunks is not None and more > _WORTH_SAYING:
            words.append(f"whole chunks are decoded, {more:.2f} × the entries that are taken")
        return tuple(words)

    def _decoded_share(self) -> float:
        """Entries of all chunks that are touched, over those that are taken."""
        unfolding, axes = self.unfolding, self.parent.axes
        touched = 1
        for axes_of_side, side in ((unfolding.row_axes, unfolding.rows), (unfolding.column_axes, unfolding.columns)):
            count = np.ones((), np.int64)
            for axis, cuts in zip(axes_of_side, side.cuts, strict=True):
                borders, start, step = axes.cuts(axis), unfolding.starts[axis], unfolding.steps[axis]
                at = np.searchsorted(borders, start + cuts[:-1] * step, "right") - 1
                count = np.multiply.outer(count, np.diff(borders)[at])
            touched *= int(side.kept(count).sum())
        return touched / (unfolding.rows.size * unfolding.columns.size)


def _parts(side: Side, span: Span) -> Iterator[_Part]:
    """Boxes that hold a range of one side."""
    for tile, start, stop in side.touched(*span):
        box, pick = side.part(tile, start, stop)
        first = int(side.edges[tile]) + start - span[0]
        yield _Part(slice(first, first + stop - start), box, pick)


def _split(target: np.ndarray, rows: tuple[int, ...], columns: tuple[int, ...]) -> np.ndarray:
    """A rectangle as an array with an axis for each that its sides stand for; the same memory."""
    strides: list[int] = []
    for sides, stride in ((rows, target.strides[0]), (columns, target.strides[1])):
        strides += [stride * math.prod(sides[number + 1 :]) for number in range(len(sides))]
    return np.lib.stride_tricks.as_strided(target, (*rows, *columns), strides)


def show_span(start: int, step: int, length: int) -> str:
    """A part of an axis as it is typed.

    >>> show_span(10, 2, 5)
    '10:19:2'
    """
    stop = start + (length - 1) * step + 1
    return f"{start}:{stop}" + (f":{step}" if step > 1 else "")


def unfold(parent: ArraySource, choice: AxisChoice) -> Source:
    """Make a matrix of an array; one of two axes of which nothing else is asked stays as it is.

    Raises
    ------
    OptionError
        If axes, region or mask are not those of this array, or nothing says which axes are the samples.
    """
    axes, spec = parent.axes, parent.spec
    if len(axes.shape) == 2 and not choice:
        return parent
    if spec.samples_hint == CONTRADICTORY and choice.sample_axes is None:
        raise OptionError(
            f"{spec.name}: markers in the file contradict each other about which axis holds the samples",
            evidence=[spec.hint_reason],
            remedy="Say it: --sample-axes 0 or --sample-axes 1.",
        )
    samples = sample_axes_of(axes, choice.sample_axes, spec.name)
    region = region_of(axes, choice.region, spec.name)
    features = tuple(axis for axis in range(len(axes.shape)) if axis not in samples)
    mask, marks = None, ""
    if choice.mask is not None:
        whole, where = load_mask(choice.mask, parent)
        whole = check_mask(whole, tuple(axes.shape[axis] for axis in features), where)
        mask = whole[np.ix_(*(region[axis] for axis in features))]
        _require_some(mask, where)
        marks = digest(mask.shape, np.packbits(mask).tobytes().hex())
    unfolding = plan_unfolding(axes, samples, region, mask, spec.dtype.itemsize)
    if len(axes.shape) > 2:
        # Those of a matrix are names of its rows and columns, whatever part of it is taken.
        unfolding = replace(unfolding, coordinates=load_coordinates(parent, region))
    return UnfoldedSource(parent, unfolding, ("unfolded", samples, region, marks))


def _require_some(mask: np.ndarray, where: str) -> None:
    if not mask.any():
        raise OptionError(f"{where} chooses no feature", remedy="Give a mask with at least one entry that is true.")

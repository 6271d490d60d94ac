"""Half-open boxes of an array, rectangles where it has two axes, and the chunks they touch."""

from __future__ import annotations

import bisect
import itertools
import math
from collections.abc import Callable, Iterator, Sequence

import numpy as np

from bigsvd.errors import UnsupportedMatrixError
from bigsvd.source.spec import MatrixSpec
from bigsvd.units import show_bytes, show_count, show_shape

Span = tuple[int, int]
Box = tuple[Span, ...]
BAND_BYTES = 4 * 2**20
# Marks of chunks that are there take a byte each; beyond this, more than 100 MB.
MOST_MARKED = 100_000_000
# No machine reads more in a week, nor holds a larger chunk.
MOST_MATRIX, MOST_CHUNK = 2**50, 2**36


def require_rectangle(spec: MatrixSpec, rows: Span, columns: Span, out: np.ndarray) -> None:
    """Refuse a rectangle outside the matrix, or a buffer that does not fit it: mistakes of the calling code."""
    for axis, (start, stop), side in (("rows", rows, spec.shape[0]), ("columns", columns, spec.shape[1])):
        if not 0 <= start <= stop <= side:
            raise ValueError(f"{axis} {start}:{stop} asked of a matrix with {side}")
    wanted = (rows[1] - rows[0], columns[1] - columns[0])
    if out.shape != wanted or out.dtype != spec.dtype:
        raise ValueError(f"buffer is {out.dtype} {out.shape}, the rectangle needs {spec.dtype} {wanted}")


def require_box(shape: tuple[int, ...], dtype: np.dtype, box: Box, out: np.ndarray) -> None:
    """Refuse a box outside an array, or a buffer that does not fit it: mistakes of the calling code."""
    if len(box) != len(shape) or any(
        not 0 <= start <= stop <= side for (start, stop), side in zip(box, shape, strict=True)
    ):
        raise ValueError(f"box {box} asked of an array of shape {shape}")
    if out.shape != sides_of(box) or out.dtype != dtype:
        raise ValueError(f"buffer is {out.dtype} {out.shape}, the box needs {dtype} {sides_of(box)}")


def sides_of(box: Box) -> tuple[int, ...]:
    """Shape of what a box holds."""
    return tuple(stop - start for start, stop in box)


def touched(box: Box, chunks: Sequence[int]) -> Iterator[tuple[int, ...]]:
    """Coordinates, in the chunk grid, of all chunks that a box touches, in storage order."""
    if all(start < stop for start, stop in box):
        ranges = (range(span[0] // chunk, (span[1] - 1) // chunk + 1) for span, chunk in zip(box, chunks, strict=True))
        yield from itertools.product(*ranges)


def inside(place: tuple[int, ...], chunks: Sequence[int], box: Box) -> tuple[tuple[slice, ...], tuple[slice, ...]]:
    """Where a chunk and a box overlap: inside the chunk, and inside the box's buffer."""
    pairs = [overlap(number, chunk, span) for number, chunk, span in zip(place, chunks, box, strict=True)]
    return tuple(inner for inner, _ in pairs), tuple(outer for _, outer in pairs)


def clip_box(place: tuple[int, ...], chunks: Sequence[int], box: Box) -> Box:
    """Part of a box that lies in one chunk."""
    return tuple(clip(number, chunk, span) for number, chunk, span in zip(place, chunks, box, strict=True))


def merged(array: np.ndarray, split: int) -> np.ndarray | None:
    """The same memory with all axes before `split` run together, and all others; None where it does not lie so."""
    if array.ndim == 2 and split == 1:
        return array
    sides, strides = [], []
    for axes in (range(split), range(split, array.ndim)):
        side, stride = 1, array.itemsize
        for axis in reversed(axes):
            if array.shape[axis] == 1:
                continue
            if side > 1 and array.strides[axis] != stride * side:
                return None
            stride = stride if side > 1 else array.strides[axis]
            side *= array.shape[axis]
        sides.append(side)
        strides.append(stride)
    return np.lib.stride_tricks.as_strided(array, sides, strides)


def as_matrix(
    shape: tuple[int, ...], part: tuple[slice, ...], out: np.ndarray
) -> tuple[tuple[int, int], slice, slice, np.ndarray] | None:
    """A part of an array in C order as a rectangle of a matrix: its shape, rows, columns, and the buffer to match.

    Leading axes run together into rows, trailing ones into columns; None where neither part nor buffer allow it.
    """

    def whole(axes: range) -> bool:
        return all(part[axis].stop - part[axis].start == shape[axis] for axis in axes)

    for split in range(1, len(shape)):
        if whole(range(1, split)) and whole(range(split + 1, len(shape))):
            flat = merged(out, split)
            if flat is not None:
                left, right = math.prod(shape[1:split]), math.prod(shape[split + 1 :])
                rows = slice(part[0].start * left, part[0].stop * left)
                columns = slice(part[split].start * right, part[split].stop * right)
                return (shape[0] * left, shape[split] * right), rows, columns, flat
    return None


def overlap(position: int, chunk: int, span: Span) -> tuple[slice, slice]:
    """Where chunk number `position` and `span` overlap: inside the chunk, and inside the span's buffer."""
    first = position * chunk
    start, stop = max(first, span[0]), min(first + chunk, span[1])
    return slice(start - first, stop - first), slice(start - span[0], stop - span[0])


def clip(position: int, chunk: int, span: Span) -> Span:
    """Part of `span` that lies in chunk number `position`."""
    return max(position * chunk, span[0]), min((position + 1) * chunk, span[1])


def grid_shape(shape: tuple[int, ...], chunks: tuple[int, ...]) -> tuple[int, ...]:
    """Number of chunks along each axis."""
    return tuple(-(-side // chunk) for side, chunk in zip(shape, chunks, strict=True))


def require_countable(grid: tuple[int, ...], name: str) -> None:
    """Refuse a grid of more chunks than can be marked in memory, whatever the metadata say."""
    if math.prod(grid) > MOST_MARKED:
        raise UnsupportedMatrixError(
            f"{name} has {show_count(math.prod(grid))} chunks, more than the {show_count(MOST_MARKED)} handled here",
            remedy="Write it again in chunks of about a megabyte.",
        )


def require_sizes(shape: tuple[int, ...], chunks: tuple[int, ...] | None, item: int, name: str) -> None:
    """Refuse sizes that nothing stored can have, before anything is allocated or counted by them."""
    if chunks is not None:
        require_countable(grid_shape(shape, chunks), name)
    for what, sides, most in (("a matrix", shape, MOST_MATRIX), ("chunks", chunks or (0, 0), MOST_CHUNK)):
        size = math.prod(sides) * item
        if size > most:
            raise UnsupportedMatrixError(
                f"{name} declares {what} of {show_bytes(size)}, more than the {show_bytes(most)} handled here",
                evidence=[f"{show_shape(sides)} entries of {item} bytes"],
                remedy="Copy the file again if it is smaller than that: what it says of itself is damaged.",
            )


def fill_by_bands(fill: Callable[[Box, np.ndarray], None], box: Box, out: np.ndarray, chunk_rows: int) -> None:
    """Fill a buffer that does not lie in one piece, through a temporary of whole chunks and about 4 MiB."""
    rows = box[0]
    row_bytes = max(1, math.prod(out.shape[1:]) * out.itemsize)
    band = chunk_rows * max(1, BAND_BYTES // (chunk_rows * row_bytes))
    for number in range(rows[0] // band, (rows[1] - 1) // band + 1):
        start, stop = clip(number, band, rows)
        part = np.empty((stop - start, *out.shape[1:]), out.dtype)
        fill(((start, stop), *box[1:]), part)
        out[start - rows[0] : stop - rows[0]] = part


def tiles(spec: MatrixSpec, rows: Span, columns: Span, most_bytes: int = BAND_BYTES) -> Iterator[tuple[Span, Span]]:
    """Cut a rectangle into tiles of whole chunks, in storage order; whole along the rows where that is small enough.

    Parameters
    ----------
    spec : MatrixSpec
    rows, columns : (int, int)
    most_bytes : int
        Of a tile; a single chunk may be more, unless parts of it can be read alone.
    """
    unit, most = _unit(spec), max(1, most_bytes // spec.dtype.itemsize)
    # From the edge of a chunk on, so that none is touched twice.
    width = columns[1] - (spec.whole_chunks(1, *columns)[0] if spec.edges[1] else columns[0] // unit[1] * unit[1])
    wide = unit[1] * max(1, min(-(-width // unit[1]), most // (unit[0] * unit[1])))
    if wide < width:
        # Not the whole width: tiles of one chunk's height follow each other along the row.
        high = unit[0]
    else:
        wide, high = columns[1], unit[0] * max(1, most // (unit[0] * max(1, width)))
    for span in _pieces(spec.edges[0], rows, high):
        for across in _pieces(spec.edges[1], columns, wide):
            yield span, across


def _pieces(edges: tuple[int, ...] | None, span: Span, length: int) -> Iterator[Span]:
    """Cut a range where chunks end, into pieces of at most so many lines, or of one chunk."""
    if edges is None:
        for number in range(span[0] // length, -(-span[1] // length)):
            yield clip(number, length, span)
        return
    start = span[0]
    while start < span[1]:
        whole = bisect.bisect_right(edges, start)
        last = max(whole, bisect.bisect_right(edges, edges[whole - 1] + length) - 1)
        stop = min(edges[last], span[1])
        yield start, stop
        start = stop


def tile_bytes(spec: MatrixSpec, most_bytes: int = BAND_BYTES) -> int:
    """Most bytes of a tile of such a matrix."""
    unit = _unit(spec)
    return min(max(most_bytes, unit[0] * unit[1] * spec.dtype.itemsize), spec.decoded_bytes)


def _unit(spec: MatrixSpec) -> tuple[int, int]:
    """What a tile is made of: a chunk, but entries that lie in rows as they are can be read in parts of a row."""
    return (1, 1) if spec.storage == "plain" and spec.chunks[0] == 1 else spec.chunks


def show_place(*box: Span) -> str:
    """Name a rectangle, or a box of more axes, for people, counting from 0."""
    if len(box) == 2:
        rows, columns = box
        return (
            f"rows {show_count(rows[0])} to {show_count(rows[1] - 1)}, "
            f"columns {show_count(columns[0])} to {show_count(columns[1] - 1)} (counted from 0)"
        )
    spans = (f"axis {axis} {show_count(start)} to {show_count(stop - 1)}" for axis, (start, stop) in enumerate(box))
    return f"{', '.join(spans)} (counted from 0)"


def show_chunk(coordinates: tuple[int, ...], shape: tuple[int, ...], chunks: tuple[int, ...]) -> str:
    """Name a chunk by its coordinates in the grid and the entries it holds."""
    spans = (
        (position * chunk, min((position + 1) * chunk, side))
        for position, chunk, side in zip(coordinates, chunks, shape, strict=True)
    )
    return f"chunk ({', '.join(map(str, coordinates))}): {show_place(*spans)}"

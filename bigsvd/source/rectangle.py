"""Half-open rectangles of a matrix and the chunks they touch."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np

from bigsvd.errors import UnsupportedMatrixError
from bigsvd.source.spec import MatrixSpec
from bigsvd.units import show_bytes, show_count, show_shape

Span = tuple[int, int]
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


def touched(rows: Span, columns: Span, chunks: tuple[int, int]) -> Iterator[tuple[int, int]]:
    """Coordinates, in the chunk grid, of all chunks that a rectangle touches, in storage order."""
    if rows[0] < rows[1] and columns[0] < columns[1]:
        for i in range(rows[0] // chunks[0], (rows[1] - 1) // chunks[0] + 1):
            for j in range(columns[0] // chunks[1], (columns[1] - 1) // chunks[1] + 1):
                yield i, j


def overlap(position: int, chunk: int, span: Span) -> tuple[slice, slice]:
    """Where chunk number `position` and `span` overlap: inside the chunk, and inside the span's buffer."""
    first = position * chunk
    start, stop = max(first, span[0]), min(first + chunk, span[1])
    return slice(start - first, stop - first), slice(start - span[0], stop - span[0])


def clip(position: int, chunk: int, span: Span) -> Span:
    """Part of `span` that lies in chunk number `position`."""
    return max(position * chunk, span[0]), min((position + 1) * chunk, span[1])


def grid_shape(shape: tuple[int, int], chunks: tuple[int, int]) -> tuple[int, int]:
    """Number of chunks along each axis."""
    return -(-shape[0] // chunks[0]), -(-shape[1] // chunks[1])


def require_countable(grid: tuple[int, int], name: str) -> None:
    """Refuse a grid of more chunks than can be marked in memory, whatever the metadata say."""
    if grid[0] * grid[1] > MOST_MARKED:
        raise UnsupportedMatrixError(
            f"{name} has {show_count(grid[0] * grid[1])} chunks, more than the {show_count(MOST_MARKED)} handled here",
            remedy="Write it again in chunks of about a megabyte.",
        )


def require_sizes(shape: tuple[int, int], chunks: tuple[int, int] | None, item: int, name: str) -> None:
    """Refuse sizes that nothing stored can have, before anything is allocated or counted by them."""
    if chunks is not None:
        require_countable(grid_shape(shape, chunks), name)
    for what, sides, most in (("a matrix", shape, MOST_MATRIX), ("chunks", chunks or (0, 0), MOST_CHUNK)):
        size = sides[0] * sides[1] * item
        if size > most:
            raise UnsupportedMatrixError(
                f"{name} declares {what} of {show_bytes(size)}, more than the {show_bytes(most)} handled here",
                evidence=[f"{show_shape(sides)} entries of {item} bytes"],
                remedy="Copy the file again if it is smaller than that: what it says of itself is damaged.",
            )


def fill_by_bands(
    fill: Callable[[Span, Span, np.ndarray], None], rows: Span, columns: Span, out: np.ndarray, chunk_rows: int
) -> None:
    """Fill a buffer that does not lie in one piece, through a temporary of whole chunks and about 4 MiB."""
    row_bytes = max(1, out.shape[1] * out.itemsize)
    band = chunk_rows * max(1, BAND_BYTES // (chunk_rows * row_bytes))
    for number in range(rows[0] // band, (rows[1] - 1) // band + 1):
        start, stop = clip(number, band, rows)
        part = np.empty((stop - start, out.shape[1]), out.dtype)
        fill((start, stop), columns, part)
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
    width = columns[1] - columns[0] // unit[1] * unit[1]
    wide = unit[1] * max(1, min(-(-width // unit[1]), most // (unit[0] * unit[1])))
    if wide < width:
        # Not the whole width: tiles of one chunk's height follow each other along the row.
        high = unit[0]
    else:
        wide, high = columns[1], unit[0] * max(1, most // (unit[0] * max(1, width)))
    for i, j in touched(rows, columns, (high, wide)):
        yield clip(i, high, rows), clip(j, wide, columns)


def tile_bytes(spec: MatrixSpec, most_bytes: int = BAND_BYTES) -> int:
    """Most bytes of a tile of such a matrix."""
    unit = _unit(spec)
    return min(max(most_bytes, unit[0] * unit[1] * spec.dtype.itemsize), spec.decoded_bytes)


def _unit(spec: MatrixSpec) -> tuple[int, int]:
    """What a tile is made of: a chunk, but entries that lie in rows as they are can be read in parts of a row."""
    return (1, 1) if spec.storage == "plain" and spec.chunks[0] == 1 else spec.chunks


def show_place(rows: Span, columns: Span) -> str:
    """Name a rectangle for people, counting from 0."""
    return (
        f"rows {show_count(rows[0])} to {show_count(rows[1] - 1)}, "
        f"columns {show_count(columns[0])} to {show_count(columns[1] - 1)} (counted from 0)"
    )


def show_chunk(coordinates: tuple[int, int], shape: tuple[int, int], chunks: tuple[int, int]) -> str:
    """Name a chunk by its coordinates in the grid and the entries it holds."""
    rows, columns = (
        (position * chunk, min((position + 1) * chunk, side))
        for position, chunk, side in zip(coordinates, chunks, shape, strict=True)
    )
    return f"chunk ({coordinates[0]}, {coordinates[1]}): {show_place(rows, columns)}"

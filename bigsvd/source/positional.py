"""Parts of an unencoded row-major array read by position in its file, straight into a buffer."""

from __future__ import annotations

import contextlib
import itertools
import math
import os

import numpy as np

from bigsvd.source.persist import persist
from bigsvd.source.rectangle import Box, Span, merged

# Rows of at least this size are read to where they belong: 7 GB/s a core with 8 kB, and 3.6 with 2 kB, for which the
# way over a temporary makes 4.4.
_ROW_BYTES = 4096
# As many buffers one system call takes (IOV_MAX).
_MOST_ROWS = 1024
# Shorter ones are fetched together with what lies between them, in a temporary of this size. A quarter was as fast for
# one thread, but two spent a third of their time waiting for Python's lock ...
_SPAN_BYTES = 2**20
# ... unless more than this lies between: then a system call a row costs less than reading it.
_GAP_BYTES = 64 * 2**10


def reading_bytes(row_bytes: int) -> int:
    """Most bytes held beside the panel while rows of so many bytes are read."""
    return _SPAN_BYTES + row_bytes


def read_rows(
    descriptor: int, offset: int, width: int, stored: np.dtype, rows: Span, columns: Span, out: np.ndarray
) -> None:
    """Read rows × columns of an array with `width` columns that begins at byte `offset`.

    Parameters
    ----------
    descriptor : int
        Open file; its position is neither used nor moved, so that threads may share it.
    offset, width : int
        First byte of the array, entries of a row.
    stored : numpy.dtype
        Type of the entries in the file.
    rows, columns : (int, int)
        Half-open rectangle.
    out : ndarray, shape (rows, columns)
        Any strides; native type of the entries.

    Raises
    ------
    EOFError
        If the file ends before the rectangle does.
    """
    height, count = out.shape
    if not out.size:
        return
    row_bytes, item = width * stored.itemsize, stored.itemsize
    start = offset + rows[0] * row_bytes + columns[0] * item
    same_bytes = stored.newbyteorder("=") == out.dtype
    if same_bytes and out.flags.c_contiguous and count == width:
        fill_from(descriptor, start, out.reshape(-1).view(np.uint8).data)
        if not stored.isnative:
            out.byteswap(inplace=True)
        return
    gap = row_bytes - count * item
    straight = same_bytes and stored.isnative and out.strides[1] == item
    if straight and count * item >= _ROW_BYTES and (gap == 0 or gap > _GAP_BYTES):
        _scatter(descriptor, start, row_bytes, out.view(np.uint8), together=gap == 0)
        return
    band = min(height, max(1, _SPAN_BYTES // row_bytes) if gap <= _GAP_BYTES else 1)
    raw = np.empty((band - 1) * row_bytes + count * item, np.uint8)
    for first in range(0, height, band):
        last = min(first + band, height)
        fill_from(descriptor, start + first * row_bytes, raw[: (last - first - 1) * row_bytes + count * item].data)
        out[first:last] = np.ndarray((last - first, count), stored, raw, strides=(row_bytes, item))


def read_box(descriptor: int, offset: int, shape: tuple[int, ...], stored: np.dtype, box: Box, out: np.ndarray) -> None:
    """Read a box of an array of two or more axes that begins at byte `offset`.

    Parameters
    ----------
    descriptor : int
        As for `read_rows`.
    offset : int
        First byte of the array.
    shape : tuple of int
        Of the whole array, in C order.
    stored : numpy.dtype
    box : tuple of (int, int)
        Half-open, a span for each axis.
    out : ndarray, shape of the box
        Any strides; native type of the entries.

    Raises
    ------
    EOFError
        If the file ends before the box does.
    """
    if not out.size:
        return
    # Axes behind the last that is not whole run together with it; so do those of the buffer, if they lie so.
    parted = max((axis for axis, span in enumerate(box) if span != (0, shape[axis])), default=0)
    for lead in range(max(0, parted - 1), len(shape) - 1):
        if merged(out[(0,) * lead], 1) is not None:
            break
    width, inner = math.prod(shape[lead + 1 :]), math.prod(shape[lead + 2 :])
    columns = (box[lead + 1][0] * inner, box[lead + 1][1] * inner)
    strides = [math.prod(shape[axis + 1 :]) * stored.itemsize for axis in range(lead)]
    for place in itertools.product(*(range(*span) for span in box[:lead])):
        part = merged(out[tuple(at - span[0] for at, span in zip(place, box, strict=False))], 1)
        assert part is not None
        start = offset + sum(at * stride for at, stride in zip(place, strides, strict=True))
        read_rows(descriptor, start, width, stored, box[lead], columns, part)


def _scatter(descriptor: int, start: int, row_bytes: int, out: np.ndarray, *, together: bool) -> None:
    """Read each row to where it belongs; those that lie together in the file by one call for many."""
    step = _MOST_ROWS if together else 1
    for first in range(0, len(out), step):
        part = out[first : first + step]
        position = start + first * row_bytes
        done = os.preadv(descriptor, list(part), position) // out.shape[1]
        # One call may return less than was asked for; what is still missing is read row by row.
        for number in range(done, len(part)):
            fill_from(descriptor, position + number * row_bytes, part[number].data)


def announce(descriptor: int, offset: int, size: int) -> None:
    """Tell the system that these bytes will be read soon: it fetches them into its cache while the caller goes on."""
    if hasattr(os, "posix_fadvise"):
        # A device that cannot seek, or a file system that does not care, is no fault of the reader.
        with contextlib.suppress(OSError):
            os.posix_fadvise(descriptor, offset, size, os.POSIX_FADV_WILLNEED)


def announce_rows(descriptor: int, offset: int, row_bytes: int, rows: Span) -> None:
    """Announce whole rows of an array that begins at byte `offset`."""
    announce(descriptor, offset + rows[0] * row_bytes, (rows[1] - rows[0]) * row_bytes)


class Descriptor:
    """An open file that threads read by position; closed with its last owner."""

    def __init__(self, path: str) -> None:
        self.number = persist(lambda: os.open(path, os.O_RDONLY | os.O_CLOEXEC))

    def close(self) -> None:
        """Close the file; once is enough."""
        if self.number >= 0:
            os.close(self.number)
        self.number = -1

    def __del__(self) -> None:
        if hasattr(self, "number"):
            self.close()


def fill_from(descriptor: int, position: int, buffer: memoryview) -> None:
    """Fill a buffer from a position; one call may return less than was asked for (Linux: at most 2 GiB)."""
    done = 0
    while done < len(buffer):
        got = os.preadv(descriptor, [buffer[done:]], position + done)
        if got == 0:
            raise EOFError(f"the file ends at byte {position + done:,}, {len(buffer) - done:,} bytes too early")
        done += got

"""Rows of an unencoded row-major array read by position in its file, straight into a buffer."""

from __future__ import annotations

import contextlib
import os

import numpy as np

from bigsvd.source.rectangle import Span

# Part rows are fetched together with what lies between them, in a temporary of this size, which stays in a core's
# second cache (6 GB/s; with 4 MiB it was 2 to 5) ...
_SPAN_BYTES = 256 * 2**10
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
    band = max(1, _SPAN_BYTES // row_bytes) if row_bytes - count * item <= _GAP_BYTES else 1
    for first in range(0, height, band):
        last = min(first + band, height)
        span = (last - first - 1) * row_bytes + count * item
        raw = np.empty(span, np.uint8)
        fill_from(descriptor, start + first * row_bytes, raw.data)
        part = np.ndarray((last - first, count), stored, raw, strides=(row_bytes, item))
        out[first:last] = part


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
        self.number = os.open(path, os.O_RDONLY | os.O_CLOEXEC)

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

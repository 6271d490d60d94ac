"""Undoing the byte shuffle on the way from a decoded chunk into a panel."""

from __future__ import annotations

import struct

import numpy as np

from bigsvd.source.workspace import Workspace

# A header of Blosc (version 2; flags: bytes shuffled, blocks not split, LZ4), its table of one block, and the size of
# that block, which says that it is stored as it is.
_BOX = struct.Struct("<4B5I")
_FLAGS = 1 | 16 | 1 << 5
# Bytes brought together at a time: planes, the library's copy and the result stay in a core's second cache. Of 64 to
# 512 KiB this was the fastest, 6 GB/s where strided copies of numpy reach 2.5 to 4.
_BAND = 192 * 2**10
_PLANES, _ENTRIES = 10, 11


def unshuffle(
    stored: np.ndarray, dtype: np.dtype, chunk: tuple[int, int], rows: slice, columns: slice, out: np.ndarray,
    workspace: Workspace,
) -> None:  # fmt: skip
    """Bring the bytes of each entry together, for a rectangle of a chunk.

    Shuffled, a chunk holds the first bytes of all entries, then all second ones, and so on. Some rows at a time are
    put into a Blosc chunk that is shuffled but not compressed, and its vectorised code does the rest.

    Parameters
    ----------
    stored : ndarray of uint8, shape (chunk entries × bytes of an entry,)
    dtype : numpy.dtype
        Type of the stored entries, of more than one byte; another byte order is turned on the way, at no cost.
    chunk : (int, int)
        Rows and columns of the chunk.
    rows, columns : slice
        Part of it that is wanted.
    out : ndarray
        Native type, shape of that part.
    workspace : Workspace
    """
    from imagecodecs import blosc_decode

    item = dtype.itemsize
    # The two floats of a complex number are turned each in its place.
    parts = 2 if dtype.kind == "c" else 1
    planes = stored.reshape(parts, item // parts, *chunk)[:, :: 1 if dtype.isnative else -1, rows, columns]
    step = min(out.shape[1], max(1, _BAND // item))
    band = max(1, _BAND // (step * item))
    box = workspace.buffer(_PLANES, _BOX.size + band * step * item)
    work = workspace.buffer(_ENTRIES, band * step * item)
    for top in range(0, out.shape[0], band):
        for left in range(0, out.shape[1], step):
            part = out[top : top + band, left : left + step]
            size = part.size * item
            _BOX.pack_into(box.data, 0, 2, 1, _FLAGS, item, size, size, _BOX.size + size, 20, size)
            body = box[_BOX.size : _BOX.size + size].reshape(parts, item // parts, *part.shape)
            body[...] = planes[:, :, top : top + band, left : left + step]
            blosc_decode(box[: _BOX.size + size], numthreads=1, out=work[:size])
            part[...] = work[:size].view(out.dtype).reshape(part.shape)

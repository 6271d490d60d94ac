"""The Blosc2 filter of HDF5: a contiguous frame around one chunk, whose entries may stand in blocks."""

from __future__ import annotations

import math
import struct

import numpy as np

from bigsvd.source import codecs
from bigsvd.source.codecs import FramingUnknownError, Stretch

_MAGIC = b"\xa8b2frame\0"
# Where the metadata of a frame begin, and the markers of msgpack with which they do.
_FIXED = 87
_METADATA = struct.Struct(">BxxxBH")
_ARRAY = b"\xa4b2nd\xd2"
# In the header of a chunk, little-endian: bytes decoded, bytes of a block, bytes of the chunk.
_CHUNK = struct.Struct("<4x3i")
_CHUNK_HEADER = 32
Sides = tuple[int, int]


def blosc2(held: Stretch, free: Stretch, options: tuple[int, ...]) -> Stretch:
    """Undo the filter where the frame holds one chunk, of plain bytes or of a two-dimensional array.

    The header of a frame is msgpack with fixed places, big-endian: its own size at 11, decoded size at 30, size of an
    entry at 48, of a chunk at 58, metadata from 87; the chunk follows it. An array tells in the metadata ``b2nd`` the
    sides of its chunk and of its blocks: entries stand block by block, and the blocks at the edge are filled up
    (c-blosc2, README_CFRAME_FORMAT and README_B2ND_METALAYER, from memory).
    """
    from imagecodecs import blosc2_decode

    stored = held.bytes
    if stored.size < _FIXED + _CHUNK_HEADER or stored[1:10].tobytes() != _MAGIC:
        raise FramingUnknownError("bytes that are no contiguous frame of Blosc2")
    raw = stored.data
    (header,), (decoded,) = struct.unpack_from(">i", raw, 11), struct.unpack_from(">q", raw, 30)
    (item,), (chunk,) = struct.unpack_from(">i", raw, 48), struct.unpack_from(">i", raw, 58)
    if not _FIXED <= header <= stored.size - _CHUNK_HEADER or decoded != chunk or item < 1:
        raise FramingUnknownError(f"a Blosc2 frame of {decoded:,} bytes in chunks of {chunk:,}")
    size, _, length = _CHUNK.unpack_from(raw, header)
    if size != chunk or not _CHUNK_HEADER <= length <= stored.size - header:
        raise FramingUnknownError(f"a Blosc2 chunk of {size:,} bytes stored in {length:,}")
    body = stored[header : header + length]
    sides = _sides(stored[:header].tobytes())
    if sides is None:
        codecs.require_room(size, free.bytes)
        return free.first(len(blosc2_decode(body, numthreads=1, out=free.bytes)))
    shape, block = sides
    # Filled up to whole blocks, each side is less than twice as long.
    if size != math.prod(_whole_blocks(shape, block)) * item or size > 4 * free.size:
        raise FramingUnknownError(f"a Blosc2 array of {size:,} bytes, chunk {shape}, blocks {block}")
    codecs.require_room(math.prod(shape) * item, free.bytes)
    padded = np.empty(size, np.uint8)
    done = len(blosc2_decode(body, numthreads=1, out=padded))
    if done != size:
        raise ValueError(f"decodes to {done:,} bytes, its blocks have {size:,}")
    out = free.first(math.prod(shape) * item)
    _from_blocks(padded.view(f"V{item}"), block, out.bytes.view(f"V{item}").reshape(shape))
    return out


def _whole_blocks(shape: Sides, block: Sides) -> Sides:
    """Sides of a chunk that is filled up to whole blocks."""
    return -(-shape[0] // block[0]) * block[0], -(-shape[1] // block[1]) * block[1]


def _from_blocks(entries: np.ndarray, block: Sides, out: np.ndarray) -> None:
    """Bring entries that stand block by block into rows."""
    whole = _whole_blocks(out.shape, block)
    blocks = entries.reshape(whole[0] // block[0], whole[1] // block[1], *block)
    for row in range(blocks.shape[0]):
        for column in range(blocks.shape[1]):
            part = out[row * block[0] :, column * block[1] :][: block[0], : block[1]]
            part[...] = blocks[row, column, : part.shape[0], : part.shape[1]]


def _sides(header: bytes) -> tuple[Sides, Sides] | None:
    """Sides of chunk and block of a two-dimensional array; None where the frame holds bytes without axes."""
    if len(header) < _FIXED + _METADATA.size:
        raise FramingUnknownError("a Blosc2 frame with a short header")
    triple, mapping, count = _METADATA.unpack_from(header, _FIXED)
    if (triple, mapping) == (0x93, 0xDE) and count == 0:
        return None
    name = _FIXED + _METADATA.size
    if (triple, mapping, count) != (0x93, 0xDE, 1) or header[name : name + 6] != _ARRAY:
        raise FramingUnknownError("a Blosc2 frame with metadata of another kind")
    # Five bytes of length; then version, axes, three arrays: shape (int64), chunk and block (int32).
    start = struct.unpack_from(">i", header, name + 6)[0] + 5
    if not _FIXED <= start <= len(header) - 44 or header[start + 2] != 2:
        raise FramingUnknownError("a Blosc2 array that has not two axes")
    chunk, block = struct.unpack_from(">xxixi", header, start + 22), struct.unpack_from(">xxixi", header, start + 33)
    if min(*chunk, *block) < 1:
        raise FramingUnknownError(f"a Blosc2 array in chunks {chunk} and blocks {block}")
    return (chunk[0], chunk[1]), (block[0], block[1])

"""The bitshuffle filter of HDF5: blocks of transposed bits, each compressed by LZ4 or Zstandard.

Its blocks are those of a Blosc chunk under another header. One chunk of a megabyte has 128 of them, and a call for
each would hold Python's lock most of the time; so the header is exchanged where the bytes lie, and one call of Blosc's
vectorised code undoes both steps for all blocks.
"""

from __future__ import annotations

import struct
from collections.abc import Callable

import numpy as np

from bigsvd.source import codecs
from bigsvd.source.codecs import Stretch

_HEADER = struct.Struct(">QI")
_SIZE = struct.Struct(">I")
_BLOSC_SIZE = struct.Struct("<I")
_BLOSC_HEADER = struct.Struct("<4B3I")
# Bytes of a block where the writer chooses, about.
_USUAL_BLOCK = 8192
# Flags of Blosc: bits transposed, blocks not split by byte; the codec stands in the three highest bits.
_TRANSPOSED, _WHOLE = 4, 16
_BLOSC_CODEC = {2: 1, 3: 4}
_CODEC: dict[int, Callable[[np.ndarray, np.ndarray], int]] = {2: codecs.lz4, 3: codecs.zstd}


def table_room(decoded: int, options: tuple[int, ...]) -> int:
    """Bytes that Blosc's header and its table of blocks may take, for a chunk of so many bytes."""
    item = max(1, options[2] if len(options) > 2 else 1)
    block = options[3] * item if len(options) > 3 and options[3] else _USUAL_BLOCK
    return _BLOSC_HEADER.size + 4 * (decoded // block + 2)


def bitshuffle(held: Stretch, free: Stretch, options: tuple[int, ...]) -> Stretch:
    """Undo the filter.

    Options: two version numbers, size of an entry, entries of a block (0: chosen by the writer), codec (0 none, 2 LZ4,
    3 Zstandard). With a codec, big-endian: 8 bytes give the decoded size and 4 the bytes of a block; each block has
    4 bytes with its stored size before it. The last block is cut down to a multiple of 8 entries, and the fewer than 8
    entries that remain stand behind it as they are (page of filter 32008 and source of bitshuffle, from memory).
    """
    from imagecodecs import bitshuffle_decode

    item = options[2] if len(options) > 2 else 0
    codec = options[4] if len(options) > 4 else 0
    if not 0 < item < 256 or codec not in (0, *_CODEC):
        raise codecs.FramingUnknownError(f"bitshuffle with options {options}")
    stored = held.bytes
    if not codec:
        codecs.require_room(stored.size, free.bytes)
        entries = options[3] if len(options) > 3 else 0
        out = free.first(stored.size)
        # Of an array it would take the size of an entry from its type.
        bitshuffle_decode(stored.data, itemsize=item, blocksize=entries, out=out.bytes)
        return out
    if stored.size < _HEADER.size:
        raise ValueError(f"{stored.size} bytes, and the header of bitshuffle alone has {_HEADER.size}")
    size, block = _HEADER.unpack_from(stored.data)
    codecs.require_room(size, free.bytes)
    if not block or block % (8 * item):
        raise ValueError(f"blocks of {block:,} bytes are no multiple of 8 entries of {item}")
    out = free.first(size)
    blocked = size // (8 * item) * 8 * item
    end = _undo_blocks(held, out.first(blocked), item, block, codec) if blocked else held.start + _HEADER.size
    rest = held.buffer[end : held.stop]
    if rest.size != size - blocked:
        raise ValueError(f"{rest.size:,} bytes behind the last block, there should be {size - blocked:,}")
    out.bytes[blocked:] = rest
    return out


def _undo_blocks(held: Stretch, out: Stretch, item: int, block: int, codec: int) -> int:
    """Undo all blocks at once; return where the last one ends."""
    from imagecodecs import blosc_decode

    block = min(block, out.size)
    count = -(-out.size // block)
    table = _BLOSC_HEADER.size + 4 * count
    # The header that is replaced has 12 bytes, of which the table may take its part.
    if held.start + _HEADER.size < table:
        moved = np.empty(table + held.size, np.uint8)
        moved[table:] = held.bytes
        shift, held = held.start - table, Stretch(moved, table, moved.size)
    else:
        shift = 0
    places, literal, end = _turn_sizes(held, count, block, out.size)
    begin = held.start + _HEADER.size - table
    box = held.buffer[begin:end]
    flags = _TRANSPOSED | _WHOLE | _BLOSC_CODEC[codec] << 5
    _BLOSC_HEADER.pack_into(box.data, 0, 2, 1, flags, item, out.size, block, len(box))
    box[_BLOSC_HEADER.size : table].view("<u4")[:] = places - begin
    done = len(blosc_decode(box, numthreads=1, out=out.bytes))
    if done != out.size:
        raise ValueError(f"blocks decode to {done:,} bytes, there should be {out.size:,}")
    for number in literal:
        _undo_one(held, int(places[number]), out.bytes[number * block :][:block], item, codec)
    return end + shift


def _turn_sizes(held: Stretch, count: int, block: int, total: int) -> tuple[np.ndarray, np.ndarray, int]:
    """Turn the stored size of each block to the byte order of Blosc.

    Returns where they stand, which blocks Blosc would take for stored as they are since both sizes agree, and where
    the last one ends.
    """
    stored, read = held.buffer.data[: held.stop], _SIZE.unpack_from
    places, place = [], held.start + _HEADER.size
    try:
        # Each size tells where the next one stands: the only loop, 0.2 µs a block.
        for _ in range(count):
            places.append(place)
            place += 4 + read(stored, place)[0]
    except struct.error:
        raise ValueError(f"the bytes end before block {len(places):,} of {count:,}") from None
    if place > held.stop:
        raise ValueError(f"the last block is said to end {place - held.stop:,} bytes behind the stored ones")
    starts = np.array(places)
    sizes = np.diff(starts, append=place) - 4
    held.buffer[starts[:, None] + np.arange(4)] = sizes.astype("<u4").view(np.uint8).reshape(-1, 4)
    decoded = np.full(count, block)
    decoded[-1] = total - (count - 1) * block
    return starts, np.flatnonzero(sizes == decoded), place


def _undo_one(held: Stretch, place: int, out: np.ndarray, item: int, codec: int) -> None:
    """Undo one block by itself."""
    from imagecodecs import bitshuffle_decode

    (size,) = _BLOSC_SIZE.unpack_from(held.buffer.data, place)
    turned = np.empty(out.size, np.uint8)
    done = _CODEC[codec](held.buffer[place + 4 : place + 4 + size], turned)
    if done != out.size:
        raise ValueError(f"a block decodes to {done:,} bytes, there should be {out.size:,}")
    bitshuffle_decode(turned.data, itemsize=item, blocksize=out.size // item, out=out)

"""Decoders that fill a buffer of declared size and never write past it: the one door to the codec libraries.

All of them run outside Python's lock. They raise where stored bytes are damaged or would decode to more than the
buffer holds, so that a damaged size is an error and never an allocation. Libraries are loaded at the first use.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass

import numpy as np

_BLOSC_HEADER = struct.Struct("<4B3I")
# Number of the codec inside Blosc, bits 5 to 7 of its flags.
_BLOSC_SNAPPY = 2
_ZSTD_FRAME, _ZSTD_SKIPPED = 0xFD2FB528, 0x184D2A50


class FramingUnknownError(Exception):
    """Stored bytes may be sound, but are framed in a way that only their own library undoes."""


@dataclass(slots=True)
class Stretch:
    """Bytes `start` to `stop` of a buffer; what lies before them is free."""

    buffer: np.ndarray
    start: int
    stop: int

    @property
    def bytes(self) -> np.ndarray:
        """The bytes themselves, shape (stop - start,)."""
        return self.buffer[self.start : self.stop]

    @property
    def size(self) -> int:
        """How many there are."""
        return self.stop - self.start

    def first(self, size: int) -> Stretch:
        """Its first bytes."""
        return Stretch(self.buffer, self.start, self.start + size)


def inflate(stored: np.ndarray, out: np.ndarray) -> int:
    """Undo deflate in zlib's wrapping, checksum included (RFC 1950), by libdeflate; return the bytes written."""
    from imagecodecs import deflate_decode

    return len(deflate_decode(_some(stored), out=out))


def gunzip(stored: np.ndarray, out: np.ndarray) -> int:
    """Undo deflate in gzip's wrapping, checksum included (RFC 1952); return the bytes written."""
    from imagecodecs import gzip_decode

    size = len(gzip_decode(_some(stored), out=out))
    # The trailer holds the size of its member; with several members libdeflate stops after the first.
    if int.from_bytes(stored[-4:].tobytes(), "little") != size:
        raise FramingUnknownError("gzip in several members")
    return size


def zstd(stored: np.ndarray, out: np.ndarray) -> int:
    """Undo Zstandard, its checksum where there is one included (RFC 8878); return the bytes written.

    The decoder comes from python-zstandard, whose build is 12 to 18 % faster than the one in imagecodecs.
    """
    from zstandard import ZstdDecompressor

    # Given a frame and room for all of it at once, the stream decodes straight into the buffer.
    with ZstdDecompressor().stream_reader(_some(stored).data, read_across_frames=True) as frames:
        size = frames.readinto(out)
        # Reading on also compares the checksum, where the buffer was full before the end of the frame.
        if frames.read(1):
            raise ValueError(f"it decodes to more than {out.size:,} bytes")
    # The stream takes bytes that end before the checksum for the end.
    _require_whole_frames(stored.data)
    return size


def _require_whole_frames(stored: memoryview) -> None:
    """Refuse Zstandard that is cut short: walk over the headers of its frames and blocks (RFC 8878, section 3.1)."""
    place, size = 0, len(stored)
    while place < size:
        magic, descriptor = int.from_bytes(stored[place : place + 4], "little"), stored[min(place + 4, size - 1)]
        if magic & 0xFFFFFFF0 == _ZSTD_SKIPPED:
            place += 8 + int.from_bytes(stored[place + 4 : place + 8], "little")
            continue
        if magic != _ZSTD_FRAME:
            raise ValueError(f"{size - place:,} bytes behind the last frame are no frame")
        single, checked = descriptor >> 5 & 1, descriptor >> 2 & 1
        # Window, dictionary and decoded size, each of as many bytes as the descriptor says.
        place += 5 + (not single) + (0, 1, 2, 4)[descriptor & 3] + (single, 2, 4, 8)[descriptor >> 6]
        last = 0
        while not last and place < size:
            block = int.from_bytes(stored[place : place + 3], "little")
            last = block & 1
            # A block that repeats one byte holds that byte only.
            place += 3 + (1 if block >> 1 & 3 == 1 else block >> 3)
        place += 4 * checked
        if not last or place > size:
            raise ValueError(f"the last frame ends before its {'checksum' if last else 'last block'} does")


def lz4(stored: np.ndarray, out: np.ndarray) -> int:
    """Undo one bare LZ4 block; return the bytes written."""
    from imagecodecs import lz4_decode

    return len(lz4_decode(_some(stored), out=out))


def lzf(stored: np.ndarray, out: np.ndarray) -> int:
    """Undo bare LZF; return the bytes written."""
    from imagecodecs import lzf_decode

    return len(lzf_decode(_some(stored), out=out))


def blosc(stored: np.ndarray, out: np.ndarray) -> int:
    """Undo a Blosc chunk of format 1 or 2; return the bytes written.

    The library believes the sizes in the header, so they are compared first. Header, 16 bytes, little-endian:
    version, version of the codec, flags, size of an entry; bytes decoded, bytes of a block, bytes of the whole
    (README_CHUNK_FORMAT of c-blosc 1, from memory).
    """
    from imagecodecs import blosc_decode

    if stored.size < _BLOSC_HEADER.size:
        raise ValueError(f"{stored.size} bytes, and the header of Blosc alone has {_BLOSC_HEADER.size}")
    version, _, flags, _, decoded, block, whole = _BLOSC_HEADER.unpack_from(stored.data)
    if version > 2 or flags >> 5 == _BLOSC_SNAPPY:
        raise FramingUnknownError(f"Blosc of format {version} with codec {flags >> 5}")
    require_room(decoded, out)
    if whole > stored.size or block > max(decoded, 1):
        raise ValueError(f"its header tells of {whole:,} bytes in blocks of {block:,}, there are {stored.size:,}")
    return len(blosc_decode(stored, numthreads=1, out=out))


def unshuffle_bytes(held: Stretch, free: Stretch, item: int) -> Stretch:
    """Bring the bytes of each entry together; a rest shorter than an entry stands at the end as it is.

    Where the shuffle was the first step it is undone on the way into the panel instead, and faster (`unshuffle`).
    """
    stored = held.bytes
    require_room(stored.size, free.bytes)
    whole = stored.size // max(1, item) * item
    out = free.first(stored.size)
    out.bytes[:whole].reshape(-1, max(1, item))[...] = stored[:whole].reshape(max(1, item), -1).T
    out.bytes[whole:] = stored[whole:]
    return out


def require_crc32c(stored: np.ndarray) -> int:
    """Compare the checksum, 4 bytes little-endian behind the data (RFC 3720); return the size of the data."""
    import google_crc32c

    if stored.size < 4:
        raise ValueError(f"{stored.size} bytes, too few for data and their checksum")
    size = stored.size - 4
    found, written = google_crc32c.value(stored[:size]).to_bytes(4, "little"), stored[size:].tobytes()
    if found != written:
        raise ValueError(f"the checksum is {found.hex()}, {written.hex()} was written")
    return size


def require_room(decoded: int, out: np.ndarray) -> None:
    """Refuse a declared size beyond that of the chunk."""
    if decoded > out.size:
        raise ValueError(f"it says that it decodes to {decoded:,} bytes, there may be {out.size:,}")


def _some(stored: np.ndarray) -> np.ndarray:
    """Refuse nothing at all, of which some libraries look at the first byte."""
    if not stored.size:
        raise ValueError("there are no bytes")
    return stored

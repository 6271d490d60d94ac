"""Bare decoders fill a buffer and never more, and notice what is damaged, missing or too much."""

from __future__ import annotations

import gzip
import zlib
from collections.abc import Callable

import google_crc32c
import imagecodecs
import numpy as np
import pytest
import zstandard

from bigsvd.source import codecs

DATA = (np.arange(30_000) // 7 % 251).astype("u1").tobytes()
Encode = Callable[[bytes], bytes]
ROUND_TRIPS: dict[str, tuple[Callable[[np.ndarray, np.ndarray], int], Encode]] = {
    "inflate": (codecs.inflate, zlib.compress),
    "gunzip": (codecs.gunzip, gzip.compress),
    "zstd": (codecs.zstd, zstandard.ZstdCompressor(write_checksum=True).compress),
    "lz4": (codecs.lz4, imagecodecs.lz4_encode),
    "lzf": (codecs.lzf, imagecodecs.lzf_encode),
    "blosc": (codecs.blosc, imagecodecs.blosc_encode),
}


def undo(decode: Callable[[np.ndarray, np.ndarray], int], stored: bytes, room: int) -> bytes:
    """Decode into a buffer with a margin that must stay as it is."""
    buffer = np.full(room + 64, 99, np.uint8)
    size = decode(np.frombuffer(stored, np.uint8), buffer[:room])
    assert (buffer[room:] == 99).all()
    return buffer[:size].tobytes()


@pytest.mark.parametrize("name", ROUND_TRIPS)
def test_a_buffer_of_the_right_size_or_a_larger_one_is_filled(name: str) -> None:
    decode, encode = ROUND_TRIPS[name]
    for room in (len(DATA), len(DATA) + 1000):
        assert undo(decode, encode(DATA), room) == DATA


@pytest.mark.parametrize("name", ROUND_TRIPS)
@pytest.mark.parametrize("room", [len(DATA) - 1, 100, 1])
def test_a_buffer_that_is_too_small_is_an_error(name: str, room: int) -> None:
    decode, encode = ROUND_TRIPS[name]
    with pytest.raises(Exception, match=r".") as caught:
        undo(decode, encode(DATA), room)
    assert not isinstance(caught.value, AssertionError)


@pytest.mark.parametrize("name", ROUND_TRIPS)
def test_no_bytes_at_all_are_an_error(name: str) -> None:
    with pytest.raises(ValueError, match=r"there are no bytes|0 bytes, and the header"):
        undo(ROUND_TRIPS[name][0], b"", 100)


@pytest.mark.parametrize("name", ["inflate", "gunzip", "zstd"])
def test_a_wrong_checksum_behind_right_data_is_an_error(name: str) -> None:
    decode, encode = ROUND_TRIPS[name]
    stored = bytearray(encode(DATA))
    # gzip has the size behind the checksum.
    stored[-5 if name == "gunzip" else -1] ^= 1
    for room in (len(DATA), len(DATA) + 10):
        with pytest.raises(Exception, match=r".") as caught:
            undo(decode, bytes(stored), room)
        assert not isinstance(caught.value, AssertionError)


def test_zstandard_in_several_frames_or_without_a_size_is_read() -> None:
    plain = zstandard.ZstdCompressor(write_content_size=False, write_checksum=True)
    stream = plain.compressobj()
    sizeless = stream.compress(DATA) + stream.flush()
    assert undo(codecs.zstd, sizeless, len(DATA)) == DATA
    parts = zstandard.compress(DATA[:10_000]) + plain.compress(DATA[10_000:])
    assert undo(codecs.zstd, parts, len(DATA)) == DATA
    with pytest.raises(ValueError, match="it decodes to more than 29,999 bytes"):
        undo(codecs.zstd, sizeless, len(DATA) - 1)
    with pytest.raises(ValueError, match="it decodes to more than 10,000 bytes"):
        undo(codecs.zstd, parts, 10_000)


def test_gzip_in_several_members_is_left_to_others() -> None:
    with pytest.raises(codecs.FramingUnknownError, match="several members"):
        undo(codecs.gunzip, gzip.compress(DATA[:1000]) + gzip.compress(DATA[1000:]), len(DATA))


@pytest.mark.parametrize(
    ("at", "words"), [(4, "it says that it decodes to"), (8, "in blocks of"), (12, "its header tells")]
)
def test_sizes_in_the_header_of_blosc_are_not_believed(at: int, words: str) -> None:
    """Decoded size, size of a block, size of the whole."""
    stored = bytearray(imagecodecs.blosc_encode(DATA))
    stored[at : at + 4] = (2**30).to_bytes(4, "little")
    with pytest.raises(ValueError, match=words):
        undo(codecs.blosc, bytes(stored), len(DATA))


def test_crc32c_is_that_of_its_definition() -> None:
    """Check value of the catalogue of parametrised CRC algorithms for "123456789", from memory."""
    assert google_crc32c.value(b"123456789") == 0xE3069283
    stored = np.frombuffer(b"123456789" + bytes.fromhex("839206e3"), np.uint8)
    assert codecs.require_crc32c(stored) == 9
    with pytest.raises(ValueError, match="839206e3, 00000000 was written"):
        codecs.require_crc32c(np.frombuffer(b"123456789" + bytes(4), np.uint8))


@pytest.mark.parametrize(
    "options", [{"write_checksum": True}, {"write_checksum": False}, {"write_content_size": False}]
)
@pytest.mark.parametrize("size", [0, 1, 200, 300_000])
def test_zstandard_cut_short_anywhere_is_refused(options: dict[str, bool], size: int) -> None:
    data = np.random.default_rng(3).integers(0, 9, size, np.uint8).tobytes()
    frame = zstandard.ZstdCompressor(**options).compress(data)
    skipped = b"\x50\x2a\x4d\x18\x03\x00\x00\x00abc"
    for stored in (frame, frame + skipped, skipped + frame, frame + frame):
        out = np.zeros(2 * size, np.uint8)
        assert out[: codecs.zstd(np.frombuffer(stored, np.uint8), out)].tobytes() in (data, data + data)
    for cut in [*range(1, 12), len(frame) // 2]:
        if cut < len(frame):
            with pytest.raises(Exception, match=r"."):
                codecs.zstd(np.frombuffer(frame[:-cut], np.uint8), np.zeros(size, np.uint8))
    with pytest.raises(Exception, match=r"."):
        codecs.zstd(np.frombuffer(frame + b"tide", np.uint8), np.zeros(size, np.uint8))

"""Chunks decoded past the library equal those that it decodes itself, whatever the chain; damaged ones are refused."""

from __future__ import annotations

import os
import subprocess
import sys
from itertools import pairwise
from pathlib import Path
from typing import Any

import h5py
import hdf5plugin
import numpy as np
import pytest
from hdf5_chains import CHAINS, FLETCHER, OTHERS, SHUFFLE, SZIP_NEAREST, Step, blosc, plugin, raw_chunk, write_chain
from imagecodecs import bitshuffle_decode
from source_samples import matrix, read_whole, same

from bigsvd.errors import DamagedSourceError
from bigsvd.source import open_source, survey
from bigsvd.source.chunk_decoder import ChunkDecoder, most_stored
from bigsvd.source.hdf5 import library_reader
from bigsvd.source.hdf5_filters import filters_of
from bigsvd.source.workspace import Workspace

# 6,161 entries: several blocks of bitshuffle in all wider types, and one entry more than a multiple of 8.
SHAPE, CHUNK = (150, 130), (101, 61)
RECTANGLES = [
    ((0, 150), (0, 130)),
    ((5, 131), (3, 60)),
    ((149, 150), (129, 130)),
    ((100, 102), (60, 62)),
    ((0, 101), (0, 61)),
]
CODES = ("u1", "u2", ">u2", "f4", ">f4", "f8", ">f8", "c8", ">c8", "c16", "i8", "?")


def smooth(code: str, shape: tuple[int, int] = SHAPE) -> np.ndarray:
    """Entries that compress: few different ones, in runs."""
    row, column = np.indices(shape)
    values = (row // 7 * 3 + column // 11) % 50
    if np.dtype(code).kind == "c":
        values = values + 1j * (row % 3)
    return values.astype(code)


def agree(path: str) -> None:
    """Compare both ways of reading, byte for byte, over whole and partial rectangles."""
    source: Any = open_source(path)
    dataset, fill = source._opened()
    assert "_ChunkReader.fill" in repr(fill), "the library was used"
    library = library_reader(dataset)
    for rows, columns in RECTANGLES:
        shape = (rows[1] - rows[0], columns[1] - columns[0])
        found, wanted = np.zeros(shape, source.spec.dtype), np.ones(shape, source.spec.dtype)
        fill((rows, columns), found)
        library((rows, columns), wanted)
        assert found.tobytes() == wanted.tobytes(), (rows, columns)
    source.close()


def may_hold(chain: tuple[Step, ...], code: str) -> bool:
    """SZIP codes no complex numbers and no enumerations of bytes."""
    return not any(number == 4 for number, _ in chain) or np.dtype(code).kind not in "cb"


@pytest.mark.parametrize(("name", "code"), [(n, code) for n in CHAINS for code in CODES if may_hold(CHAINS[n], code)])
def test_every_known_chain_is_undone_as_the_library_does(tmp_path: Path, name: str, code: str) -> None:
    for number, values in enumerate((matrix(code, SHAPE), smooth(code))):
        agree(write_chain(tmp_path / f"{number}.h5", values, CHAINS[name], CHUNK))


@pytest.mark.parametrize(
    "name", ["shuffle gzip", "bitshuffle lz4", "bitshuffle zstd", "blosc lz4 shuffled", "lzf", "zstd"]
)
@pytest.mark.parametrize("chunks", [(1, 1), (1, 130), (150, 1), (150, 130), (3, 2)])
def test_chunks_of_any_shape_are_undone(tmp_path: Path, name: str, chunks: tuple[int, int]) -> None:
    agree(write_chain(tmp_path / "a.h5", smooth("u2"), CHAINS[name], chunks))


@pytest.mark.parametrize(
    "name", ["shuffle gzip fletcher32", "gzip lzf zstd", "bitshuffle lz4 fletcher32", "shuffle zstd"]
)
def test_filters_skipped_for_a_chunk_are_not_undone_for_it(tmp_path: Path, name: str) -> None:
    """The mask of a chunk has a bit for each filter; such a chunk is what the other filters alone make."""
    chain, values = CHAINS[name], smooth("u2")
    for mask in range(2 ** len(chain)):
        applied = tuple(step for number, step in enumerate(chain) if not mask >> number & 1)
        path = tmp_path / f"{mask}.h5"
        write_chain(path, values, applied, CHUNK, name="part")
        write_chain(path, values, chain, CHUNK)
        own, raw = raw_chunk(path, name="part")
        assert own == 0
        with h5py.File(path, "r+") as file:
            file["x"].id.write_direct_chunk((0, 0), raw, filter_mask=mask)
            del file["part"]
        agree(str(path))


@pytest.mark.parametrize("codec", ["lz4", "zstd"])
def test_a_block_whose_stored_and_decoded_sizes_agree_is_not_taken_for_stored_as_it_is(
    tmp_path: Path, codec: str
) -> None:
    """Blosc would. Blocks that repeat 4 to 60 of their bytes once are stored in a few bytes more or less than 128."""
    rng = np.random.default_rng(4)
    turned = rng.integers(0, 256, (57, 128), dtype=np.uint8)
    for number, block in enumerate(turned):
        block[64 : 68 + number] = block[: 4 + number]
    values = np.frombuffer(bitshuffle_decode(turned.tobytes(), itemsize=1, blocksize=128), np.uint8).reshape(57, 128)
    path = write_chain(tmp_path / "a.h5", values, (plugin(hdf5plugin.Bitshuffle(nelems=128, cname=codec)),), (57, 128))
    raw, place, sizes = raw_chunk(path)[1], 12, []
    while place < len(raw):
        sizes.append(int.from_bytes(raw[place : place + 4], "big"))
        place += 4 + sizes[-1]
    assert 0 < sizes.count(128) < len(sizes), "no such block was made, so nothing was tested"
    assert same(read_whole(open_source(path)), values)


@pytest.mark.parametrize("name", OTHERS)
def test_other_filters_are_left_to_the_library(tmp_path: Path, name: str) -> None:
    values = smooth(">f4")
    source: Any = open_source(write_chain(tmp_path / "a.h5", values, OTHERS[name], CHUNK))
    assert "_ChunkReader" not in repr(source._opened()[1])
    assert same(read_whole(source), values)


def test_a_framing_that_is_not_known_is_left_to_the_library_chunk_by_chunk(tmp_path: Path) -> None:
    """Blosc may hold Snappy, which the codecs at hand do not bring; here one chunk of six does."""
    values = smooth("u2")
    path = write_chain(tmp_path / "a.h5", values, (blosc("lz4", 1),), CHUNK)
    write_chain(tmp_path / "other.h5", values, (blosc("snappy", 1),), CHUNK)
    mask, raw = raw_chunk(tmp_path / "other.h5", (101, 61))
    assert (mask, raw[2] >> 5) == (0, 2), "no Snappy was written"
    with h5py.File(path, "r+") as file:
        file["x"].id.write_direct_chunk((101, 61), raw)
    agree(path)
    damaged = bytearray(raw)
    damaged[16:40] = b"\xff" * 24
    with h5py.File(path, "r+") as file:
        file["x"].id.write_direct_chunk((101, 61), bytes(damaged))
    with pytest.raises(
        DamagedSourceError, match=r"(?s)chunk \(1, 1\).*Blosc of format 2 with codec 2; the library says"
    ):
        read_whole(open_source(path))


def test_files_are_read_without_the_plugin_where_every_filter_is_known(tmp_path: Path) -> None:
    values = smooth("u2")
    known = write_chain(tmp_path / "known.h5", values, CHAINS["bitshuffle lz4"], CHUNK)
    other = write_chain(tmp_path / "other.h5", values, OTHERS["bzip2"], CHUNK)
    script = """
import sys
sys.modules["hdf5plugin"] = None
import numpy as np
from bigsvd.source import open_source, survey
(known,), (other,) = survey(sys.argv[1]), survey(sys.argv[2])
assert known.usable, known.reason
assert not other.usable and "its filter is not installed: bzip2 (filter 307)" in other.reason, other.reason
out = np.zeros(known.shape, known.dtype)
open_source(sys.argv[1]).read((0, 150), (0, 130), out)
print(int(out.sum()))
"""
    # netCDF4, once imported by another test, leaves its own plugins to be found through this variable.
    others = {name: word for name, word in os.environ.items() if name != "HDF5_PLUGIN_PATH"}
    command = [sys.executable, "-c", script, known, other]
    done = subprocess.run(command, capture_output=True, text=True, timeout=60, env=others)
    assert done.stdout.split() == [str(int(values.sum()))], done.stderr


def test_neither_plugins_nor_codecs_of_other_filters_are_loaded(tmp_path: Path) -> None:
    path = write_chain(tmp_path / "a.h5", smooth("u2"), CHAINS["shuffle gzip"], CHUNK)
    script = """
import sys
import numpy as np
from bigsvd.source import open_source, survey
survey(sys.argv[1])
open_source(sys.argv[1]).read((0, 150), (0, 130), np.zeros((150, 130), "u2"))
print(*sorted(name for name in sys.modules if name.startswith(("hdf5plugin", "imagecodecs._"))))
"""
    loaded = subprocess.run(
        [sys.executable, "-c", script, path], capture_output=True, text=True, check=True, timeout=60
    )
    assert "imagecodecs._deflate" in loaded.stdout
    assert not {"hdf5plugin", "imagecodecs._zstd", "imagecodecs._blosc2", "imagecodecs._szip"} & set(
        loaded.stdout.split()
    )


# ------------------------------------------------------------------------------------------------------- damaged chunks
class Decoding:
    """One chunk of a dataset, decoded from whatever bytes are given for it."""

    def __init__(self, path: str, dtype: np.dtype, chunk: tuple[int, int] = CHUNK) -> None:
        with h5py.File(path, "r") as file:
            self.decoder = ChunkDecoder(filters_of(file["x"]), dtype, chunk)
        self.workspace = Workspace()
        self.chunk, self.dtype = chunk, dtype

    def __call__(self, raw: bytes) -> np.ndarray:
        held = self.decoder.place_for(len(raw), self.workspace)
        held.bytes[:] = np.frombuffer(raw, np.uint8)
        # The margin would show a decoder that writes beyond the chunk.
        guarded = np.full((self.chunk[0] + 2, self.chunk[1]), 77, self.dtype)
        part = slice(0, self.chunk[0]), slice(0, self.chunk[1])
        self.decoder.decode(held, part, guarded[1:-1], self.workspace)
        assert (guarded[[0, -1]] == 77).all()
        return guarded[1:-1]


@pytest.mark.parametrize("name", CHAINS)
def test_damaged_bytes_raise_or_decode_to_a_chunk_and_never_more(tmp_path: Path, name: str) -> None:
    values = smooth("u2")
    path = write_chain(tmp_path / "a.h5", values, CHAINS[name], CHUNK)
    decode, raw = Decoding(path, np.dtype("u2")), raw_chunk(path)[1]
    assert same(decode(raw), values[: CHUNK[0], : CHUNK[1]])
    rng, raised = np.random.default_rng(5), 0
    for number in range(300):
        bad = bytearray(raw)
        # Half of the damage lies in the headers, where sizes stand.
        reach = min(len(bad), 48) if number % 2 else len(bad)
        for place in rng.integers(0, reach, 1 + number % 3):
            bad[place] = int(rng.integers(256))
        if number % 10 == 0:
            bad = bad[: int(rng.integers(0, len(bad)))]
        try:
            decode(bytes(bad))
        except Exception:
            raised += 1
    if "fletcher32" in name.split()[-1:] or name in ("gzip", "shuffle gzip"):
        assert raised > 280, "checksums must find nearly all of it"
    assert raised > 20
    assert same(decode(raw), values[: CHUNK[0], : CHUNK[1]]), "damage before must leave nothing behind"


@pytest.mark.parametrize("name", [name for name in CHAINS if name != "no filter"])
def test_a_chunk_that_decodes_to_more_or_less_than_it_should_is_an_error(tmp_path: Path, name: str) -> None:
    values = smooth("u2", (202, 122))
    large = write_chain(tmp_path / "large.h5", values, CHAINS[name], (202, 122))
    small = write_chain(tmp_path / "small.h5", values[: CHUNK[0], : CHUNK[1]], CHAINS[name], CHUNK)
    for path, wanted in ((large, CHUNK), (small, (202, 122))):
        raw = raw_chunk(path)[1]
        decode = Decoding(path, np.dtype("u2"), wanted)
        with pytest.raises(Exception, match=r".") as caught:
            decode(raw)
        assert not isinstance(caught.value, (AssertionError, MemoryError, IndexError))


def test_more_stored_bytes_than_any_filter_makes_are_refused_before_they_are_read(tmp_path: Path) -> None:
    path = write_chain(tmp_path / "a.h5", smooth("u2"), CHAINS["gzip"], CHUNK)
    decode = Decoding(path, np.dtype("u2"))
    with pytest.raises(ValueError, match="bytes are stored; no filter makes so many of 12,322"):
        decode.decoder.place_for(most_stored(12_322) + 1, decode.workspace)


@pytest.mark.parametrize("name", ["shuffle gzip", "bitshuffle lz4", "zstd", "lz4", "lzf", "blosc zstd shuffled"])
def test_a_chunk_cut_short_is_named_with_place_and_bytes(tmp_path: Path, name: str) -> None:
    path = write_chain(tmp_path / "a.h5", smooth("u2"), CHAINS[name], CHUNK)
    raw = raw_chunk(path, (101, 61))[1]
    with h5py.File(path, "r+") as file:
        file["x"].id.write_direct_chunk((101, 61), raw[: len(raw) // 2])
    source = open_source(path)
    source.read((0, 101), (0, 130), np.zeros((101, 130), "u2"))
    with pytest.raises(DamagedSourceError) as caught:
        read_whole(source)
    text = str(caught.value)
    assert f"{path}:/x holds stored bytes that do not decode" in text
    assert "chunk (1, 1): rows 101 to 149, columns 61 to 121" in text
    assert f"{len(raw) // 2:,} bytes stored at byte " in text
    assert "a chunk has 12,322 bytes decoded" in text
    assert "decoding says: " in text


def test_a_wrong_checksum_is_shown_beside_the_one_that_was_written(tmp_path: Path) -> None:
    path = write_chain(tmp_path / "a.h5", smooth("u2"), (FLETCHER,), CHUNK)
    raw = bytearray(raw_chunk(path)[1])
    raw[0] ^= 1
    with pytest.raises(ValueError, match=f"the checksum is [0-9a-f]{{8}}, {bytes(raw[-4:]).hex()} was written"):
        Decoding(path, np.dtype("u2"))(bytes(raw))


def test_checksums_of_old_files_with_exchanged_bytes_are_accepted(tmp_path: Path) -> None:
    values = smooth("u2")
    path = write_chain(tmp_path / "a.h5", values, (FLETCHER,), CHUNK)
    raw = raw_chunk(path)[1]
    old = raw[:-4] + bytes(raw[-4:][place] for place in (1, 0, 3, 2))
    assert same(Decoding(path, np.dtype("u2"))(old), values[: CHUNK[0], : CHUNK[1]])
    with h5py.File(path, "r+") as file:
        file["x"].id.write_direct_chunk((0, 0), old)
        assert (file["x"][: CHUNK[0], : CHUNK[1]] == values[: CHUNK[0], : CHUNK[1]]).all(), (
            "nor does the library accept it"
        )


def test_enumerations_and_truth_values_need_no_conversion(tmp_path: Path) -> None:
    kind = h5py.enum_dtype({"low": 0, "high": 300}, basetype=">i2")
    values = (smooth(">i2") % 2 * 300).astype(kind)
    path = write_chain(tmp_path / "a.h5", values, (SHUFFLE, SZIP_NEAREST), CHUNK)
    agree(path)
    assert survey(path)[0].usable


def test_rows_of_a_chunk_are_read_by_themselves(tmp_path: Path) -> None:
    values = matrix(">f8", SHAPE)
    source = open_source(write_chain(tmp_path / "a.h5", values, CHAINS["shuffle gzip"], CHUNK))
    edges = (0, 1, 40, 101, 102, 150)
    for start, stop in pairwise(edges):
        out = np.zeros((stop - start, 130), "f8")
        source.read((start, stop), (0, 130), out)
        assert same(out, values[start:stop])

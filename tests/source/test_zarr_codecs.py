"""Zarr chunks decoded in the calling thread equal those that zarr-python decodes, whatever the codecs."""

from __future__ import annotations

import gzip
import json
import subprocess
import sys
import warnings
from pathlib import Path
from typing import Any

import numcodecs
import numpy as np
import pytest
import zarr
from source_samples import TYPES, matrix, read_whole, same
from zarr.codecs import BloscCodec, BytesCodec, Crc32cCodec, GzipCodec, ShardingCodec, TransposeCodec, ZstdCodec

from bigsvd.errors import DamagedSourceError
from bigsvd.source import open_source
from bigsvd.source.zarr_read import open_zarr, python_reader

SHAPE, CHUNK, SHARD = (150, 130), (30, 40), (90, 80)
RECTANGLES = [
    ((0, 150), (0, 130)),
    ((5, 131), (3, 60)),
    ((149, 150), (129, 130)),
    ((89, 91), (79, 81)),
    ((0, 90), (0, 80)),
]
CODES = ("u1", ">u2", "f4", ">f8", "c8", "?")
BLOSC = ("blosclz", "lz4", "lz4hc", "zlib", "zstd")

FORMAT_2: dict[str, dict[str, Any]] = {
    "none": {"compressors": None},
    "zlib": {"compressors": numcodecs.Zlib()},
    "gzip": {"compressors": numcodecs.GZip()},
    "zstd": {"compressors": numcodecs.Zstd(checksum=True)},
    "lz4": {"compressors": numcodecs.LZ4()},
    "shuffle zstd": {"filters": [numcodecs.Shuffle(2)], "compressors": numcodecs.Zstd()},
    "wide shuffle zlib": {"filters": [numcodecs.Shuffle(8)], "compressors": numcodecs.Zlib()},
    "column order": {"order": "F", "compressors": numcodecs.Blosc()},
    "column order shuffle": {"order": "F", "filters": [numcodecs.Shuffle(4)], "compressors": numcodecs.Zstd()},
    "nested": {"chunk_key_encoding": {"name": "v2", "separator": "/"}},
    **{
        f"blosc {name} {shuffle}": {"compressors": numcodecs.Blosc(name, 5, shuffle)}
        for name in BLOSC
        for shuffle in range(3)
    },
}
FORMAT_3: dict[str, dict[str, Any]] = {
    "none": {"compressors": None},
    "gzip": {"compressors": GzipCodec()},
    "zstd": {"compressors": ZstdCodec(level=3)},
    "zstd checked": {"compressors": ZstdCodec(level=3, checksum=True)},
    "crc32c": {"compressors": Crc32cCodec()},
    "zstd crc32c": {"compressors": [ZstdCodec(), Crc32cCodec()]},
    "crc32c zstd": {"compressors": [Crc32cCodec(), ZstdCodec()]},
    "gzip zstd": {"compressors": [GzipCodec(), ZstdCodec()]},
    "big-endian": {"serializer": BytesCodec(endian="big"), "compressors": ZstdCodec()},
    "column order": {"filters": TransposeCodec(order=(1, 0)), "compressors": ZstdCodec()},
    "order as it is": {"filters": TransposeCodec(order=(0, 1)), "compressors": ZstdCodec()},
    "keys of v2": {"chunk_key_encoding": {"name": "v2", "separator": "."}},
    "sharded": {"shards": SHARD},
    "sharded blosc": {"shards": SHARD, "compressors": BloscCodec(cname="lz4")},
    "sharded checked": {"shards": SHARD, "compressors": [ZstdCodec(), Crc32cCodec()]},
    "sharded big-endian": {"shards": SHARD, "serializer": BytesCodec(endian="big")},
    "sharded column order": {"shards": SHARD, "filters": TransposeCodec(order=(1, 0))},
    "sharded, index first": {"shards": {"shape": SHARD, "index_location": "start"}},
    **{
        f"blosc {name} {shuffle}": {"compressors": BloscCodec(cname=name, shuffle=shuffle)}  # type: ignore[arg-type]
        for name in BLOSC
        for shuffle in ("noshuffle", "shuffle", "bitshuffle")
    },
}
SHARDED_WITHOUT_CHECKSUM = ShardingCodec(chunk_shape=CHUNK, codecs=[BytesCodec()], index_codecs=[BytesCodec()])


def smooth(code: str, shape: tuple[int, int] = SHAPE) -> np.ndarray:
    """Entries that compress: few different ones, in runs."""
    row, column = np.indices(shape)
    return ((row // 7 * 3 + column // 11) % 50).astype(code)


def write(path: Path, values: np.ndarray, zarr_format: Any, **options: Any) -> Path:
    array = zarr.create_array(
        path,
        shape=values.shape,
        dtype=values.dtype,
        zarr_format=zarr_format,
        **{"chunks": CHUNK, "config": {"write_empty_chunks": True}, **options},
    )
    array[...] = values
    return path


def agree(path: Path) -> None:
    """Compare both ways of reading, byte for byte, over whole and partial rectangles."""
    source: Any = open_source(path)
    direct = source._opened()
    assert "ZarrFiles.fill" in repr(direct), "zarr-python was used"
    library = python_reader(open_zarr(source.keys, "", source.metadata.zarr_format))
    for rows, columns in RECTANGLES:
        shape = (rows[1] - rows[0], columns[1] - columns[0])
        found, wanted = np.zeros(shape, source.spec.dtype), np.ones(shape, source.spec.dtype)
        direct((rows, columns), found)
        library((rows, columns), wanted)
        assert found.tobytes() == wanted.tobytes(), (rows, columns)


@pytest.mark.parametrize("code", CODES)
@pytest.mark.parametrize("name", FORMAT_2)
def test_every_known_chain_of_format_2_is_undone_as_zarr_python_does(tmp_path: Path, name: str, code: str) -> None:
    for number, values in enumerate((matrix(code, SHAPE), smooth(code))):
        agree(write(tmp_path / str(number), values, 2, **FORMAT_2[name]))


@pytest.mark.parametrize("code", [code for code in CODES if code[0] != ">"])
@pytest.mark.parametrize("name", FORMAT_3)
def test_every_known_chain_of_format_3_is_undone_as_zarr_python_does(tmp_path: Path, name: str, code: str) -> None:
    for number, values in enumerate((matrix(code, SHAPE), smooth(code))):
        agree(write(tmp_path / str(number), values, 3, **FORMAT_3[name]))


@pytest.mark.parametrize("code", TYPES)
def test_every_type_is_read_from_shards_without_a_checksum(tmp_path: Path, code: str) -> None:
    options = {"chunks": SHARD, "serializer": SHARDED_WITHOUT_CHECKSUM, "compressors": None}
    agree(write(tmp_path / "a", matrix(code, SHAPE), 3, **options))


@pytest.mark.parametrize("name", ["lz4", "zlib", "shuffle"])
def test_codecs_of_numcodecs_in_format_3_are_known(tmp_path: Path, name: str) -> None:
    path = write(tmp_path / "a", smooth("f4"), 3, compressors=None)
    codec = {"lz4": numcodecs.LZ4(), "zlib": numcodecs.Zlib(), "shuffle": numcodecs.Shuffle(4)}[name]
    document = json.loads((path / "zarr.json").read_text())
    document["codecs"].append({"name": f"numcodecs.{name}", "configuration": {"elementsize": 4}})
    (path / "zarr.json").write_text(json.dumps(document))
    for file in (path / "c").rglob("*"):
        if file.is_file():
            file.write_bytes(bytes(codec.encode(file.read_bytes())))
    source: Any = open_source(path)
    assert "ZarrFiles.fill" in repr(source._opened())
    assert same(read_whole(source), smooth("f4"))


OTHERS: dict[str, tuple[int, dict[str, Any]]] = {
    "delta": (2, {"filters": [numcodecs.Delta("i4")], "compressors": numcodecs.Zlib()}),
    "bz2": (2, {"compressors": numcodecs.BZ2()}),
    "two turns": (3, {"filters": [TransposeCodec(order=(1, 0)), TransposeCodec(order=(1, 0))]}),
    "sharded, then checked": (
        3,
        {"chunks": SHARD, "serializer": ShardingCodec(chunk_shape=CHUNK), "compressors": Crc32cCodec()},
    ),
}


@pytest.mark.parametrize("name", OTHERS)
def test_other_codecs_are_left_to_zarr_python(tmp_path: Path, name: str) -> None:
    zarr_format, options = OTHERS[name]
    values = smooth("i4")
    with warnings.catch_warnings():
        # zarr-python advises against compressors around shards.
        warnings.simplefilter("ignore")
        path = write(tmp_path / "a", values, zarr_format, **options)
        source: Any = open_source(path)
        assert "ZarrFiles" not in repr(source._opened())
        assert same(read_whole(source), values)


def test_metadata_that_must_be_understood_are_left_to_zarr_python(tmp_path: Path) -> None:
    path = write(tmp_path / "a", smooth("i4"), 3)
    document = json.loads((path / "zarr.json").read_text())
    document["marvel"] = {"must_understand": False}
    (path / "zarr.json").write_text(json.dumps(document))
    source: Any = open_source(path)
    assert "ZarrFiles" not in repr(source._opened())
    assert same(read_whole(source), smooth("i4"))


def test_a_framing_that_is_not_known_is_left_to_zarr_python_chunk_by_chunk(tmp_path: Path) -> None:
    values = smooth("u2")
    path = write(tmp_path / "a", values, 3, compressors=GzipCodec())
    raw = gzip.decompress((path / "c/1/1").read_bytes())
    (path / "c/1/1").write_bytes(gzip.compress(raw[:1000]) + gzip.compress(raw[1000:]))
    agree(path)


def test_known_codecs_are_read_without_loading_zarr_python(tmp_path: Path) -> None:
    path = write(tmp_path / "a", smooth("u2"), 3)
    script = """
import sys
import numpy as np
from bigsvd.source import open_source
out = np.zeros((150, 130), "u2")
open_source(sys.argv[1]).read((0, 150), (0, 130), out)
print(int(out.sum()), *({"zarr", "numcodecs", "zarrs"} & set(sys.modules)))
"""
    done = subprocess.run([sys.executable, "-c", script, str(path)], capture_output=True, text=True, timeout=60)
    assert done.stdout.split() == [str(int(smooth("u2").sum()))], done.stderr


# ------------------------------------------------------------------------------------------------------- damaged chunks
def refusal(path: Path) -> str:
    with pytest.raises(DamagedSourceError) as caught:
        read_whole(open_source(path))
    return str(caught.value)


def test_a_chunk_that_does_not_decode_is_named_with_key_place_and_bytes(tmp_path: Path) -> None:
    path = write(tmp_path / "a", smooth("u2"), 3, compressors=[ZstdCodec(), Crc32cCodec()])
    raw = bytearray((path / "c/1/2").read_bytes())
    raw[len(raw) // 2] ^= 4
    (path / "c/1/2").write_bytes(raw)
    text = refusal(path)
    assert f"{path} holds a chunk that does not decode" in text
    assert "chunk (1, 2): rows 30 to 59, columns 80 to 119" in text
    assert f"key c/1/2, {len(raw)} bytes stored" in text
    assert "a chunk has 2,400 bytes decoded" in text
    assert "the checksum is" in text
    assert f"{raw[-4:].hex()} was written" in text


@pytest.mark.parametrize("zarr_format", [2, 3])
def test_a_chunk_of_another_size_is_refused_with_both_sizes(tmp_path: Path, zarr_format: int) -> None:
    path = write(tmp_path / "a", smooth("u2"), zarr_format, compressors=None)
    at = path / ("c/0/1" if zarr_format == 3 else "0.1")
    at.write_bytes(at.read_bytes()[:-2])
    assert "2,398 bytes are stored as they are, a chunk has 2,400" in refusal(path)
    at.write_bytes(bytes(2_402))
    assert "2,402 bytes are stored as they are, a chunk has 2,400" in refusal(path)
    path = write(tmp_path / "b", smooth("u2"), zarr_format, **(FORMAT_2 if zarr_format == 2 else FORMAT_3)["gzip"])
    at = path / ("c/0/1" if zarr_format == 3 else "0.1")
    at.write_bytes(gzip.compress(bytes(2_398)))
    assert "it decodes to 2,398 bytes, a chunk has 2,400" in refusal(path)
    at.write_bytes(bytes(500_000))
    assert "500,000 bytes are stored; no filter makes so many of 2,400" in refusal(path)


def test_a_chunk_missing_inside_a_shard_is_not_read_as_fill(tmp_path: Path) -> None:
    path = write(tmp_path / "a", smooth("u2"), 3, shards=SHARD, compressors=None)
    values = smooth("u2")
    values[30:60, 40:80] = 0
    write(tmp_path / "b", values, 3, shards=SHARD, compressors=None, config={"write_empty_chunks": False})
    (path / "c/0/0").write_bytes((tmp_path / "b" / "c/0/0").read_bytes())
    text = refusal(path)
    assert "is not complete: a chunk is absent" in text
    assert "chunk (0, 0): rows 0 to 89, columns 0 to 79" in text
    assert "the inner chunk 1, 1 of its shard" in text


def test_damage_to_the_index_of_a_shard_is_named(tmp_path: Path) -> None:
    path = write(tmp_path / "a", smooth("u2"), 3, shards=SHARD)
    at, whole = path / "c/1/0", (path / "c/1/0").read_bytes()
    bad = bytearray(whole)
    bad[-30] ^= 1
    at.write_bytes(bad)
    assert "the index of the shard is damaged: the checksum is" in refusal(path)
    at.write_bytes(whole[:50])
    assert "the shard has 50 bytes, its index alone 100" in refusal(path)
    at.write_bytes(b"")
    assert "its file is empty" in refusal(path)


def test_an_index_that_points_outside_its_shard_is_refused(tmp_path: Path) -> None:
    options = {"chunks": SHARD, "serializer": SHARDED_WITHOUT_CHECKSUM, "compressors": None}
    path = write(tmp_path / "a", smooth("u2"), 3, **options)
    at, bad = path / "c/0/0", bytearray((path / "c/0/0").read_bytes())
    bad[-16:-8] = (2**40).to_bytes(8, "little")
    at.write_bytes(bad)
    assert "the index puts inner chunk (2, 1) at bytes 1,099,511,627,776 to" in refusal(path)


@pytest.mark.parametrize("name", ["none", "sharded", "sharded blosc", "zstd", "blosc lz4 shuffle", "gzip"])
def test_damaged_bytes_are_refused_in_words_or_decode_to_a_chunk(tmp_path: Path, name: str) -> None:
    values = smooth("u2")
    path = write(tmp_path / "a", values, 3, **FORMAT_3[name])
    at = path / "c/0/0"
    whole, rng = at.read_bytes(), np.random.default_rng(6)
    out = np.zeros(SHAPE, "u2")
    source = open_source(path)
    refusals = []
    for number in range(200):
        bad = bytearray(whole)
        for place in rng.integers(0, len(bad), 1 + number % 3):
            bad[place] = int(rng.integers(256))
        at.write_bytes(bad[: int(rng.integers(len(bad)))] if number % 10 == 0 else bad)
        try:
            source.read((0, 150), (0, 130), out)
        except DamagedSourceError as error:
            refusals.append(str(error))
    assert len(refusals) > 15
    assert all("chunk (0, 0)" in text for text in refusals)
    at.write_bytes(whole)
    assert same(read_whole(source), values)

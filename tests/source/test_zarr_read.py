"""Zarr arrays of both formats are read as zarr-python wrote them."""

from __future__ import annotations

import json
import pickle
import shutil
import threading
import zipfile
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zarr
from numcodecs import Blosc, Delta, Zlib
from source_samples import TYPES, matrix, read_panels, read_whole, same
from zarr.codecs import BloscCodec, BytesCodec, GzipCodec, TransposeCodec, ZstdCodec

from bigsvd.errors import DamagedSourceError, SourceChangedError, UnsupportedMatrixError
from bigsvd.source import check_complete, open_source

KINDS: dict[str, dict[str, Any]] = {
    "v3 zstd": {"zarr_format": 3, "compressors": ZstdCodec(level=3, checksum=True)},
    "v3 gzip": {"zarr_format": 3, "compressors": GzipCodec()},
    "v3 blosc": {"zarr_format": 3, "compressors": BloscCodec(cname="lz4")},
    "v3 raw": {"zarr_format": 3, "compressors": None},
    "v3 sharded": {"zarr_format": 3, "shards": (20, 14)},
    "v3 column order": {"zarr_format": 3, "filters": TransposeCodec(order=(1, 0))},
    "v3 keys of v2": {"zarr_format": 3, "chunk_key_encoding": {"name": "v2", "separator": "."}},
    "v2": {"zarr_format": 2},
    "v2 zlib": {"zarr_format": 2, "compressors": Zlib(level=2)},
    "v2 blosc": {"zarr_format": 2, "compressors": Blosc()},
    "v2 column order": {"zarr_format": 2, "order": "F"},
    "v2 nested": {"zarr_format": 2, "chunk_key_encoding": {"name": "v2", "separator": "/"}},
}


def write(path: Path, values: np.ndarray, kind: str = "v3 zstd", **options: Any) -> str:
    array = zarr.create_array(
        path,
        shape=values.shape,
        dtype=values.dtype,
        **{"chunks": (10, 7), "config": {"write_empty_chunks": True}, **KINDS[kind], **options},
    )
    array[...] = values
    return str(path)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("code", ["u2", ">f4", "f8", "c8"])
def test_every_kind_is_read_as_it_was_written_whole_and_in_panels(tmp_path: Path, kind: str, code: str) -> None:
    values = matrix(code)
    source = open_source(write(tmp_path / "a", values, kind))
    assert source.spec.dtype.isnative
    assert source.spec.storage == "zarr"
    assert source.spec.chunks == (10, 7)
    assert same(read_whole(source), values)
    assert same(read_whole(source, "F"), values)
    assert same(read_panels(source, 20, 14), values)
    assert same(read_panels(source, 13, 5), values)
    check_complete(source)


@pytest.mark.parametrize("code", TYPES)
@pytest.mark.parametrize("kind", ["v2", "v3 zstd", "v3 sharded"])
@pytest.mark.parametrize("endian", ["little", "big"])
def test_every_type_is_read_as_it_was_written(tmp_path: Path, code: str, kind: str, endian: str) -> None:
    values = matrix(code)
    if kind == "v2":
        path = write(tmp_path / "a", values.astype(values.dtype.newbyteorder("<>"[endian == "big"])), kind)
    else:
        path = write(tmp_path / "a", values, kind, serializer=BytesCodec(endian=endian))
    source = open_source(path)
    assert same(read_whole(source), values)
    assert same(read_panels(source, 13, 5), values)


def test_reading_changes_no_configuration_of_zarr_python(tmp_path: Path) -> None:
    before = json.dumps(zarr.config.to_dict(), default=str)
    read_whole(open_source(write(tmp_path / "a", matrix("f4"))))
    read_whole(open_source(write(tmp_path / "b", matrix("i4"), "v2", filters=[Delta(dtype="i4")])))
    assert json.dumps(zarr.config.to_dict(), default=str) == before


def test_codecs_that_are_not_known_here_are_left_to_zarr_python(tmp_path: Path) -> None:
    values = matrix("i4", (40, 14))
    path = write(tmp_path / "a", values, "v2", filters=[Delta(dtype="i4")], compressors=Zlib())
    source: Any = open_source(path)
    assert same(read_whole(source), values)
    assert "delta" in source.spec.encoding
    assert "zlib" in source.spec.encoding


def test_pairs_of_floats_are_complex_numbers(tmp_path: Path) -> None:
    values = matrix("c8")
    pairs = np.ascontiguousarray(values).view([("r", "f4"), ("i", "f4")])
    source = open_source(write(tmp_path / "a", pairs, "v2"))
    assert same(read_whole(source), values)
    assert same(read_panels(source, 20, 7), values)


@pytest.mark.parametrize("below", ["", "folder.zarr/"])
def test_a_zip_file_is_read_whatever_it_is_called(tmp_path: Path, below: str) -> None:
    values = matrix("f4")
    group = tmp_path / "g"
    zarr.create_group(group)
    write(group / "x", values)
    with zipfile.ZipFile(tmp_path / "archive.data", "w") as file:
        for part in sorted(group.rglob("*")):
            if part.is_file():
                file.write(part, below + str(part.relative_to(group)))
    source = open_source(tmp_path / "archive.data")
    assert source.spec.name.endswith("archive.data:x")
    check_complete(source)
    assert same(read_whole(pickle.loads(pickle.dumps(source))), values)


def test_threads_read_at_once_and_each_gets_its_own_rectangle(tmp_path: Path) -> None:
    values = matrix("f4", (400, 21))
    for kind in ("v3 zstd", "v2 column order"):
        source = open_source(write(tmp_path / kind, values, kind))
        source.close()
        out = np.zeros_like(values)

        def work(first: int, source: Any = source, out: np.ndarray = out) -> None:
            for row in range(first * 20, 400, 160):
                source.read((row, row + 20), (0, 21), out[row : row + 20])

        threads = [threading.Thread(target=work, args=(first,)) for first in range(8)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        assert same(out, values)


def test_a_source_travels_as_its_address(tmp_path: Path) -> None:
    values = matrix("f4")
    source = open_source(write(tmp_path / "a", values))
    again = pickle.loads(pickle.dumps(source))
    assert again.spec == source.spec
    assert same(read_whole(again), values)


def test_arrays_inside_groups_are_found_and_stale_consolidated_metadata_is_not_believed(tmp_path: Path) -> None:
    values = matrix("f8", (20, 4))
    group = zarr.create_group(tmp_path / "g", zarr_format=2)
    array = group.create_array("deep/x", shape=(10, 4), dtype="f8", chunks=(10, 4))
    zarr.consolidate_metadata(tmp_path / "g", zarr_format=2)
    array.resize((20, 4))
    array[:] = values
    source = open_source(tmp_path / "g")
    assert source.spec.shape == (20, 4)
    assert same(read_whole(source), values)
    assert open_source(tmp_path / "g", "/deep").spec.name == source.spec.name


def test_a_folder_described_in_both_formats_is_read_by_the_newer_and_says_so(tmp_path: Path) -> None:
    values = matrix("f8")
    write(tmp_path / "a", values, "v3 keys of v2", compressors=None)
    write(tmp_path / "b", values, "v2", compressors=None)
    shutil.copy(tmp_path / "b" / ".zarray", tmp_path / "a")
    source = open_source(tmp_path / "a")
    assert same(read_whole(source), values)
    assert "a .zarray lies beside it" in source.spec.encoding
    document = json.loads((tmp_path / "a" / ".zarray").read_text())
    (tmp_path / "a" / ".zarray").write_text(json.dumps(document | {"shape": [38, 23]}))
    with pytest.raises(DamagedSourceError, match="described twice, and the shapes differ"):
        open_source(tmp_path / "a")


@pytest.mark.parametrize("kind", ["v3 zstd", "v3 raw", "v3 sharded", "v2", "v2 column order", "v3 gzip"])
@pytest.mark.parametrize("share", [0.0, 0.5, 0.98])
def test_a_chunk_cut_short_is_named_with_its_place(tmp_path: Path, kind: str, share: float) -> None:
    path = write(tmp_path / "a", matrix("f4", (100, 21)), kind)
    source: Any = open_source(path)
    at = Path(path) / source._key((1, 0))
    at.write_bytes(at.read_bytes()[: int(at.stat().st_size * share)])
    with pytest.raises(DamagedSourceError) as caught:
        read_whole(source)
    rows = source._chunks[0]
    assert f"chunk (1, 0): rows {rows} to {2 * rows - 1}" in str(caught.value)
    assert source._key((1, 0)) in str(caught.value)


@pytest.mark.parametrize("replace_by_folder", [False, True])
def test_a_chunk_that_vanishes_during_the_run_is_not_read_as_fill(tmp_path: Path, replace_by_folder: bool) -> None:
    source: Any = open_source(write(tmp_path / "a", matrix("f4")))
    read_whole(source)
    at = tmp_path / "a" / source._key((2, 1))
    at.unlink()
    if replace_by_folder:
        at.mkdir()
    with pytest.raises(DamagedSourceError, match=r"a chunk is absent\n.*chunk \(2, 1\)"):
        read_whole(source)


def test_metadata_written_again_since_is_refused(tmp_path: Path) -> None:
    source = open_source(write(tmp_path / "a", matrix("f4")))
    at = tmp_path / "a" / "zarr.json"
    at.write_text(at.read_text() + " ")
    with pytest.raises(SourceChangedError):
        read_whole(source)


def test_an_unknown_codec_is_named(tmp_path: Path) -> None:
    path = Path(write(tmp_path / "a", matrix("f4")))
    document = json.loads((path / "zarr.json").read_text())
    document["codecs"].append({"name": "marvel", "configuration": {}})
    (path / "zarr.json").write_text(json.dumps(document))
    with pytest.raises(UnsupportedMatrixError, match="marvel"):
        open_source(path)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ("cut", "cannot be read"),
        ("empty", "cannot be read"),
        ("list", "a JSON object is expected"),
        ("no shape", "incomplete or contradicts itself"),
        ("chunks of three axes", "incomplete or contradicts itself"),
    ],
)
def test_damaged_metadata_is_named(tmp_path: Path, change: str, words: str) -> None:
    at = Path(write(tmp_path / "a", matrix("f4"), "v2")) / ".zarray"
    document = json.loads(at.read_text())
    texts = {
        "cut": at.read_text()[:40],
        "empty": "",
        "list": "[1]",
        "no shape": json.dumps({key: value for key, value in document.items() if key != "shape"}),
        "chunks of three axes": json.dumps(document | {"chunks": [1, 2, 3]}),
    }
    at.write_text(texts[change])
    with pytest.raises(DamagedSourceError, match=words):
        open_source(tmp_path / "a")


@pytest.mark.parametrize("kind", ["v3 zstd", "v2", "v2 nested", "v3 keys of v2", "v3 sharded"])
def test_absent_chunks_are_counted_and_the_first_is_named(tmp_path: Path, kind: str) -> None:
    source: Any = open_source(write(tmp_path / "a", matrix("f4", (100, 42)), kind))
    check_complete(source)
    for place in [(1, 2), (4, 0)]:
        (tmp_path / "a" / source._key(place)).unlink()
    # Two shards hold four chunks each.
    words = r"8 of 60 .*first absent: the shard of" if kind == "v3 sharded" else "2 of 60 .*first absent:"
    with pytest.raises(DamagedSourceError, match=rf"(?s){words} chunk \(1, 2\)"):
        check_complete(source)


def test_an_array_enlarged_without_new_chunks_is_not_complete(tmp_path: Path) -> None:
    path = Path(write(tmp_path / "a", matrix("f4")))
    document = json.loads((path / "zarr.json").read_text())
    (path / "zarr.json").write_text(json.dumps(document | {"shape": [50, 23]}))
    with pytest.raises(DamagedSourceError, match=r"4 of 20 chunks are absent\n.*chunk \(4, 0\)"):
        check_complete(open_source(path))


def test_a_wrong_separator_is_shown_beside_the_names_that_are_there(tmp_path: Path) -> None:
    path = Path(write(tmp_path / "a", matrix("f4"), "v2 nested"))
    document = json.loads((path / ".zarray").read_text())
    (path / ".zarray").write_text(json.dumps(document | {"dimension_separator": "."}))
    with pytest.raises(
        DamagedSourceError, match=r"(?s)none of 16 chunks.*0\.0 is wanted; there are 0, 1, 2, 3.*separator"
    ):
        check_complete(open_source(path))


@pytest.mark.parametrize("location", ["end", "start"])
def test_chunks_absent_inside_a_shard_are_counted(tmp_path: Path, location: str) -> None:
    values = matrix("f4", (100, 42))
    values[20:30, 14:21] = 0
    options = {"shards": {"shape": (20, 14), "index_location": location}, "config": {"write_empty_chunks": False}}
    path = write(tmp_path / "a", values, "v3 sharded", **options)
    with pytest.raises(
        DamagedSourceError,
        match=r"(?s)1 of 60 chunks is absent.*1 inside the shard of chunk \(1, 1\): rows 20 to 39",
    ):
        check_complete(open_source(path))


def test_inner_chunks_past_the_edge_of_the_matrix_are_not_missed(tmp_path: Path) -> None:
    check_complete(open_source(write(tmp_path / "a", matrix("f4", (21, 15)), "v3 sharded")))


def test_names_left_by_other_programs_are_not_taken_for_chunks(tmp_path: Path) -> None:
    source: Any = open_source(write(tmp_path / "a", matrix("f4"), "v2"))
    (tmp_path / "a" / source._key((1, 1))).unlink()
    for name in ("._1.1", "1.1.partial", "1.1.2", "99.99", "x.y", ".DS_Store"):
        (tmp_path / "a" / name).write_bytes(b"x")
    with pytest.raises(DamagedSourceError, match="1 of 16 chunks is absent"):
        check_complete(source)

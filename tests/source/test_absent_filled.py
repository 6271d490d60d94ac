"""With `absent="fill"` chunks that were never written are read as the libraries read them; nothing else is filled."""

from __future__ import annotations

import json
import pickle
from pathlib import Path
from typing import Any

import h5py
import numcodecs
import numpy as np
import pytest
import zarr
from source_samples import TYPES, matrix, read_panels, read_whole, same
from zarr.codecs import Crc32cCodec, ZstdCodec

from bigsvd.errors import DamagedSourceError, OptionError, UnsupportedMatrixError
from bigsvd.source import Access, check_complete, open_source

FILL = Access(absent="fill")
FILLS = {"?": True, "f2": -0.5, "f4": 2.25, "f8": 1e300, "c8": 1 - 2j, "c16": 3 + 4j}
HDF5: dict[str, dict[str, Any]] = {
    "no filter": {},
    "gzip": {"compression": "gzip", "shuffle": True},
    "fletcher32": {"fletcher32": True},
    "no fill value": {"fillvalue": None},
}


def filled(path: Path, inside: str | None = None) -> Any:
    source = open_source(path, inside, FILL)
    check_complete(source)
    return source


@pytest.mark.parametrize("name", HDF5)
@pytest.mark.parametrize("code", [*TYPES, ">i4", ">f8"])
def test_absent_chunks_of_hdf5_are_read_as_h5py_reads_them(tmp_path: Path, name: str, code: str) -> None:
    values, options = matrix(code), {"fillvalue": FILLS.get(code, 17)} | HDF5[name]
    with h5py.File(tmp_path / "a.h5", "w") as file:
        dataset = file.create_dataset("x", values.shape, values.dtype, chunks=(10, 7), **options)
        dataset[:13, 7:20] = values[:13, 7:20]
    source = filled(tmp_path / "a.h5")
    with h5py.File(tmp_path / "a.h5") as file:
        wanted = file["x"][:]
    assert same(read_whole(source), wanted)
    assert same(read_panels(source, 9, 8), wanted)
    absent = source.spec.absent
    assert (absent.chunks, absent.of) == (12, 16)
    assert absent.first[0].startswith("chunk (0, 0): rows 0 to 9")
    assert absent.read_as == str(wanted[0, 0])
    assert same(read_whole(pickle.loads(pickle.dumps(source))), wanted)


@pytest.mark.parametrize("names", [("r", "i"), ("Real", "Imag")])
def test_absent_chunks_that_the_library_reads_are_filled_by_it(tmp_path: Path, names: tuple[str, str]) -> None:
    pairs = np.zeros((20, 8), [(name, "f4") for name in names])
    pairs[names[0]], pairs[names[1]] = 3, 4
    fill = np.array((5, 6), pairs.dtype)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", pairs.shape, pairs.dtype, chunks=(5, 4), fillvalue=fill)[:10] = pairs[:10]
    found = read_whole(filled(tmp_path / "a.h5"))
    assert (found[:10] == 3 + 4j).all()
    assert (found[10:] == 5 + 6j).all()


def test_a_contiguous_dataset_that_was_never_written_is_all_fill(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", (20, 6), "f4", fillvalue=2.5)
    source = filled(tmp_path / "a.h5")
    assert (read_whole(source) == 2.5).all()
    assert source.spec.absent.words.startswith("1 of 1 chunks is absent and read as 2.5; first all of it")


@pytest.mark.parametrize(("fill", "words"), [(np.nan, "is nan, which is not finite"), (np.inf, "is inf")])
def test_a_fill_value_of_hdf5_that_is_not_finite_is_refused(tmp_path: Path, fill: float, words: str) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", (20, 6), "f4", chunks=(5, 6), fillvalue=fill)[:10] = 1
    with pytest.raises(DamagedSourceError, match=f"(?s)2 of 4 chunks are absent, and cannot be filled.*{words}"):
        filled(tmp_path / "a.h5")


def test_a_dataset_of_hdf5_that_never_fills_is_refused(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", (20, 6), "f4", chunks=(5, 6), fill_time="never")[:10] = 1
    with pytest.raises(DamagedSourceError, match="declares that it has no fill value"):
        filled(tmp_path / "a.h5")


def test_a_complete_matrix_notes_nothing_and_keeps_its_fingerprint(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", data=matrix("f4"), chunks=(10, 7), fillvalue=np.nan)
    strict, filling = open_source(tmp_path / "a.h5"), filled(tmp_path / "a.h5")
    assert filling.spec == strict.spec


ZARR: dict[str, dict[str, Any]] = {
    "v2": {"zarr_format": 2},
    "v2 nested": {"zarr_format": 2, "chunk_key_encoding": {"name": "v2", "separator": "/"}},
    "v3": {"zarr_format": 3},
    "v3 crc32c": {"zarr_format": 3, "compressors": [ZstdCodec(), Crc32cCodec()]},
    "v3 sharded": {"zarr_format": 3, "shards": (20, 14)},
    "v2 by zarr-python": {"zarr_format": 2, "compressors": numcodecs.BZ2()},
}


@pytest.mark.parametrize("name", ZARR)
@pytest.mark.parametrize("code", TYPES)
def test_absent_chunks_of_zarr_are_read_as_zarr_python_reads_them(tmp_path: Path, name: str, code: str) -> None:
    values, fill = matrix(code), FILLS.get(code, 17)
    options = {"chunks": (10, 7), "config": {"write_empty_chunks": True}} | ZARR[name]
    array = zarr.create_array(tmp_path / "a", shape=values.shape, dtype=values.dtype, fill_value=fill, **options)
    array[:10, 7:21] = values[:10, 7:21]
    source = filled(tmp_path / "a")
    wanted = np.asarray(zarr.open_array(tmp_path / "a", mode="r")[:])
    assert same(read_whole(source), wanted)
    assert same(read_panels(source, 9, 8), wanted)
    assert (source.spec.absent.chunks, source.spec.absent.of) == (14, 16)
    assert source.spec.absent.read_as == str(wanted[-1, 0])
    assert same(read_whole(pickle.loads(pickle.dumps(source))), wanted)


@pytest.mark.parametrize("name", ["v2", "v3", "v3 sharded"])
def test_a_chunk_that_vanishes_later_is_not_filled(tmp_path: Path, name: str) -> None:
    options = {"chunks": (10, 7), "config": {"write_empty_chunks": True}} | ZARR[name]
    array = zarr.create_array(tmp_path / "a", shape=(40, 28), dtype="f4", fill_value=0, **options)
    array[:20] = 1
    source = filled(tmp_path / "a")
    (tmp_path / "a" / source._key((0, 1))).unlink()
    with pytest.raises(DamagedSourceError, match=r"a chunk is absent\n.*chunk \(0, 1\)"):
        read_whole(source)


@pytest.mark.parametrize("thing", ["folder", "nothing in it"])
def test_what_stands_in_place_of_a_chunk_is_not_filled(tmp_path: Path, thing: str) -> None:
    array = zarr.create_array(tmp_path / "a", shape=(40, 28), dtype="f4", chunks=(10, 28), fill_value=0)
    array[:] = 1
    place = tmp_path / "a" / "c" / "2" / "0"
    place.unlink()
    place.mkdir() if thing == "folder" else place.write_bytes(b"")
    with pytest.raises(DamagedSourceError, match="no file" if thing == "folder" else "its file is empty"):
        read_whole(filled(tmp_path / "a"))


@pytest.mark.parametrize(
    ("zarr_format", "code", "fill", "words"),
    [
        (2, "f4", None, "declares no fill value"),
        (2, "f4", "NaN", "is nan, which is not finite"),
        (3, "f4", "Infinity", "is inf, which is not finite"),
        (3, "f4", "0x7fc00000", "is nan, which is not finite"),
        (3, "f4", 1e300, "is inf, which is not finite"),
        (3, "f4", "tide", "'tide' is no entry of type float32"),
        (3, "u1", 300, "300 is no entry of type uint8"),
        (3, "u1", -1, "-1 is no entry of type uint8"),
        (3, "i2", 1.5, "1.5 is no entry of type int16"),
        (3, "i2", [1], "is no entry of type int16"),
        (3, "i2", {"a": 1}, "is no entry of type int16"),
        (3, "?", 7, "7 is no entry of type bool"),
        (3, "c8", [1, "NaN"], "not finite"),
        (3, "c8", [1, 2, 3], "is no entry of type complex64"),
    ],
)
def test_a_fill_value_of_zarr_that_is_no_entry_is_refused(
    tmp_path: Path, zarr_format: Any, code: str, fill: Any, words: str
) -> None:
    array = zarr.create_array(tmp_path / "a", shape=(20, 6), dtype=code, chunks=(5, 6), zarr_format=zarr_format)
    array[:10] = 1
    path = tmp_path / "a" / ("zarr.json" if zarr_format == 3 else ".zarray")
    path.write_text(json.dumps(json.loads(path.read_text()) | {"fill_value": fill}))
    with pytest.raises(DamagedSourceError) as caught:
        filled(tmp_path / "a")
    assert "2 of 4 chunks are absent, and cannot be filled" in caught.value.problem
    assert words in caught.value.evidence[0]


@pytest.mark.parametrize(("fill", "value"), [("0x40200000", 2.5), (3, 3.0), (0.1, np.float32(0.1))])
def test_fill_values_of_floats_are_numbers_or_their_bits(tmp_path: Path, fill: Any, value: float) -> None:
    zarr.create_array(tmp_path / "a", shape=(20, 6), dtype="f4", chunks=(5, 6), zarr_format=3)[:10] = 1
    path = tmp_path / "a" / "zarr.json"
    path.write_text(json.dumps(json.loads(path.read_text()) | {"fill_value": fill}))
    assert (read_whole(filled(tmp_path / "a"))[10:] == value).all()


def test_records_of_two_floats_are_filled_by_the_bytes_of_one_record(tmp_path: Path) -> None:
    pair = np.dtype([("r", "f4"), ("i", "f4")])
    array = zarr.create_array(
        tmp_path / "a", shape=(20, 6), dtype=pair, chunks=(5, 6), zarr_format=2, fill_value=np.array((1, 2), pair)[()]
    )
    array[:10] = np.full((10, 6), np.array((3, 4), pair))
    found = read_whole(filled(tmp_path / "a"))
    assert (found[:10] == 3 + 4j).all()
    assert (found[10:] == 1 + 2j).all()


def test_chunks_that_turn_up_make_another_matrix(tmp_path: Path) -> None:
    array = zarr.create_array(tmp_path / "a", shape=(40, 6), dtype="f4", chunks=(5, 6), fill_value=0)
    array[:10] = 1
    before = filled(tmp_path / "a").spec.fingerprint
    array[10:15] = 1
    assert filled(tmp_path / "a").spec.fingerprint != before


def test_shards_that_do_not_show_what_they_lack_are_refused_unless_filled(tmp_path: Path) -> None:
    shards = zarr.codecs.ShardingCodec(chunk_shape=(5, 3), index_codecs=[zarr.codecs.BytesCodec(endian="big")])
    array = zarr.create_array(
        tmp_path / "a", shape=(20, 6), dtype="f4", chunks=(10, 6), serializer=shards, compressors=None, fill_value=0
    )
    array[:] = 1
    with pytest.raises(UnsupportedMatrixError, match="does not show which of them are absent"):
        check_complete(open_source(tmp_path / "a"))
    assert (read_whole(filled(tmp_path / "a")) == 1).all()


def test_another_word_than_refuse_or_fill_is_refused() -> None:
    with pytest.raises(OptionError, match="--absent zeros is not a choice"):
        Access(absent="zeros")

"""HDF5 datasets of every type, layout and filter are read as h5py wrote them, by either way of reading."""

from __future__ import annotations

import pickle
import subprocess
import sys
import threading
from pathlib import Path
from typing import Any

import h5py
import hdf5plugin
import numpy as np
import pytest
from source_samples import TYPES, matrix, read_panels, read_whole, same

from bigsvd.errors import DamagedSourceError, SourceChangedError
from bigsvd.source import open_source
from bigsvd.source.hdf5 import library_reader

FILTERS: dict[str, dict[str, Any]] = {
    "none": {},
    "gzip": {"compression": "gzip", "compression_opts": 6},
    "shuffle": {"shuffle": True},
    "shuffle+gzip": {"compression": "gzip", "shuffle": True},
    "lzf": {"compression": "lzf"},
    "fletcher32": {"fletcher32": True},
    "gzip+fletcher32": {"compression": "gzip", "shuffle": True, "fletcher32": True},
    "bitshuffle": dict(hdf5plugin.Bitshuffle()),
    "blosc": dict(hdf5plugin.Blosc()),
    "zstd": dict(hdf5plugin.Zstd()),
}
DIRECT = ("none", "gzip", "shuffle", "shuffle+gzip")


def write(path: Path, values: np.ndarray, **options: Any) -> str:
    with h5py.File(path, "w") as file:
        file.create_dataset("group/values", data=values, **options)
    return str(path)


@pytest.mark.parametrize("code", [*TYPES, *(f">{code}" for code in TYPES if code[-1] not in "?1")])
@pytest.mark.parametrize("layout", ["contiguous", "chunked", "shuffle+gzip"])
def test_every_type_is_read_as_it_was_written_whole_and_in_panels(tmp_path: Path, code: str, layout: str) -> None:
    values = matrix(code)
    options = {} if layout == "contiguous" else {"chunks": (10, 7), **FILTERS[layout.replace("chunked", "none")]}
    source = open_source(write(tmp_path / "a.h5", values, **options))
    assert source.spec.dtype.isnative
    assert same(read_whole(source), values)
    assert same(read_whole(source, "F"), values)
    assert same(read_panels(source, 10, 7), values)
    assert same(read_panels(source, 13, 5), values)


@pytest.mark.parametrize("name", FILTERS)
@pytest.mark.parametrize("code", ["u2", ">f4"])
def test_every_filter_is_undone_and_named(tmp_path: Path, name: str, code: str) -> None:
    values = matrix(code)
    source = open_source(write(tmp_path / "a.h5", values, chunks=(10, 7), **FILTERS[name]))
    assert same(read_panels(source, 20, 23), values)
    assert source.spec.chunks == (10, 7)
    assert source.spec.storage == ("plain" if name == "none" else "compressed")
    for word in name.split("+"):
        assert {"none": "no filter"}.get(word, word) in source.spec.encoding


@pytest.mark.parametrize("name", DIRECT)
@pytest.mark.parametrize("code", ["i1", "u2", ">u2", "f4", ">f4", "f8", ">f8", "c8", "c16"])
@pytest.mark.parametrize("chunks", [(10, 7), (37, 1), (1, 23), (37, 23), (16, 16)])
def test_reading_past_the_library_gives_the_same_bytes(
    tmp_path: Path, name: str, code: str, chunks: tuple[int, int]
) -> None:
    source: Any = open_source(write(tmp_path / "a.h5", matrix(code), chunks=chunks, **FILTERS[name]))
    dataset, fill = source._opened()
    assert "_ChunkReader.fill" in repr(fill), "the library was used"
    library = library_reader(dataset)
    for rows, columns in [((0, 37), (0, 23)), ((5, 31), (3, 20)), ((36, 37), (22, 23)), ((0, 20), (7, 21))]:
        shape = (rows[1] - rows[0], columns[1] - columns[0])
        found, wanted = np.zeros(shape, source.spec.dtype), np.ones(shape, source.spec.dtype)
        fill((rows, columns), found)
        library((rows, columns), wanted)
        assert found.tobytes() == wanted.tobytes()


@pytest.mark.parametrize("code", ["f4", ">i4"])
def test_contiguous_entries_past_the_library_give_the_same_bytes(tmp_path: Path, code: str) -> None:
    source: Any = open_source(write(tmp_path / "a.h5", matrix(code, (300, 50))))
    dataset, fill = source._opened()
    assert "library_reader" not in repr(fill)
    for rows, columns in [((0, 300), (0, 50)), ((17, 290), (0, 50)), ((3, 200), (11, 12)), ((299, 300), (49, 50))]:
        found = np.zeros((rows[1] - rows[0], columns[1] - columns[0]), source.spec.dtype)
        wanted = np.ones_like(found)
        fill((rows, columns), found)
        library_reader(dataset)((rows, columns), wanted)
        assert found.tobytes() == wanted.tobytes()


def test_filters_skipped_for_single_chunks_are_not_undone_for_them(tmp_path: Path) -> None:
    values = matrix("u2", (20, 8))
    with h5py.File(tmp_path / "a.h5", "w") as file:
        dataset = file.create_dataset("x", (20, 8), "u2", chunks=(10, 8), shuffle=True, compression="gzip")
        dataset[:10] = values[:10]
        # Mask 0b11: neither shuffle nor deflate was applied to this chunk.
        dataset.id.write_direct_chunk((10, 0), values[10:].tobytes(), filter_mask=0b11)
    source: Any = open_source(tmp_path / "a.h5")
    assert "_ChunkReader" in repr(source._opened()[1])
    assert same(read_whole(source), values)


def test_chunks_behind_a_user_block_are_found(tmp_path: Path) -> None:
    values = matrix("f4")
    with h5py.File(tmp_path / "a.h5", "w", userblock_size=2048) as file:
        file.create_dataset("x", data=values, chunks=(10, 7), compression="gzip")
        file.create_dataset("y", data=values)
    for name in "xy":
        assert same(read_whole(open_source(tmp_path / "a.h5", name)), values)


def test_compact_and_external_and_virtual_layouts_are_read(tmp_path: Path) -> None:
    values = matrix("f8", (12, 6))
    values.tofile(tmp_path / "raw.bin")
    write(tmp_path / "part.h5", values)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        plist = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
        plist.set_layout(h5py.h5d.COMPACT)
        space = h5py.h5s.create_simple((12, 6))
        compact = h5py.h5d.create(file.id, b"compact", h5py.h5t.NATIVE_DOUBLE, space, plist)
        compact.write(space, space, values)
        file.create_dataset(
            "external", (12, 6), "f8", external=[("raw.bin", 0, values.nbytes)], efile_prefix=str(tmp_path)
        )
        layout = h5py.VirtualLayout((12, 6), "f8")
        layout[:] = h5py.VirtualSource("part.h5", "group/values", (12, 6))
        file.create_virtual_dataset("virtual", layout)
    for name in ("compact", "external", "virtual"):
        source = open_source(tmp_path / "a.h5", name)
        assert same(read_whole(source), values), name
        assert name in source.spec.encoding


@pytest.mark.parametrize("names", [("r", "i"), ("real", "imag"), ("re", "im"), ("Real", "Imag")])
@pytest.mark.parametrize("part", ["<f4", ">f4", "<f8", ">f8"])
def test_pairs_of_floats_are_complex_numbers(tmp_path: Path, names: tuple[str, str], part: str) -> None:
    values = matrix("c8" if part[1:] == "f4" else "c16")
    pairs = np.zeros(values.shape, [(names[0], part), (names[1], part)])
    pairs[names[0]], pairs[names[1]] = values.real, values.imag
    source = open_source(write(tmp_path / "a.h5", pairs, chunks=(10, 7), compression="gzip"))
    assert same(read_whole(source), values)
    assert same(read_panels(source, 20, 7), values)


def test_long_doubles_are_read_as_doubles_and_said_so(tmp_path: Path) -> None:
    values = matrix("f8")
    source = open_source(write(tmp_path / "a.h5", values.astype(np.longdouble)))
    assert same(read_whole(source), values)
    assert "double precision" in source.spec.cautions[0]


def test_enumerated_types_are_their_integers(tmp_path: Path) -> None:
    values = matrix("u1") % 3
    kind = h5py.enum_dtype({"low": 0, "mid": 1, "high": 2}, basetype="u1")
    source = open_source(write(tmp_path / "a.h5", values, dtype=kind, chunks=(10, 7)))
    assert same(read_whole(source), values.astype("u1"))


def test_threads_read_at_once_and_each_gets_its_own_rectangle(tmp_path: Path) -> None:
    values = matrix("u2", (400, 60))
    for number, name in enumerate(("gzip", "zstd", "none")):
        source = open_source(write(tmp_path / f"{number}.h5", values, chunks=(20, 20), **FILTERS[name]))
        source.close()
        out = np.zeros_like(values)
        start = threading.Barrier(8)

        def work(first: int, source: Any = source, out: np.ndarray = out, start: threading.Barrier = start) -> None:
            start.wait()
            for row in range(first * 20, 400, 160):
                source.read((row, row + 20), (0, 60), out[row : row + 20])

        threads = [threading.Thread(target=work, args=(first,)) for first in range(8)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        assert same(out, values)


def test_a_source_travels_as_its_address(tmp_path: Path) -> None:
    values = matrix("f4", (1000, 100))
    source = open_source(write(tmp_path / "a.h5", values, chunks=(100, 100), compression="gzip"))
    luggage = pickle.dumps(source)
    assert len(luggage) < 2000
    again = pickle.loads(luggage)
    assert again.spec == source.spec
    assert same(read_whole(again), values)


def test_a_forked_child_opens_the_file_for_itself(tmp_path: Path) -> None:
    script = """
import os, sys
import numpy as np
from bigsvd.source import open_source
source = open_source(sys.argv[1])
out = np.zeros((37, 23), "f4")
source.read((0, 37), (0, 23), out)
parent = source._opened()[0].id.id
child = os.fork()
if child == 0:
    again = np.zeros((37, 23), "f4")
    source.read((0, 37), (0, 23), again)
    os._exit(0 if (again == out).all() and out.any() and source._opened()[0].id.id != parent else 1)
assert os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) == 0
source.read((0, 37), (0, 23), out)
"""
    path = write(tmp_path / "a.h5", matrix("f4"), chunks=(10, 7), **FILTERS["zstd"])
    subprocess.run([sys.executable, "-c", script, path], check=True, timeout=60)


def test_a_closed_source_opens_again(tmp_path: Path) -> None:
    values = matrix("f4")
    source = open_source(write(tmp_path / "a.h5", values))
    source.close()
    source.close()
    assert same(read_whole(source), values)


def test_a_file_written_to_since_is_refused(tmp_path: Path) -> None:
    path = write(tmp_path / "a.h5", matrix("f4"))
    source = open_source(path)
    luggage = pickle.dumps(source)
    with open(path, "ab") as file:
        file.write(b"more")
    with pytest.raises(SourceChangedError, match=r"changed while .*\n.*bytes: "):
        read_whole(source)
    with pytest.raises(SourceChangedError):
        read_whole(pickle.loads(luggage))


def test_a_removed_file_is_refused(tmp_path: Path) -> None:
    path = write(tmp_path / "a.h5", matrix("f4"))
    source = open_source(path)
    Path(path).unlink()
    with pytest.raises(SourceChangedError, match="cannot be found now"):
        read_whole(source)


@pytest.mark.parametrize("name", ["gzip", "shuffle+gzip", "fletcher32", "gzip+fletcher32"])
def test_a_damaged_chunk_is_named_with_its_place(tmp_path: Path, name: str) -> None:
    path = write(tmp_path / "a.h5", matrix("f4", (40, 30)), chunks=(10, 30), **FILTERS[name])
    with h5py.File(path, "r") as file:
        chunk = file["group/values"].id.get_chunk_info_by_coord((20, 0))
    with open(path, "r+b") as file:
        file.seek(chunk.byte_offset + chunk.size // 2)
        file.write(b"\xff\x00" * 8)
    source = open_source(path)
    with pytest.raises(DamagedSourceError) as caught:
        read_whole(source)
    assert f"{path}:/group/values" in caught.value.problem
    assert "chunk (2, 0): rows 20 to 29, columns 0 to 29" in str(caught.value)
    assert "decoding says" in str(caught.value)
    assert "a chunk has 1,200 bytes decoded" in str(caught.value)
    part = np.zeros((20, 30), "f4")
    source.read((0, 20), (0, 30), part)


def test_a_rectangle_outside_the_matrix_is_a_mistake_of_the_caller(tmp_path: Path) -> None:
    source = open_source(write(tmp_path / "a.h5", matrix("f4")))
    with pytest.raises(ValueError, match="rows 0:38 asked of a matrix with 37"):
        source.read((0, 38), (0, 23), np.zeros((38, 23), "f4"))
    with pytest.raises(ValueError, match="the rectangle needs float32"):
        source.read((0, 37), (0, 23), np.zeros((37, 23), "f8"))


def test_the_fingerprint_changes_with_the_file_and_the_dataset(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["x"], file["y"] = matrix("f4"), matrix("f4")
    first, other = open_source(tmp_path / "a.h5", "x"), open_source(tmp_path / "a.h5", "y")
    assert first.spec.fingerprint == open_source(tmp_path / "a.h5", "x").spec.fingerprint
    assert first.spec.fingerprint != other.spec.fingerprint
    for source in (first, other):
        source.close()
    with h5py.File(tmp_path / "a.h5", "a") as file:
        file["z"] = 1
    assert first.spec.fingerprint != open_source(tmp_path / "a.h5", "x").spec.fingerprint


def test_attributes_that_would_change_the_values_are_named(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["x"] = matrix("i2")
        file["x"].attrs.update({"scale_factor": 0.1, "_FillValue": -1})
    assert open_source(tmp_path / "a.h5").spec.cautions == (
        "attributes scale_factor, _FillValue are not applied: entries are taken as stored",
    )

"""What a path holds is told from its content; what cannot be opened is refused in words, with something to type."""

from __future__ import annotations

import os
import random
import subprocess
import sys
import textwrap
from collections.abc import Callable
from pathlib import Path

import h5py
import hdf5plugin
import numpy as np
import pytest
import zarr
from source_samples import matrix, read_whole, same

from bigsvd.errors import (
    BigsvdError,
    DamagedSourceError,
    NoMatrixError,
    SeveralMatricesError,
    SourceError,
    UnsupportedMatrixError,
)
from bigsvd.source import check_complete, open_source, survey


@pytest.mark.parametrize("block", [0, 512, 1024, 8192])
def test_an_hdf5_file_is_known_by_its_signature_behind_any_user_block(tmp_path: Path, block: int) -> None:
    with h5py.File(tmp_path / "a.zarr", "w", userblock_size=block) as file:
        file["x"] = matrix("f4")
    if block:
        with open(tmp_path / "a.zarr", "r+b") as raw:
            raw.write(b"MATLAB 7.3 MAT-file".ljust(block, b" "))
    assert same(read_whole(open_source(tmp_path / "a.zarr")), matrix("f4"))


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "it is empty (0 bytes): an interrupted copy or download"),
        (b"\n<!DOCTYPE html><html>Not found</html>", "a web page"),
        (b'<?xml version="1.0"?>', "a web page"),
        (b"gene\tcell1\tcell2\nA\t1\t2\n", "it looks like text"),
        (b'{"id": 1}', "JSON text"),
        (b"MATLAB 5.0 MAT-file, Platform".ljust(200), "MATLAB v5"),
        (b"\x1f\x8b\x08\x00 packed", "gzip"),
        (b"CDF\x01\x00\x00", "netCDF 3"),
        (b"\0" * 600, "nothing but zero bytes"),
        (b"\x01\x02\xfe\xff", "binary data of a kind not known here"),
    ],
)
def test_other_files_are_refused_by_what_they_look_like(tmp_path: Path, content: bytes, words: str) -> None:
    (tmp_path / "a.h5").write_bytes(content)
    for action in (open_source, survey):
        with pytest.raises(UnsupportedMatrixError) as caught:
            action(tmp_path / "a.h5")
        assert words in str(caught.value)
        assert caught.value.remedy


def test_a_path_without_anything_is_refused(tmp_path: Path) -> None:
    with pytest.raises(NoMatrixError, match="does not exist"):
        open_source(tmp_path / "a.h5")


def test_a_directory_without_metadata_shows_what_it_holds(tmp_path: Path) -> None:
    with pytest.raises(NoMatrixError, match="it is empty"):
        open_source(tmp_path)
    zarr.create_array(tmp_path / "inside", data=matrix("f4"))
    with pytest.raises(NoMatrixError, match=rf"holds: inside\nDid you mean {tmp_path}/inside"):
        open_source(tmp_path)
    assert open_source(tmp_path, "inside").spec.shape == (37, 23)


def test_paths_with_spaces_umlauts_and_a_tilde_are_opened(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    folder = tmp_path / "größe 1"
    folder.mkdir()
    with h5py.File(folder / "käse matrix.h5", "w") as file:
        file["mäß"] = matrix("f4")
    monkeypatch.setenv("HOME", str(folder))
    assert same(read_whole(open_source("~/käse matrix.h5", "mäß")), matrix("f4"))


def hdf5(path: Path, *shapes: tuple[int, ...]) -> Path:
    with h5py.File(path, "w") as file:
        for number, shape in enumerate(shapes):
            file[f"group/d{number}"] = np.zeros(shape)
    return path


def zarr_group(path: Path, *shapes: tuple[int, ...]) -> Path:
    group = zarr.create_group(path)
    for number, shape in enumerate(shapes):
        group.create_array(f"group/d{number}", shape=shape, dtype="f8")
    return path


MAKERS = pytest.mark.parametrize("make", [hdf5, zarr_group])
Maker = Callable[..., Path]


@MAKERS
def test_the_only_matrix_is_taken_beside_vectors_stacks_and_one_row_matrices(tmp_path: Path, make: Maker) -> None:
    source = open_source(make(tmp_path / "a", (5,), (4, 3), (2, 2, 2), (1, 1), (1, 9)))
    assert source.spec.name.endswith("group/d1")


@MAKERS
def test_a_matrix_of_one_row_is_taken_where_there_is_nothing_else(tmp_path: Path, make: Maker) -> None:
    assert open_source(make(tmp_path / "a", (5,), (1, 9))).spec.shape == (1, 9)


@MAKERS
def test_several_matrices_are_listed_with_shapes_and_the_line_to_type(tmp_path: Path, make: Maker) -> None:
    with pytest.raises(SeveralMatricesError) as caught:
        open_source(make(tmp_path / "a", (4, 3), (40, 30)))
    assert "holds 2 matrices" in caught.value.problem
    assert "group/d1  40 × 30 float64" in caught.value.evidence[0]
    assert "group/d0  4 × 3 float64" in caught.value.evidence[1]
    assert "--matrix" in caught.value.remedy
    assert "group/d1" in caught.value.remedy


@MAKERS
def test_a_group_may_be_named_where_it_holds_one_matrix(tmp_path: Path, make: Maker) -> None:
    path = make(tmp_path / "a", (4, 3), (40, 30))
    for name in ("group/d1", "/group/d1", "/group/d1/"):
        assert open_source(path, name).spec.shape == (40, 30)
    with pytest.raises(SeveralMatricesError, match="holds 2 matrices"):
        open_source(path, "group")


@MAKERS
def test_a_name_that_is_not_there_lists_the_matrices_that_are(tmp_path: Path, make: Maker) -> None:
    with pytest.raises(NoMatrixError, match=r"holds nothing under /?groop/d0\n.*group/d0  4 × 3"):
        open_source(make(tmp_path / "a", (4, 3)), "groop/d0")


@MAKERS
def test_a_file_without_a_matrix_says_what_is_there(tmp_path: Path, make: Maker) -> None:
    with pytest.raises(UnsupportedMatrixError, match=r"(?s)d1  7 float64: 1-D.*d0  5 float64: 1-D") as caught:
        open_source(make(tmp_path / "a", (5,), (7,)))
    assert f"bigsvd inspect {tmp_path}/a" in caught.value.remedy
    with pytest.raises(UnsupportedMatrixError, match="1-D, and a matrix has 2 axes"):
        open_source(tmp_path / "a", "group/d0")


@MAKERS
def test_an_empty_file_says_so(tmp_path: Path, make: Maker) -> None:
    with pytest.raises(NoMatrixError, match="holds no arrays at all"):
        open_source(make(tmp_path / "a"))


def test_sparse_groups_that_cannot_be_read_are_named_in_plain_words(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        group = file.create_group("X")
        group.attrs["encoding-type"] = "csr_matrix"
        for name in ("data", "indices", "indptr"):
            group[name] = np.arange(3)
    store = zarr.create_group(tmp_path / "a")
    store.create_group("X", attributes={"encoding-type": "csc_matrix"}).create_array("data", data=np.arange(3))
    for where in (tmp_path / "a.h5", tmp_path / "a"):
        for name in (None, "X"):
            with pytest.raises(DamagedSourceError, match="X is a sparse group whose shape is not known"):
                open_source(where, name)


def test_a_dense_matrix_beside_a_sparse_group_is_not_taken_unasked(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_group("X").attrs["h5sparse_format"] = "csr"
        file["scores"] = matrix("f4")
    with pytest.raises(SeveralMatricesError, match="one matrix beside sparse groups that cannot be read"):
        open_source(tmp_path / "a.h5")
    assert open_source(tmp_path / "a.h5", "scores").spec.shape == (37, 23)


def test_a_matrix_beside_its_labels_is_not_taken_for_a_sparse_group(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["set/data"], file["set/row"], file["set/col"] = matrix("f4"), np.arange(37), np.arange(23)
    assert open_source(tmp_path / "a.h5").spec.name.endswith("/set/data")


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (np.array([[b"a"]]), "not numbers but text"),
        (np.zeros((2, 2), [("mass", "f8"), ("age", "i4")]), "records of mass, age"),
        (np.zeros((2, 2), "V5"), "opaque bytes"),
        (np.zeros((0, 5)), "it is empty"),
    ],
)
def test_datasets_that_hold_no_numbers_are_refused_by_what_they_hold(
    tmp_path: Path, values: np.ndarray, words: str
) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["x"] = values
    for name in (None, "x"):
        with pytest.raises(UnsupportedMatrixError, match=words):
            open_source(tmp_path / "a.h5", name)


def test_variable_text_lists_and_references_are_refused_by_name(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("text", (2, 2), h5py.string_dtype())
        file.create_dataset("lists", (2, 2), h5py.vlen_dtype("i4"))
        file.create_dataset("references", (2, 2), h5py.ref_dtype)
    for name, words in [("text", "text"), ("lists", "lists of unequal length"), ("references", "references")]:
        with pytest.raises(UnsupportedMatrixError, match=f"not numbers but {words}"):
            open_source(tmp_path / "a.h5", name)


def test_a_truncated_hdf5_file_says_how_much_is_there(tmp_path: Path) -> None:
    path = hdf5(tmp_path / "a.h5", (400, 30))
    size = path.stat().st_size
    os.truncate(path, size // 4)
    with pytest.raises(DamagedSourceError, match=rf"cut short: 2\d\.\d% of it is there\n.*{size:,} bytes when"):
        open_source(path)


def test_a_file_that_another_program_writes_is_refused_and_explained(tmp_path: Path) -> None:
    path = hdf5(tmp_path / "a.h5", (4, 3))
    writer = textwrap.dedent(
        """
        import h5py, sys
        file = h5py.File(sys.argv[1], "r+")
        print("open", flush=True)
        sys.stdin.read()
        """
    )
    with subprocess.Popen(
        [sys.executable, "-c", writer, str(path)], stdin=subprocess.PIPE, stdout=subprocess.PIPE
    ) as process:
        assert process.stdout is not None
        assert process.stdout.readline() == b"open\n"
        with pytest.raises(SourceError, match=r"is locked: another program has it open for writing"):
            open_source(path)
        process.communicate()


def test_a_file_left_by_a_crashed_writer_is_explained(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    writer = textwrap.dedent(
        """
        import h5py, os, sys
        file = h5py.File(sys.argv[1], "w", libver="latest")
        file["x"] = [[1.0, 2.0]]
        file.flush()
        os._exit(0)
        """
    )
    subprocess.run([sys.executable, "-c", writer, str(path)], check=True)
    with pytest.raises(DamagedSourceError, match=r"(?s)marked as open for writing.*h5clear does not"):
        open_source(path)


def test_a_truncated_zip_is_refused(tmp_path: Path) -> None:
    (tmp_path / "a.zip").write_bytes(b"PK\x03\x04" + b"x" * 100)
    with pytest.raises(DamagedSourceError, match="begins like a zip file"):
        open_source(tmp_path / "a.zip")


def test_a_filter_that_is_not_installed_is_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", data=matrix("f4"), chunks=(10, 10), **hdf5plugin.BZip2())
    monkeypatch.setattr(h5py.h5z, "filter_avail", lambda code: code != 307)
    with pytest.raises(UnsupportedMatrixError, match=r"filter is not installed: bzip2 \(filter 307\)"):
        open_source(tmp_path / "a.h5", "x")


def test_flipped_bits_never_end_in_another_error_than_ours(tmp_path: Path) -> None:
    values = matrix("u2", (40, 30))
    chance = random.Random(20)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("g/a", data=values, chunks=(10, 10), compression="gzip", shuffle=True)
        file["g/b"] = values
        file["link"] = h5py.SoftLink("/g/a")
    np.save(tmp_path / "a.npy", values)
    zarr.create_group(tmp_path / "z").create_array("x", data=values, chunks=(10, 10), shards=(20, 20))
    document = (tmp_path / "z" / "x" / "zarr.json").read_text()
    opened = refused = 0
    for _ in range(100):
        hurt = bytearray((tmp_path / "a.h5").read_bytes())
        for _ in range(3):
            hurt[chance.randrange(len(hurt))] ^= 1 << chance.randrange(8)
        (tmp_path / "b.h5").write_bytes(hurt)
        hurt = bytearray((tmp_path / "a.npy").read_bytes())
        hurt[chance.randrange(128)] ^= 1 << chance.randrange(8)
        (tmp_path / "b.npy").write_bytes(hurt)
        place = chance.randrange(len(document))
        text = document[:place] + chance.choice('09"{[,x') + document[place + 1 :]
        (tmp_path / "z" / "x" / "zarr.json").write_text(text)
        for path in (tmp_path / "b.h5", tmp_path / "b.npy", tmp_path / "z"):
            try:
                for found in survey(path):
                    if found.usable and (found.decoded_bytes or 0) < 10**6:
                        source = open_source(path, found.path or None)
                        check_complete(source)
                        read_whole(source)
                        opened += 1
            except BigsvdError:
                refused += 1
    assert opened
    assert refused

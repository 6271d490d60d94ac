"""A damaged sparse matrix is refused, and the error names the group, the line, what was found and what to do."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import scipy.sparse
import zarr
from source_samples import read_whole
from sparse_samples import SHAPE, anndata_hdf5, anndata_zarr, feature_barcode, matlab, sample, scipy_npz

from bigsvd.errors import BigsvdError, DamagedSourceError, SourceChangedError, UnsupportedMatrixError
from bigsvd.source import check_complete, open_source, survey

Change = Callable[[dict[str, Any]], None]


def write(path: Path, change: Change, form: str = "csr") -> Path:
    """An AnnData group whose lists and shape were changed before they were written."""
    matrix = sample().asformat(form)
    parts: dict[str, Any] = {name: getattr(matrix, name).copy() for name in ("data", "indices", "indptr")}
    parts["shape"] = SHAPE
    change(parts)
    with h5py.File(path, "w") as file:
        group = file.create_group("X")
        group.attrs["encoding-type"] = f"{form}_matrix"
        if parts["shape"] is not None:
            group.attrs["shape"] = parts.pop("shape")
        else:
            parts.pop("shape")
        for name, part in parts.items():
            group[name] = part
    return path


def put(name: str, place: Any, value: Any) -> Change:
    def change(parts: dict[str, Any]) -> None:
        parts[name][place] = value

    return change


def swap(name: str, make: Callable[[Any], Any]) -> Change:
    return lambda parts: parts.update({name: make(parts[name])})


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (put("indptr", 9, 5), r"row 8 begins at entry \d+ and ends at entry 5 \("),
        (put("indptr", 9, -1), r"row 8 begins at entry \d+ and ends at entry -1 \("),
        (put("indptr", 0, 1), "the first is 1 instead of 0"),
        (put("indptr", -1, 548), "the last is 548, but 549 entries are stored in data and indices"),
        (put("indptr", -1, 700), "the last is 700, but 549 entries are stored in data and indices"),
        (put("indptr", 9, 10**6), r"row 9 begins at entry 1,000,000 and ends at entry \d+ \("),
        (swap("indptr", lambda part: np.full(part.shape, 2**64 - 1, "u8")), "the first is -1 instead of 0"),
        (swap("indptr", lambda part: part[:-1]), "61 × 47 by rows, which needs 62 pointers, but indptr has 61"),
        (swap("indptr", lambda part: part.astype("f8")), "indptr holds not whole numbers but float64"),
        (swap("indices", lambda part: part.astype("f8")), "indices holds not whole numbers but float64"),
        (swap("indices", lambda part: part[:-1]), "data has 549 entries and indices 548"),
        (swap("data", lambda part: part[:-1]), "data has 548 entries and indices 549"),
        (swap("data", lambda part: part[np.newaxis]), "data has 2 axes instead of one"),
        (swap("data", lambda part: np.array([b"a"] * part.size)), "data holds not numbers but text"),
        (lambda parts: parts.pop("data"), "data is missing"),
        (lambda parts: parts.pop("indptr"), "indptr is missing"),
        (put("indices", 100, 47), r"(?s)row \d+, entry 100: column 47.*columns 0 to 46"),
        (put("indices", 548, -3), r"(?s)row 60, entry 548: column -3.*columns 0 to 46"),
        (swap("shape", lambda _: (61, 20)), r"(?s)row 0, entry \d+: column \d+.*columns 0 to 19"),
        (swap("shape", lambda _: (47, 61)), "47 × 61 by rows, which needs 48 pointers, but indptr has 62"),
        (swap("shape", lambda _: (61,)), r"the attribute shape is \[61\], and two whole numbers are needed"),
        (swap("shape", lambda _: (-61, 47)), "two whole numbers are needed"),
        (swap("shape", lambda _: "61 47"), "two whole numbers are needed"),
        (swap("shape", lambda _: None), "the attribute shape is missing"),
    ],
)
def test_damage_is_named(tmp_path: Path, change: Change, words: str) -> None:
    path = write(tmp_path / "a.h5", change)
    for name in (None, "X"):
        with pytest.raises((DamagedSourceError, UnsupportedMatrixError), match=words) as caught:
            read_whole(open_source(path, name))
        assert f"{path}:/X" in caught.value.problem
        assert caught.value.remedy


def test_a_column_is_named_where_the_matrix_is_compressed_by_columns(tmp_path: Path) -> None:
    path = write(tmp_path / "a.h5", put("indices", 0, 99), "csc")
    with pytest.raises(DamagedSourceError, match=r"(?s)column 0, entry 0: row 99.*rows 0 to 60"):
        read_whole(open_source(path))


def test_an_index_outside_is_found_beyond_the_first_batch_and_before_anything_is_written(tmp_path: Path) -> None:
    from bigsvd.source.sparse_runs import BATCH_ENTRIES

    count = BATCH_ENTRIES + 1000
    indices = np.zeros(count, "i8")
    indices[-7] = 2**40
    with h5py.File(tmp_path / "a.h5", "w") as file:
        group = file.create_group("X")
        group.attrs.update({"encoding-type": "csr_matrix", "shape": (count, 2)})
        group["data"], group["indices"], group["indptr"] = np.ones(count, "f4"), indices, np.arange(count + 1)
    source = open_source(tmp_path / "a.h5")
    out = np.zeros((count, 2), "f4")
    with pytest.raises(DamagedSourceError, match=f"row {count - 7:,}, entry {count - 7:,}: column {2**40}"):
        source.read((0, count), (0, 2), out)


def test_inspect_says_what_is_wrong_without_failing(tmp_path: Path) -> None:
    path = write(tmp_path / "a.h5", swap("data", lambda part: part[:-1]))
    (found,) = survey(path)
    assert not found.usable
    assert "data has 548 entries and indices 549" in found.reason


def test_an_empty_matrix_is_called_empty(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        group = file.create_group("X")
        group.attrs.update({"encoding-type": "csr_matrix", "shape": (0, 4)})
        group["data"], group["indices"], group["indptr"] = np.zeros(0), np.zeros(0, "i4"), np.zeros(1, "i4")
    with pytest.raises(UnsupportedMatrixError, match="it is empty"):
        open_source(path)


def test_matlab_without_pointers_and_barcodes_of_another_number_are_named(tmp_path: Path) -> None:
    path, _ = matlab(tmp_path / "m", sample())
    with h5py.File(path, "r+") as file:
        del file["counts/jc"]
    with pytest.raises(DamagedSourceError, match="without jc"):
        open_source(path)
    path, _ = feature_barcode(tmp_path / "f", sample())
    with h5py.File(path, "r+") as file:
        del file["matrix/barcodes"]
        file["matrix/barcodes"] = np.array([b"one", b"two"])
    with pytest.raises(DamagedSourceError, match="61 barcodes by its shape, and 2 by their list"):
        open_source(path)


@pytest.mark.parametrize("part", ["data", "indices", "indptr"])
def test_a_chunk_that_was_never_written_is_named_with_its_list(tmp_path: Path, part: str) -> None:
    matrix = sample()
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        group = file.create_group("X")
        group.attrs.update({"encoding-type": "csr_matrix", "shape": SHAPE})
        for name in ("data", "indices", "indptr"):
            values = getattr(matrix, name)
            dataset = group.create_dataset(name, values.shape, values.dtype, chunks=(31,))
            dataset[: 31 if name == part else None] = values[: 31 if name == part else None]
    with pytest.raises(DamagedSourceError, match=rf"X/{part} is not complete: \d+ of \d+ chunks? (is|are) absent"):
        check_complete(open_source(path))
    assert survey(path)[0].absent_chunks


@pytest.mark.parametrize("part", ["data", "indices", "indptr"])
def test_a_lost_file_of_a_store_is_named_with_its_list(tmp_path: Path, part: str) -> None:
    path, _ = anndata_zarr("csr", 3)(tmp_path / "a", sample())
    os.remove(path / "X" / part / "c" / "1")
    with pytest.raises(DamagedSourceError, match=rf"X/{part} is not complete: 1 of \d+ chunks is absent"):
        check_complete(open_source(path))


def test_bytes_that_do_not_decode_are_named_with_their_chunk(tmp_path: Path) -> None:
    path, _ = anndata_hdf5("csr", chunks=(40,), compression="gzip")(tmp_path / "a", sample())
    with h5py.File(path) as file:
        place = file["X/indices"].id.get_chunk_info(3).byte_offset
    with path.open("r+b") as raw:
        raw.seek(place)
        raw.write(b"\xff" * 8)
    with pytest.raises(DamagedSourceError, match=r"(?s)X/indices.*chunk \(0, 3\).*columns 120 to 159"):
        read_whole(open_source(path))


@pytest.mark.parametrize(
    "writer", [anndata_hdf5("csr"), anndata_zarr("csr", 3), scipy_npz("csr", compressed=False),
               scipy_npz("csr", compressed=True)]
)  # fmt: skip
def test_a_file_that_changes_is_noticed(tmp_path: Path, writer: Any) -> None:
    path, _ = writer(tmp_path / "a", sample())
    source = open_source(path)
    for where in [path] if path.is_file() else path.rglob("zarr.json"):
        os.utime(where, ns=(1, 1))
    with pytest.raises(SourceChangedError, match="changed while it was being read"):
        read_whole(source)
    assert open_source(path).spec.fingerprint != source.spec.fingerprint


def test_npz_files_that_hold_something_else_are_refused_by_what_they_hold(tmp_path: Path) -> None:
    np.savez(tmp_path / "dense.npz", a=np.ones((3, 4)), b=np.zeros(2))
    with pytest.raises(UnsupportedMatrixError, match="of which only sparse matrices are read") as caught:
        open_source(tmp_path / "dense.npz")
    assert "numpy.save" in caught.value.remedy
    assert [one.path for one in survey(tmp_path / "dense.npz")] == ["a", "b"]
    scipy.sparse.save_npz(tmp_path / "coo.npz", sample().tocoo())
    with pytest.raises(UnsupportedMatrixError, match="COO"):
        open_source(tmp_path / "coo.npz")
    scipy.sparse.save_npz(tmp_path / "dia.npz", scipy.sparse.dia_array(np.eye(4)))
    with pytest.raises(UnsupportedMatrixError, match="of the format dia, and csr and csc are read") as caught:
        open_source(tmp_path / "dia.npz")
    assert "tocsr()" in caught.value.remedy


def test_an_object_in_an_npz_file_is_never_unpickled(tmp_path: Path) -> None:
    class Trap:
        def __reduce__(self) -> tuple[Any, tuple[str]]:
            return (os.mkdir, (str(tmp_path / "unpickled"),))

    matrix = sample()
    parts = {"indices": matrix.indices, "indptr": matrix.indptr, "shape": matrix.shape}
    np.savez(tmp_path / "a.npz", format=b"csr", data=np.array([Trap()] * matrix.nnz, object), **parts)
    np.savez(tmp_path / "b.npz", format=np.array(Trap(), object), data=matrix.data, **parts)
    with pytest.raises(BigsvdError, match="data holds not numbers but text, references or lists"):
        open_source(tmp_path / "a.npz")
    # The shape tells the format, too; the object is not looked at.
    assert np.array_equal(read_whole(open_source(tmp_path / "b.npz")), matrix.toarray())
    assert not (tmp_path / "unpickled").exists()


@pytest.mark.parametrize("compressed", [False, True])
def test_a_damaged_npz_file_says_so(tmp_path: Path, *, compressed: bool) -> None:
    rng = np.random.default_rng(1)
    matrix = scipy.sparse.random_array((300, 200), density=0.3, rng=rng, format="csr")
    path, _ = scipy_npz("csr", compressed=compressed)(tmp_path / "a", matrix)
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(BigsvdError, match=r"cannot be|zip"):
        open_source(path)
    if compressed:
        place = whole.index(b"data.npy") + 5000
        path.write_bytes(whole[:place] + b"\0" * 64 + whole[place + 64 :])
        with pytest.raises(DamagedSourceError, match=r"does not decode|cannot be read"):
            read_whole(open_source(path))


def test_a_list_cut_short_in_zarr_is_named(tmp_path: Path) -> None:
    path, _ = anndata_zarr("csr", 3)(tmp_path / "a", sample())
    zarr.open_array(path / "X" / "data", mode="r+").resize((500,))
    with pytest.raises(DamagedSourceError, match="data has 500 entries and indices 549"):
        open_source(path)

"""Arrays that are no HDF5 or Zarr files: .npy, NumPy, dask, and open datasets taken by their address."""

from __future__ import annotations

import pickle
from pathlib import Path
from typing import Any

import dask.array as da
import h5py
import numpy as np
import pytest
import scipy.sparse
import zarr
from hypothesis import given, settings
from hypothesis import strategies as st
from source_samples import TYPES, matrix, read_panels, read_whole, same

from bigsvd.errors import DamagedSourceError, NoMatrixError, SourceChangedError, SourceError, UnsupportedMatrixError
from bigsvd.source import check_complete, open_source
from bigsvd.source.positional import Descriptor, read_rows


@pytest.mark.parametrize("code", [*TYPES, *(f">{code}" for code in TYPES if code[-1] not in "?1"), "g"])
@pytest.mark.parametrize("order", ["C", "F"])
def test_npy_files_of_every_type_and_order_are_read(tmp_path: Path, code: str, order: str) -> None:
    values = matrix(code)
    np.save(tmp_path / "a.data", np.asarray(values, order=order))
    source = open_source(tmp_path / "a.data.npy")
    wanted = values.astype("f8") if code == "g" else values
    assert source.spec.storage == "npy"
    assert source.spec.chunks == ((1, 23) if order == "C" else (37, 1))
    check_complete(source)
    assert same(read_whole(source), wanted)
    assert same(read_whole(source, "F"), wanted)
    assert same(read_panels(source, 13, 5), wanted)
    assert same(read_whole(pickle.loads(pickle.dumps(source))), wanted)


@settings(max_examples=80, deadline=None)
@given(data=st.data(), big=st.booleans(), wide=st.booleans())
def test_any_rectangle_of_plain_rows_is_read_into_any_strides(
    data: st.DataObject, big: bool, wide: bool, tmp_path_factory: pytest.TempPathFactory
) -> None:
    # A row of the wide one is longer than the gap up to which rows are fetched together.
    shape = (7, 20_000) if wide else (40, 30)
    values = np.arange(shape[0] * shape[1], dtype=">f4" if big else "<f4").reshape(shape)
    path = tmp_path_factory.mktemp("plain") / "a"
    path.write_bytes(b"head" + values.tobytes())
    rows, columns = (sorted(data.draw(st.lists(st.integers(0, side), min_size=2, max_size=2))) for side in shape)
    form = data.draw(st.sampled_from(["C", "F", "every second"]))
    height, width = rows[1] - rows[0], columns[1] - columns[0]
    out = (
        np.zeros((height, 2 * width), "f4")[:, ::2] if form == "every second" else np.zeros((height, width), "f4", form)
    )
    file = Descriptor(str(path))
    read_rows(file.number, 4, shape[1], values.dtype, (rows[0], rows[1]), (columns[0], columns[1]), out)
    assert (out == values[rows[0] : rows[1], columns[0] : columns[1]]).all()


def test_an_npy_file_cut_short_says_how_much_is_there(tmp_path: Path) -> None:
    np.save(tmp_path / "a.npy", matrix("f8"))
    whole = (tmp_path / "a.npy").read_bytes()
    (tmp_path / "a.npy").write_bytes(whole[: len(whole) // 2])
    with pytest.raises(DamagedSourceError, match=r"50\.0% of it is there"):
        open_source(tmp_path / "a.npy")
    (tmp_path / "a.npy").write_bytes(whole[:20])
    with pytest.raises(DamagedSourceError, match="header cannot be read"):
        open_source(tmp_path / "a.npy")


def test_an_npy_file_cut_short_while_open_is_refused(tmp_path: Path) -> None:
    np.save(tmp_path / "a.npy", matrix("f8"))
    source = open_source(tmp_path / "a.npy")
    read_whole(source)
    with open(tmp_path / "a.npy", "r+b") as file:
        file.truncate(1000)
    with pytest.raises(SourceChangedError):
        read_whole(source)


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (np.zeros(3), "1-D"),
        (np.zeros((2, 2, 2)), "3-D"),
        (np.zeros((0, 5)), "it is empty"),
        (np.array(1.0), "a single value"),
        (np.array([["a"]]), "not numbers but text"),
        (np.array([[1, "a"]], object), "not numbers"),
        (np.zeros((2, 2), "M8[s]"), "not numbers but dates"),
        (np.zeros((2, 2), [("mass", "f8"), ("age", "i4")]), "records of mass, age"),
    ],
)
def test_arrays_that_are_no_matrix_are_refused_by_what_they_are(tmp_path: Path, values: Any, words: str) -> None:
    with pytest.raises(UnsupportedMatrixError, match=words):
        open_source(values)
    np.save(tmp_path / "a.npy", values, allow_pickle=True)
    with pytest.raises(UnsupportedMatrixError, match=words):
        open_source(tmp_path / "a.npy")


def test_naming_a_matrix_in_an_npy_file_is_refused(tmp_path: Path) -> None:
    np.save(tmp_path / "a.npy", matrix("f8"))
    with pytest.raises(NoMatrixError, match="Leave out --matrix"):
        open_source(tmp_path / "a.npy", "/X")


@pytest.mark.parametrize("code", [*TYPES, ">f4", ">c16", "g"])
def test_arrays_in_memory_are_read_without_a_copy_of_the_whole(code: str) -> None:
    values = matrix(code)[::2, ::-1]
    source: Any = open_source(values)
    assert np.shares_memory(source._array, values)
    wanted = values.astype("f8") if code == "g" else values
    assert same(read_panels(source, 13, 5), wanted)
    assert same(read_whole(pickle.loads(pickle.dumps(source))), wanted)
    check_complete(source)


def test_masked_entries_are_refused_and_an_empty_mask_is_not() -> None:
    masked = np.ma.masked_less(matrix("f8"), 0)
    with pytest.raises(UnsupportedMatrixError, match=r"entries are masked\nFill them first"):
        open_source(masked)
    assert same(read_whole(open_source(np.ma.array(matrix("f8")))), matrix("f8"))


def test_dask_arrays_are_computed_rectangle_by_rectangle() -> None:
    values = matrix("f4", (100, 60))
    source = open_source(da.from_array(values, chunks=(30, 25)) + np.float32(1))
    assert source.spec.chunks == (30, 25)
    assert source.spec.storage == "graph"
    assert source.spec.fingerprint == ""
    assert same(read_panels(source, 30, 25), values + np.float32(1))
    assert same(read_panels(source, 13, 41), values + np.float32(1))
    assert same(read_whole(pickle.loads(pickle.dumps(source))), values + np.float32(1))


def test_unequal_dask_chunks_are_read_and_said_to_be_computed_twice() -> None:
    values = matrix("i4", (100, 60))
    source = open_source(da.from_array(values, chunks=((30, 50, 20), (60,))))
    assert source.spec.chunks == (50, 60)
    assert "computed twice" in source.spec.cautions[0]
    assert same(read_panels(source, 50, 60), values)


def test_dask_chunks_that_are_not_what_was_promised_are_refused() -> None:
    array = da.from_array(matrix("f8"), chunks=(10, 23))
    lies = array.map_blocks(lambda block: block.astype("f8"), dtype="i4")
    with pytest.raises(UnsupportedMatrixError, match=r"promised .* int32\n.*computed .* float64"):
        read_whole(open_source(lies))
    narrow = array.map_blocks(lambda block: block[:, :3], dtype="f8")
    with pytest.raises((UnsupportedMatrixError, SourceError)):
        read_whole(open_source(narrow))


def test_a_failing_graph_is_named_with_its_rectangle() -> None:
    def fail(block: np.ndarray) -> np.ndarray:
        raise RuntimeError("the detector was off")

    array = da.from_array(matrix("f8"), chunks=(10, 23)).map_blocks(fail, dtype="f8", meta=np.empty((0, 0)))
    with pytest.raises(SourceError, match=r"(?s)rows 0 to 36.*RuntimeError: the detector was off.*compute"):
        read_whole(open_source(array))


def test_dask_arrays_of_unknown_size_or_other_chunks_are_refused() -> None:
    array = da.from_array(matrix("f8"), chunks=(10, 23))
    with pytest.raises(UnsupportedMatrixError, match="compute_chunk_sizes"):
        open_source(array[array[:, 0] > 0])
    sparse = array.map_blocks(scipy.sparse.csr_matrix, meta=scipy.sparse.csr_matrix((0, 0)))
    with pytest.raises(UnsupportedMatrixError, match="chunks are csr_matrix"):
        open_source(sparse)


def test_open_datasets_are_taken_by_their_address(tmp_path: Path) -> None:
    values = matrix("f4")
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["x"], file["y"] = values, values
    with h5py.File(tmp_path / "a.h5", "r") as file:
        source = open_source(file["x"])
    assert source.spec.name == f"{tmp_path}/a.h5:/x"
    assert same(read_whole(source), values)
    group = zarr.create_group(tmp_path / "g")
    array = group.create_array("x", data=values)
    source = open_source(array)
    assert source.spec.name == f"{tmp_path}/g:x"
    assert same(read_whole(source), values)


def test_a_dataset_of_a_file_open_for_writing_or_closed_is_refused(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        dataset = file.create_dataset("x", data=matrix("f4"))
        for where in (dataset, tmp_path / "a.h5"):
            with pytest.raises(SourceError, match="open for writing in this very process"):
                open_source(where)
    with pytest.raises(NoMatrixError, match="closed"):
        open_source(dataset)


def test_other_objects_are_refused_by_name() -> None:
    with pytest.raises(UnsupportedMatrixError, match=r"MemoryStore cannot be opened again.*\n.*array\[:\]"):
        open_source(zarr.create_array({}, data=matrix("f4")))
    with pytest.raises(UnsupportedMatrixError, match=r"builtins\.list"):
        open_source([[1, 2], [3, 4]])
    with pytest.raises(UnsupportedMatrixError, match="Leave out matrix="):
        open_source(matrix("f4"), "/x")

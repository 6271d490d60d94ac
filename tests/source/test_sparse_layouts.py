"""The same sparse matrix reads the same from every layout, type and compression."""

from __future__ import annotations

import pickle
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import scipy.sparse
import zarr
from source_samples import read_panels, read_whole, same
from sparse_samples import LAYOUTS, SHAPE, anndata_hdf5, anndata_zarr, matlab, sample, write_parts

from bigsvd.errors import OptionError, UnsupportedMatrixError
from bigsvd.source import Access, check_complete, open_source, survey
from bigsvd.source.sparse_source import SparseSource

every_layout = pytest.mark.parametrize("layout", LAYOUTS)


def opened(path: Path, matrix: str | None = None, **access: Any) -> SparseSource:
    source = open_source(path, matrix, Access(**access))
    assert isinstance(source, SparseSource)
    check_complete(source)
    return source


@every_layout
def test_every_rectangle_is_what_the_dense_matrix_holds(tmp_path: Path, layout: str) -> None:
    matrix = sample()
    source = opened(*LAYOUTS[layout](tmp_path / "a", matrix))
    wanted = matrix.toarray().astype(source.spec.dtype)
    for order in ("C", "F"):
        assert same(read_whole(source, order), wanted)
    for panels in ((13, SHAPE[1]), (SHAPE[0], 9), (7, 11)):
        assert same(read_panels(source, *panels), wanted)


@every_layout
def test_lines_come_sparse_sorted_and_in_the_narrowest_indices(tmp_path: Path, layout: str) -> None:
    matrix = sample()
    source = opened(*LAYOUTS[layout](tmp_path / "a", matrix))
    axis = source.spec.compressed_axis
    lines = matrix if axis == 0 else matrix.T.tocsr()
    for first, stop in ((0, lines.shape[0]), (2, 9), (4, 4), (lines.shape[0] - 1, lines.shape[0])):
        found = source.read_lines(first, stop)
        assert isinstance(found, scipy.sparse.csr_array)
        assert found.dtype == source.spec.dtype
        assert found.indices.dtype == found.indptr.dtype == np.int32
        assert found.has_canonical_format
        assert np.array_equal(found.toarray(), lines[first:stop].toarray())
        assert found.nnz == source.lines_nonzeros(first, stop)


@every_layout
def test_what_is_known_without_reading(tmp_path: Path, layout: str) -> None:
    matrix = sample()
    path, name = LAYOUTS[layout](tmp_path / "a", matrix)
    (found,) = [one for one in survey(path) if one.usable]
    spec = opened(path, name).spec
    assert spec.storage == "sparse"
    assert spec.shape == found.shape == SHAPE
    assert spec.nonzeros == found.nonzeros == matrix.nnz
    assert spec.chunks == ((1, SHAPE[1]) if spec.compressed_axis == 0 else (SHAPE[0], 1))
    assert spec.encoding == found.encoding
    axis = ("rows", "columns")[spec.compressed_axis]
    assert spec.encoding.startswith(f"sparse by {axis}, {matrix.nnz:,} entries (19.1 %)")
    assert spec.stored_bytes == found.stored_bytes
    assert spec.held_bytes >= 8 * (SHAPE[spec.compressed_axis] + 1)
    assert spec.decoded_bytes == found.decoded_bytes == SHAPE[0] * SHAPE[1] * spec.dtype.itemsize
    assert found.sparse
    # Nothing of the group is offered as a matrix of its own.
    assert {one.path for one in survey(path)} <= {found.path, "/obs", "/var"}


@every_layout
def test_a_source_travels_as_its_address(tmp_path: Path, layout: str) -> None:
    matrix = sample(shape=(600, 47))
    source = opened(*LAYOUTS[layout](tmp_path / "a", matrix))
    travelled = pickle.dumps(source)
    assert len(travelled) < 6000
    assert same(read_whole(pickle.loads(travelled)), read_whole(source))
    source.close()
    assert np.array_equal(read_whole(source), matrix.toarray())


@pytest.mark.parametrize("code", ["?", "i1", "u1", ">i2", "u2", "i4", "u4", "i8", "u8", "f2", "f4", ">f8", "c8", "c16"])
def test_every_type_of_values_is_read(tmp_path: Path, code: str) -> None:
    dense = sample("f8").toarray().astype(code)
    matrix = scipy.sparse.csr_array(dense.astype("c16"))
    values = dense[dense != 0]
    with h5py.File(tmp_path / "a.h5", "w") as file:
        group = file.create_group("X")
        group.attrs.update({"encoding-type": "csr_matrix", "shape": matrix.shape})
        group.create_dataset("data", data=values, chunks=(50,), compression="gzip")
        group["indices"], group["indptr"] = matrix.indices.astype(">u8"), matrix.indptr.astype("u4")
    source = opened(tmp_path / "a.h5")
    # SciPy adds neither truth values nor half precision: they come in the next type that holds them exactly.
    wanted = {"?": "u1", "f2": "f4"}.get(code, code)
    assert source.spec.dtype == np.dtype(wanted).newbyteorder("=")
    assert same(read_whole(source), dense.astype(wanted))


@pytest.mark.parametrize("layout", ["csr", "csc"])
def test_unsorted_and_repeated_indices_are_put_in_order_and_added(tmp_path: Path, layout: str) -> None:
    rng = np.random.default_rng(5)
    rows, columns, values = rng.integers(0, 30, 400), rng.integers(0, 20, 400), rng.integers(1, 9, 400)
    order = np.argsort(rows if layout == "csr" else columns, kind="stable")
    pointers = np.searchsorted(np.sort(rows if layout == "csr" else columns), np.arange(31 if layout == "csr" else 21))
    with h5py.File(tmp_path / "a.h5", "w") as file:
        group = file.create_group("X")
        group.attrs.update({"encoding-type": f"{layout}_matrix", "shape": (30, 20)})
        group["data"], group["indptr"] = values[order].astype("u1"), pointers
        group["indices"] = (columns if layout == "csr" else rows)[order]
    wanted = np.zeros((30, 20), "u1")
    np.add.at(wanted, (rows, columns), values.astype("u1"))
    source = opened(tmp_path / "a.h5")
    assert same(read_whole(source), wanted)
    assert same(read_panels(source, 7, 9), wanted)
    assert source.read_lines(0, 20).has_canonical_format


@pytest.mark.parametrize(("code", "value"), [("u1", 200), ("i2", 30_000), ("i4", 2**31 - 1), ("u8", 2**63)])
def test_a_sum_that_does_not_fit_its_type_is_refused_and_not_wrapped(tmp_path: Path, code: str, value: int) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        group = file.create_group("X")
        group.attrs.update({"encoding-type": "csr_matrix", "shape": (2, 3)})
        group["data"], group["indices"], group["indptr"] = np.array([value, value], code), [1, 1], [0, 2, 2]
    with pytest.raises(UnsupportedMatrixError, match=r"sum does not fit into their type") as caught:
        read_whole(opened(tmp_path / "a.h5"))
    assert "sum_duplicates" in caught.value.remedy


@pytest.mark.parametrize(
    ("layout", "hint", "words"),
    [
        ("anndata csr gzip", "rows", "AnnData layout: rows are observations"),
        ("anndata before 0.7", "rows", "AnnData layout: rows are observations"),
        ("zarr 3 csr", "rows", "AnnData layout: rows are observations"),
        ("feature barcode 3", "rows", "read as cells × features by rows"),
        ("feature barcode 2", "rows", "read as cells × features by rows"),
        ("matlab", "rows", "its rows are the rows here"),
        ("bare csr attribute", None, ""),
        ("npz csr", None, ""),
    ],
)
def test_the_axis_of_the_samples_is_told_by_the_layout(
    tmp_path: Path, layout: str, hint: str | None, words: str
) -> None:
    spec = opened(*LAYOUTS[layout](tmp_path / "a", sample())).spec
    assert spec.samples_hint == hint
    assert words in spec.hint_reason


def square(path: Path, **attributes: Any) -> tuple[Path, Any]:
    matrix = sample(shape=(30, 30))
    with h5py.File(path, "w") as file:
        group = file.create_group("counts")
        group.attrs.update(attributes)
        write_parts(group, matrix)
    return path, matrix


def test_a_square_group_without_a_format_is_asked_for_and_read_as_said(tmp_path: Path) -> None:
    path, matrix = square(tmp_path / "a.h5", shape=(30, 30))
    for name in (None, "counts"):
        with pytest.raises(UnsupportedMatrixError, match="30 pointers are of rows or of columns") as caught:
            open_source(path, name)
        assert "--sparse-format csr" in caught.value.remedy
    (found,) = survey(path)
    assert not found.usable
    assert "--sparse-format csr" in found.reason
    by_rows, by_columns = (opened(path, sparse_format=form) for form in ("csr", "csc"))
    assert np.array_equal(read_whole(by_rows), matrix.toarray())
    assert np.array_equal(read_whole(by_columns), matrix.toarray().T)
    assert by_rows.spec.fingerprint != by_columns.spec.fingerprint
    assert survey(path, Access(sparse_format="csc"))[0].usable


def test_a_group_without_a_shape_says_what_to_type(tmp_path: Path) -> None:
    path, matrix = square(tmp_path / "a.h5")
    with pytest.raises(UnsupportedMatrixError, match="does not say how many rows and columns") as caught:
        opened(path, sparse_format="csr")
    assert 'h5py.File(FILE, "r+")[\'/counts\'].attrs["shape"] = (ROWS, COLUMNS)' in caught.value.remedy
    with h5py.File(path, "r+") as file:
        file["/counts"].attrs["shape"] = (30, 30)
    assert np.array_equal(read_whole(opened(path, sparse_format="csr")), matrix.toarray())


def test_a_format_that_contradicts_the_file_or_has_no_use_is_refused(tmp_path: Path) -> None:
    path, _ = anndata_hdf5("csr")(tmp_path / "a", sample())
    with pytest.raises(UnsupportedMatrixError, match="says it is csr, but --sparse-format is csc"):
        opened(path, sparse_format="csc")
    assert opened(path, sparse_format="csr").spec.compressed_axis == 0
    np.save(tmp_path / "dense.npy", np.ones((3, 4)))
    with pytest.raises(OptionError, match="is not sparse"):
        open_source(tmp_path / "dense.npy", access=Access(sparse_format="csr"))
    with pytest.raises(OptionError, match="--sparse-format coo is not a choice"):
        Access(sparse_format="coo")


def test_coordinates_are_refused_with_the_conversion(tmp_path: Path) -> None:
    matrix = sample().tocoo()
    with h5py.File(tmp_path / "a.h5", "w") as file:
        for name, part in (("row", matrix.row), ("col", matrix.col), ("data", matrix.data)):
            file[f"set/{name}"] = part
    with pytest.raises(UnsupportedMatrixError, match="COO") as caught:
        open_source(tmp_path / "a.h5")
    assert ".tocsr()" in caught.value.remedy


@pytest.mark.parametrize("write", [anndata_hdf5("csr"), anndata_hdf5("csc", chunks=(5,), maxshape=(None,)), matlab])
def test_a_matrix_without_entries_is_all_zeros(tmp_path: Path, write: Any) -> None:
    path, name = write(tmp_path / "a", scipy.sparse.csr_array(SHAPE))
    source = opened(path, name)
    assert source.spec.nonzeros == 0
    assert not read_whole(source).any()
    assert source.read_lines(0, 5).shape == (5, SHAPE[1 - source.spec.compressed_axis])


def test_zeros_that_zarr_leaves_out_are_refused_or_filled(tmp_path: Path) -> None:
    """Of zarr-python's default, chunks that hold only the fill value are not written: here all indices of a column."""
    matrix = scipy.sparse.csr_array(np.arange(120.0).reshape(120, 1) + 1)
    path, _ = anndata_zarr("csr", 3)(tmp_path / "a", matrix)
    with pytest.raises(Exception, match="3 of 3 chunks are absent") as caught:
        opened(path)
    assert "X/indices" in str(caught.value)
    source = opened(path, absent="fill")
    assert source.spec.absent is not None
    assert source.spec.absent.chunks == 3
    assert any("3 of 3 chunks are absent" in caution for caution in source.spec.cautions)
    assert np.array_equal(read_whole(source), matrix.toarray())


def test_other_arrays_of_a_sparse_group_are_still_listed(tmp_path: Path) -> None:
    path, _ = anndata_hdf5("csr")(tmp_path / "a", sample())
    with h5py.File(path, "r+") as file:
        file["X/notes"] = np.ones((3, 2))
    assert {one.path for one in survey(path) if one.usable} == {"/X", "/X/notes"}
    assert opened(path, "X").spec.shape == SHAPE


def test_a_part_behind_a_link_out_of_the_folder_is_not_followed_unasked(tmp_path: Path) -> None:
    (tmp_path / "home").mkdir()
    path, _ = anndata_hdf5("csr")(tmp_path / "home" / "a", sample())
    path.rename(tmp_path / "elsewhere.h5")
    with h5py.File(path, "w") as file:
        group = file.create_group("X")
        group.attrs.update({"encoding-type": "csr_matrix", "shape": SHAPE})
        for name in ("data", "indices", "indptr"):
            group[name] = h5py.ExternalLink(str(tmp_path / "elsewhere.h5"), f"/X/{name}")
    (found,) = survey(path)
    assert not found.usable
    assert found.outside == (str(tmp_path / "elsewhere.h5"),)
    with pytest.raises(Exception, match="outside the folder") as caught:
        open_source(path)
    assert "--follow-links" in str(caught.value)
    assert np.array_equal(read_whole(opened(path, follow_links=True)), sample().toarray())


def test_panels_that_follow_one_another_decode_no_chunk_twice(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from bigsvd.source.chunk_decoder import ChunkDecoder

    matrix = sample(shape=(400, 47))
    path, _ = anndata_hdf5("csr", chunks=(300,), compression="gzip")(tmp_path / "a", matrix)
    source = opened(path)
    decoded, honest = [], ChunkDecoder.read
    monkeypatch.setattr(ChunkDecoder, "read", lambda self, *rest: (decoded.append(rest[:2]), honest(self, *rest))[1])
    for first in range(0, 400, 10):
        source.read_lines(first, first + 10)
    chunks = -(-matrix.nnz // 300)
    assert len(decoded) == len(set(decoded)) == 2 * chunks


def test_zarr_groups_without_marks_are_read_by_their_shape(tmp_path: Path) -> None:
    matrix = sample()
    store = zarr.create_group(tmp_path / "a", attributes={"shape": list(SHAPE)})
    for name in ("data", "indices", "indptr"):
        store.create_array(name, data=getattr(matrix, name))
    assert np.array_equal(read_whole(opened(tmp_path / "a")), matrix.toarray())

"""Sparse matrices that other programs wrote, beside the checkout or now, read as those programs and SciPy read them."""

from __future__ import annotations

import warnings
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import scipy.sparse
from source_samples import read_whole
from sparse_samples import sample

from bigsvd.errors import UnsupportedMatrixError
from bigsvd.source import check_complete, open_source, survey

BARCODES = "feature-barcode-h5/KrishnaswamyLab+scprep/data/test_data"
ANNDATA = "h5ad/scverse+anndata/tests/data/archives"
MATLAB = "matlab-v73/JuliaIO+MAT.jl/test/v7.3/sparse.mat"
BIOM = "biom-cool/biocore+biom-format"


@pytest.fixture
def files(shared_data: Path) -> Path:
    if not (shared_data / "files").is_dir():
        pytest.skip("real files: no folder shared/data/files beside the checkout")
    return shared_data / "files"


def by_scipy(path: Path, inside: str, kind: Any, shape: tuple[int, int]) -> np.ndarray:
    """The three lists put together by SciPy, as the outside reference."""
    with h5py.File(path, "r") as file:
        parts = [file[f"{inside}/{name}"][...] for name in ("data", "indices", "indptr")]
    return np.asarray(kind(tuple(parts), shape=shape).toarray())


@pytest.mark.parametrize(
    ("path", "inside", "kind", "stored", "hint"),
    [
        (f"{BARCODES}/test_10X_cellranger3.h5", "/matrix", "csc of the transpose", (100, 100), "rows"),
        (f"{BARCODES}/test_10X.h5", "/GRCh38", "csc of the transpose", (100, 100), "rows"),
        (f"{ANNDATA}/v0.5.0/adata.h5ad", "/raw.X", "csr", (700, 765), "rows"),
        (f"{ANNDATA}/v0.5.0/adata.h5ad", "/uns/neighbors/distances", "csr", (700, 700), None),
        (f"{ANNDATA}/v0.7.0/adata.h5ad", "/X", "csr", (30, 20), "rows"),
        (f"{ANNDATA}/v0.7.0/adata.h5ad", "/raw/X", "csr", (30, 40), "rows"),
        (f"{ANNDATA}/v0.7.8/adata.h5ad", "/layers/sparse", "csr", (30, 20), "rows"),
        (f"{ANNDATA}/v0.7.8/adata.h5ad", "/obsm/sparse", "csr", (30, 100), "rows"),
        (f"{BIOM}/examples/rich_sparse_otu_table_hdf5.biom", "/observation/matrix", "csr", (5, 6), "columns"),
        (f"{BIOM}/examples/rich_sparse_otu_table_hdf5.biom", "/sample/matrix", "csr", (6, 5), "rows"),
        (f"{BIOM}/biom/tests/test_data/edgecase_issue_952.biom", "/sample/matrix", "csr", (148, 10), "rows"),
    ],
)
def test_files_of_others_read_as_scipy_puts_them_together(
    files: Path, path: str, inside: str, kind: str, stored: tuple[int, int], hint: str | None
) -> None:
    if kind == "csr":
        wanted = by_scipy(files / path, inside, scipy.sparse.csr_array, stored)
    else:
        wanted = by_scipy(files / path, inside, scipy.sparse.csc_array, stored[::-1]).T
    source = open_source(files / path, inside)
    check_complete(source)
    assert source.spec.samples_hint == hint
    assert np.array_equal(read_whole(source), wanted)
    (listed,) = [one for one in survey(files / path) if one.path == inside]
    assert listed.usable
    assert listed.shape == source.spec.shape


def test_both_matrices_of_a_biom_file_are_one_another_s_transpose(files: Path) -> None:
    path = files / BIOM / "examples/min_sparse_otu_table_hdf5.biom"
    first, second = (read_whole(open_source(path, f"{name}/matrix")) for name in ("observation", "sample"))
    assert first.any()
    assert np.array_equal(first, second.T)


@pytest.mark.parametrize(
    ("name", "shape", "entries"),
    [("sparse_eye", (20, 20), 20), ("sparse_logical", (5, 5), None), ("sparse_random", (3, None), None),
     ("sparse_complex", (3, None), None), ("sparse_zeros", (20, 20), 0)],
)  # fmt: skip
def test_sparse_matrices_of_matlab(files: Path, name: str, shape: tuple[int, int | None], entries: int | None) -> None:
    source = open_source(files / MATLAB, name)
    check_complete(source)
    values = read_whole(source)
    assert source.spec.compressed_axis == 1
    assert source.spec.shape[0] == shape[0]
    assert shape[1] in (None, source.spec.shape[1])
    assert entries in (None, source.spec.nonzeros)
    assert np.count_nonzero(values) == source.spec.nonzeros
    if name == "sparse_eye":
        assert np.array_equal(values, np.eye(20))
    if name == "sparse_complex":
        assert values.dtype == np.complex128
        assert values.imag.any()


def test_an_empty_sparse_matrix_of_matlab_is_called_empty(files: Path) -> None:
    with pytest.raises(UnsupportedMatrixError, match="it is empty"):
        open_source(files / MATLAB, "sparse_empty")


@pytest.mark.parametrize("form", ["csr", "csc"])
@pytest.mark.parametrize("store", ["h5ad", "zarr 2", "zarr 3"])
def test_what_anndata_writes_now(tmp_path: Path, form: str, store: str) -> None:
    """Not a dependency of the tests, since it holds pandas back; run by hand with anndata 0.12.19."""
    anndata = pytest.importorskip("anndata", reason="anndata is not installed")
    matrix = sample("f4")
    data = anndata.AnnData(matrix.asformat(form), layers={"counts": matrix.asformat(form)})
    with warnings.catch_warnings():
        # What will change in its next version is not our concern.
        warnings.simplefilter("ignore")
        if store == "h5ad":
            data.write_h5ad(tmp_path / "a", compression="gzip")
        else:
            with anndata.settings.override(zarr_write_format=int(store[-1])):
                data.write_zarr(tmp_path / "a")
    for inside in ("X", "layers/counts"):
        source = open_source(tmp_path / "a", inside)
        check_complete(source)
        assert source.spec.samples_hint == "rows"
        assert source.spec.compressed_axis == ("csr", "csc").index(form)
        assert np.array_equal(read_whole(source), matrix.toarray())

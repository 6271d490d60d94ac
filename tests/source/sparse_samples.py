"""One sparse matrix written in every layout that is read, by hand from the published descriptions."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import scipy.sparse
import zarr

SHAPE = (61, 47)
PARTS = ("data", "indices", "indptr")
Writer = Callable[[Path, Any], tuple[Path, str | None]]


def sample(dtype: str = "f4", shape: tuple[int, int] = SHAPE, density: float = 0.2, seed: int = 1) -> Any:
    """Random entries, some rows and columns without any; whole numbers where the type holds such."""
    rng = np.random.default_rng(seed)
    dense = np.where(rng.random(shape) < density, rng.integers(1, 100, shape), 0)
    dense[3:5] = 0
    dense[:, 7] = 0
    return scipy.sparse.csr_array(dense.astype(dtype))


def write_parts(group: Any, matrix: Any, names: tuple[str, str, str] = PARTS, **options: Any) -> None:
    """Write the three lists into an HDF5 group."""
    for name, part in zip(names, (matrix.data, matrix.indices, matrix.indptr), strict=True):
        group.create_dataset(name, data=part, **options)


def anndata_hdf5(form: str, **options: Any) -> Writer:
    """AnnData 0.8 and later (anndata.readthedocs.io, "On-disk format", sparse arrays 0.1.0)."""

    def write(path: Path, matrix: Any) -> tuple[Path, str | None]:
        path = path.with_suffix(".h5ad")
        with h5py.File(path, "w") as file:
            file.attrs.update({"encoding-type": "anndata", "encoding-version": "0.1.0"})
            group = file.create_group("X")
            group.attrs.update({"encoding-type": f"{form}_matrix", "encoding-version": "0.1.0", "shape": matrix.shape})
            write_parts(group, matrix.asformat(form), **options)
        return path, None

    return write


def older_hdf5(path: Path, matrix: Any) -> tuple[Path, str | None]:
    """AnnData before 0.7: attributes of its own, 64-bit indices, annotations as compound datasets."""
    with h5py.File(path.with_suffix(".h5ad"), "w") as file:
        group = file.create_group("X")
        group.attrs.update({"h5sparse_format": "csr", "h5sparse_shape": matrix.shape})
        group["data"], group["indptr"] = matrix.data, matrix.indptr.astype("i8")
        group["indices"] = matrix.indices.astype("i8")
        for name, side in zip(("obs", "var"), matrix.shape, strict=True):
            file[name] = np.array([(f"{i}".encode(),) for i in range(side)], [("index", "S4")])
    return path.with_suffix(".h5ad"), None


def anndata_zarr(form: str, zarr_format: int, **options: Any) -> Writer:
    def write(path: Path, matrix: Any) -> tuple[Path, str | None]:
        store = zarr.create_group(path, zarr_format=zarr_format, attributes={"encoding-type": "anndata"})
        marks = {"encoding-type": f"{form}_matrix", "encoding-version": "0.1.0", "shape": list(matrix.shape)}
        group = store.create_group("X", attributes=marks)
        matrix = matrix.asformat(form)
        for name in PARTS:
            part = getattr(matrix, name)
            array = group.create_array(name, shape=part.shape, chunks=(50,), dtype=part.dtype, **options)
            array[:] = part
        return path, None

    return write


def feature_barcode(path: Path, matrix: Any) -> tuple[Path, str | None]:
    """Features × barcodes by columns (v3): the samples are the columns of what is stored, the rows of what is read."""
    with h5py.File(path.with_suffix(".h5"), "w") as file:
        group = file.create_group("matrix")
        write_parts(group, matrix.T.tocsc(), chunks=(40,), compression="gzip", shuffle=True)
        group["shape"] = np.array(matrix.shape[::-1], "i4")
        group["barcodes"] = np.array([f"{i}-1".encode() for i in range(matrix.shape[0])])
        for name in ("id", "name", "feature_type"):
            group[f"features/{name}"] = np.array([f"{name}{i}".encode() for i in range(matrix.shape[1])])
    return path.with_suffix(".h5"), None


def genome_barcode(path: Path, matrix: Any) -> tuple[Path, str | None]:
    """The same of version 2: a group named by its genome."""
    with h5py.File(path.with_suffix(".h5"), "w") as file:
        group = file.create_group("made_up_1")
        write_parts(group, matrix.T.tocsc())
        group["shape"] = np.array(matrix.shape[::-1], "i4")
        group["barcodes"] = np.array([f"{i}-1".encode() for i in range(matrix.shape[0])])
        for name in ("genes", "gene_names"):
            group[name] = np.array([f"{name}{i}".encode() for i in range(matrix.shape[1])])
    return path.with_suffix(".h5"), "made_up_1"


def matlab(path: Path, matrix: Any) -> tuple[Path, str | None]:
    """MATLAB v7.3: by columns, 64-bit unsigned indices, the number of rows as an attribute."""
    with h5py.File(path.with_suffix(".mat"), "w", userblock_size=512) as file:
        group = file.create_group("counts")
        group.attrs.update({"MATLAB_class": np.bytes_("double"), "MATLAB_sparse": np.uint64(matrix.shape[0])})
        columns = matrix.tocsc()
        group["jc"] = columns.indptr.astype("u8")
        if columns.nnz:
            group["data"], group["ir"] = columns.data, columns.indices.astype("u8")
    return path.with_suffix(".mat"), None


def bare(shape_as: str, form: str) -> Writer:
    def write(path: Path, matrix: Any) -> tuple[Path, str | None]:
        with h5py.File(path.with_suffix(".h5"), "w") as file:
            group = file if shape_as == "root" else file.create_group("deep/counts")
            write_parts(group, matrix.asformat(form), chunks=(33,))
            if shape_as == "attribute":
                group.attrs["shape"] = matrix.shape
            else:
                group["shape"] = matrix.shape
        return path.with_suffix(".h5"), None

    return write


def scipy_npz(form: str, *, compressed: bool) -> Writer:
    def write(path: Path, matrix: Any) -> tuple[Path, str | None]:
        scipy.sparse.save_npz(path.with_suffix(".npz"), matrix.asformat(form), compressed=compressed)
        return path.with_suffix(".npz"), None

    return write


LAYOUTS: dict[str, Writer] = {
    "anndata csr contiguous": anndata_hdf5("csr"),
    "anndata csc contiguous": anndata_hdf5("csc"),
    "anndata csr gzip": anndata_hdf5("csr", chunks=(40,), compression="gzip", shuffle=True),
    "anndata csc lzf": anndata_hdf5("csc", chunks=(40,), compression="lzf"),
    "anndata csr chunks": anndata_hdf5("csr", chunks=(40,)),
    "anndata csr one chunk": anndata_hdf5("csr", chunks=True),
    "anndata csr by the library": anndata_hdf5("csr", chunks=(40,), scaleoffset=0, dtype="i4"),
    "anndata before 0.7": older_hdf5,
    "zarr 2 csr": anndata_zarr("csr", 2),
    "zarr 2 csc": anndata_zarr("csc", 2),
    "zarr 3 csr": anndata_zarr("csr", 3),
    "zarr 3 csc sharded": anndata_zarr("csc", 3, shards=(200,)),
    "feature barcode 3": feature_barcode,
    "feature barcode 2": genome_barcode,
    "matlab": matlab,
    "bare csr attribute": bare("attribute", "csr"),
    "bare csc dataset": bare("dataset", "csc"),
    "bare at the root": bare("root", "csr"),
    "npz csr": scipy_npz("csr", compressed=False),
    "npz csc compressed": scipy_npz("csc", compressed=True),
}

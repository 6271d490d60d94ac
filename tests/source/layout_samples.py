"""Files as other programs write them, for tests of layouts and names; each says which library wrote it."""

from __future__ import annotations

import warnings
from importlib.metadata import version
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

ROWS, COLUMNS = 37, 23
CELLS = [f"cell {number}" for number in range(ROWS)]
GENES = [f"gène {number}" for number in range(COLUMNS)]


def library(name: str) -> Any:
    """A library of the test extra, or a skip that says which is missing."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return pytest.importorskip(name, reason=f"{name} is not installed: pip install '.[test]'", exc_type=ImportError)


def numbers(dtype: str = "f4") -> np.ndarray:
    """Invented entries, samples × features."""
    return np.random.default_rng(4).normal(size=(ROWS, COLUMNS)).astype(dtype)


def versions(*names: str) -> str:
    """Versions of the libraries that wrote a file, for messages."""
    return ", ".join(f"{name} {version(name)}" for name in names)


def write_annotated(path: Path, kind: str) -> Path:
    """AnnData as HDF5 or Zarr, by anndata: X, a layer, raw, scores, and a categorical column."""
    anndata, pandas = library("anndata"), library("pandas")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        group = pandas.Categorical.from_codes(
            [-1, *[number % 3 for number in range(ROWS - 1)]], ["reef", "sand", "weed"]
        )
        data = anndata.AnnData(
            numbers(), obs=pandas.DataFrame({"ground": group}, index=CELLS), var=pandas.DataFrame(index=GENES),
            layers={"scaled": 2 * numbers()}, obsm={"place": numbers()[:, :2]},
        )  # fmt: skip
        data.raw = data
        data.uns["note"] = "invented"
        (data.write_h5ad if kind == "hdf5" else data.write_zarr)(path)
    return path


def write_records(path: Path) -> Path:
    """AnnData as before 0.7: obs and var are records with an index. By hand, after the archived files of anndata."""
    with h5py.File(path, "w") as file:
        file["X"] = numbers()
        file["obs"] = np.array([(name.encode(), 1.0) for name in CELLS], [("index", "S12"), ("depth", "f8")])
        file["var"] = np.array([(name.encode(),) for name in GENES], [("index", "S12")])
    return path


def write_loom(path: Path) -> Path:
    """Loom 3 (loompy file format specification): genes × cells, attributes of either axis, a layer."""
    with h5py.File(path, "w") as file:
        file["matrix"] = numbers().T
        file["layers/spliced"] = numbers().T
        file["row_attrs/Gene"] = np.array(GENES, object)
        file["row_attrs/Length"] = np.arange(COLUMNS)
        file["col_attrs/CellID"] = np.array(CELLS, object)
        file.create_group("row_graphs")
        file.create_group("col_graphs")
        file["attrs/LOOM_SPEC_VERSION"] = "3.0.0"
    return path


def write_barcodes(path: Path) -> Path:
    """The feature-barcode layout, version 3: a sparse group with its names inside, features × barcodes by columns."""
    values = numbers() * (numbers() > 0)
    rows, columns = np.nonzero(values)
    with h5py.File(path, "w") as file:
        group = file.create_group("matrix")
        group["data"], group["indices"] = values[rows, columns], columns
        group["indptr"] = np.concatenate([[0], np.cumsum(np.count_nonzero(values, axis=1))])
        group["shape"] = np.array([COLUMNS, ROWS])
        group["barcodes"] = np.array([f"ACGT-{number}".encode() for number in range(ROWS)])
        group["features/id"] = np.array([f"ENS{number:03}".encode() for number in range(COLUMNS)])
        group["features/name"] = np.array([b"TBCE", b"TBCE", *[name.encode() for name in GENES[2:]]])
        group["features/feature_type"] = np.array([b"Gene Expression"] * COLUMNS)
    return path


def write_matlab(path: Path) -> Path:
    """MATLAB v7.3: a user block of 512 bytes before an HDF5 file, axes reversed, classes as attributes.

    The header is that of a Level 5 MAT-file: 116 bytes of text, 8 of subsystem offset, version 0x0200 and "IM"
    (MAT-File Format, MathWorks, table 1-1; 0x0200 for 7.3 from memory).
    """
    with h5py.File(path, "w", userblock_size=512) as file:
        file["A"] = numbers("f8").T
        file["A"].attrs["MATLAB_class"] = np.bytes_("double")
        file["word"] = np.array([[119], [111]], "u2")
        file["word"].attrs["MATLAB_class"] = np.bytes_("char")
    head = b"MATLAB 7.3 MAT-file, Platform: GLNXA64, Created on: invented".ljust(116) + bytes(8) + b"\x00\x02IM"
    with path.open("r+b") as file:
        file.write(head)
    return path


def write_series(path: Path) -> Path:
    """NWB: an electrical series, time first. By hand, after the NWB schema (TimeSeries: data, starting_time)."""
    with h5py.File(path, "w") as file:
        file.attrs["nwb_version"] = "2.7.0"
        series = file.create_group("acquisition/probe")
        series.attrs["neurodata_type"] = "ElectricalSeries"
        series["data"] = numbers()
        series["data"].attrs["unit"] = "volts"
        series["starting_time"] = 0.0
    return path


def write_frames(path: Path) -> Path:
    """A pandas frame in fixed format, one of two types, one with dates, and one as a table; by pandas and PyTables."""
    pandas, _ = library("pandas"), library("tables")
    plain = pandas.DataFrame(numbers(), index=CELLS, columns=GENES)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        plain.to_hdf(path, key="plain", format="fixed")
        plain.assign(count=np.arange(ROWS)).to_hdf(path, key="mixed", format="fixed")
        days = pandas.date_range("2026-03-01", periods=ROWS)
        pandas.DataFrame(numbers(), index=days, columns=GENES).to_hdf(path, key="dated", format="fixed")
        plain.to_hdf(path, key="rows", format="table")
    return path


def write_pytables(path: Path) -> Path:
    """A compressed array and a table; by PyTables."""
    tables = library("tables")
    with tables.open_file(str(path), "w") as file:
        file.create_carray("/", "frames", obj=numbers(), filters=tables.Filters(complevel=1))
        file.create_table("/", "events", obj=np.zeros(5, [("when", "f8"), ("what", "S4"), ("size", "i4")]))
    return path


def write_netcdf(path: Path, engine: str) -> Path:
    """netCDF-4 with a coordinate of text and one of numbers: gene × cell; by xarray through netCDF4 or h5netcdf."""
    xarray, _ = library("xarray"), library("netCDF4" if engine == "netcdf4" else engine)
    _expression(xarray).to_netcdf(path, engine=engine)
    return path


def write_xarray_zarr(path: Path, zarr_format: int) -> Path:
    """The same in Zarr; by xarray."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        _expression(library("xarray")).to_zarr(path, zarr_format=zarr_format, consolidated=False)
    return path


def _expression(xarray: Any) -> Any:
    return xarray.Dataset(
        {"expression": (("gene", "cell"), numbers().T)}, coords={"gene": GENES, "cell": np.arange(ROWS) * 10}
    )


def write_tensorstore(path: Path, driver: str) -> Path:
    """A Zarr array without anything around it, with named dimensions in version 3; by tensorstore."""
    tensorstore = library("tensorstore")
    names = {"dimension_names": ["time", "pixel"]} if driver == "zarr3" else {}
    values = numbers()
    spec = {"driver": driver, "kvstore": {"driver": "file", "path": str(path)}}
    if driver == "zarr3":
        grid = {"name": "regular", "configuration": {"chunk_shape": [10, 10]}}
        spec["metadata"] = {"shape": values.shape, "data_type": "float32", "chunk_grid": grid, **names}
    else:
        spec["metadata"] = {"shape": values.shape, "dtype": "<f4", "chunks": [10, 10]}
    tensorstore.open(spec, create=True).result().write(values).result()
    return path

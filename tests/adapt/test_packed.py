"""Packed entries are decoded as the CF conventions say, and as xarray and the netCDF library decode them."""

from __future__ import annotations

import pickle
import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import zarr

import bigsvd
from bigsvd.adapt.packed import BLOCK, decode
from bigsvd.errors import UnsupportedMatrixError
from bigsvd.source.packing import find_packing

Command = Callable[..., subprocess.CompletedProcess[str]]


def whole(source: Any) -> np.ndarray:
    rows, columns = source.spec.shape
    out = np.full((rows, columns), 7, source.spec.dtype)
    source.read((0, rows), (0, columns), out)
    return out


def unpacked(values: Any, attributes: dict[str, Any], dtype: str = "i2") -> np.ndarray:
    """Entries decoded by attributes alone."""
    packed = np.asarray(values, dtype)
    packing = find_packing(attributes, packed.dtype)
    if packing is None:
        return packed
    assert not packing.problem
    out = np.empty(packed.shape, packing.decoded)
    decode(packed.reshape(-1), out.reshape(-1), packing)
    return out


def written(path: Path, kind: str, values: np.ndarray, attributes: dict[str, Any]) -> Path:
    """A file of one array with attributes."""
    if kind == "hdf5":
        with h5py.File(path / "a.h5", "w") as file:
            file.create_dataset("x", data=values, chunks=(8, 16), compression="gzip").attrs.update(attributes)
        return path / "a.h5"
    version: Any = {"zarr2": 2, "zarr3": 3}[kind]
    array = zarr.create_array(
        path / "a.zarr", shape=values.shape, chunks=(8, 16), dtype=values.dtype, zarr_format=version, fill_value=0,
        attributes={name: value.item() if hasattr(value, "item") else value for name, value in attributes.items()},
        config={"write_empty_chunks": True},
    )  # fmt: skip
    array[:] = values
    return path / "a.zarr"


# ---------------------------------------------------------------------------------------- what the conventions say
def test_unpacked_is_packed_times_scale_plus_offset() -> None:
    """CF 8.1: the scale is applied first, then the offset is added."""
    found = unpacked([[0, 100, -100]], {"scale_factor": 0.01, "add_offset": 273.15})
    assert found.dtype == np.float64
    assert found.tolist() == [[273.15, 0.01 * 100 + 273.15, 0.01 * -100 + 273.15]]


def test_missing_is_told_on_packed_values_before_they_are_scaled() -> None:
    """CF 2.5.1: missing values are compared with the packed data; what they would be scaled to does not matter."""
    missing = {"_FillValue": np.int16(-32767), "missing_value": np.array([20, 30], "i2")}
    found = unpacked([[-32767, 10, 20, 30]], {"scale_factor": 0.5, "add_offset": 5.0, **missing})
    assert np.array_equal(found, [[np.nan, 10.0, np.nan, np.nan]], equal_nan=True)
    # 10 is what 10 is unpacked to: it is not missing because of that.
    assert unpacked([[10]], {"scale_factor": 0.5, "add_offset": 5.0, "_FillValue": np.int16(5)})[0, 0] == 10.0


@pytest.mark.parametrize(
    ("dtype", "factors", "expected"),
    [
        # CF 8.1: of the type of the attributes where that is float, else of double, of the wider of two.
        *(("i2", {"scale_factor": np.float32(0.5)}, "f4"), ("u1", {"add_offset": np.float32(0.5)}, "f4")),
        *(("i2", {"scale_factor": np.float64(0.5)}, "f8"), ("i2", {"scale_factor": 2}, "f8")),
        ("i2", {"scale_factor": np.float32(0.5), "add_offset": np.float64(1)}, "f8"),
        # 32 bits do not go into single precision, whatever the attributes are.
        ("i4", {"scale_factor": np.float32(0.5)}, "f8"),
        *(("i2", {"_FillValue": np.int16(3)}, "f4"), ("i4", {"_FillValue": np.int32(3)}, "f8")),
        *(("f4", {"_FillValue": np.float32(3)}, "f4"), ("f2", {"missing_value": np.float16(3)}, "f2")),
        *(("f8", {"scale_factor": np.float32(0.5)}, "f8"), ("f4", {"scale_factor": np.float32(0.5)}, "f4")),
        ("i1", {"_Unsigned": "true"}, "u1"),
    ],
)
def test_type_of_the_result(dtype: str, factors: dict[str, Any], expected: str) -> None:
    assert unpacked([[1, 2]], factors, dtype).dtype == expected


def test_bits_are_seen_as_unsigned_first_and_with_them_fill_value_and_limits() -> None:
    """NetCDF Users Guide, Attribute Conventions, _Unsigned: the attributes have the stored, signed type."""
    attributes = {"_Unsigned": "true", "_FillValue": np.int8(-1), "valid_max": np.int8(-6), "scale_factor": 2.0}
    packing = find_packing(attributes, np.dtype("i1"))
    assert packing is not None
    assert "_FillValue -1 (read as 255), valid range … to -6 (read as 250)" in packing.words
    found = unpacked([[0, 127, -128, -6, -5, -1]], attributes, "i1")
    assert np.array_equal(found, [[0, 254, 256, 500, np.nan, np.nan]], equal_nan=True)


def test_unsigned_false_is_not_true() -> None:
    assert unpacked([[-1, 3]], {"_Unsigned": "false", "scale_factor": 2.0}).tolist() == [[-2.0, 6.0]]
    assert unpacked([[-1, 3]], {"_Unsigned": "false"}).dtype == np.int16
    assert unpacked([[255, 3]], {"_Unsigned": "false", "scale_factor": 2.0}, "u1").tolist() == [[-2.0, 6.0]]


def test_valid_range_is_of_packed_values() -> None:
    attributes = {"valid_range": np.array([-5, 5], "i2"), "scale_factor": 0.1}
    assert np.isnan(unpacked([[-6, -5, 5, 6]], attributes)).tolist() == [[True, False, False, True]]
    attributes = {"valid_min": np.int16(0), "scale_factor": 0.1}
    assert np.isnan(unpacked([[-1, 0, 9999]], attributes)).tolist() == [[True, False, False]]


@pytest.mark.parametrize("factor", [0.1, -0.1])
def test_valid_range_of_the_type_of_unpacked_values_is_about_those(factor: float) -> None:
    """NetCDF Users Guide, Attribute Conventions, valid_range (quoted from memory)."""
    attributes = {"valid_range": np.array([-0.3, 0.3]), "scale_factor": factor}
    found = unpacked([[-4, -3, 3, 4]], attributes)
    assert np.isnan(found).tolist() == [[True, False, False, True]]
    packing = find_packing(attributes, np.dtype("i2"))
    assert packing is not None
    assert "of unpacked values" in packing.words


def test_what_changes_nothing_is_not_decoded() -> None:
    for attributes, dtype in (
        ({"_FillValue": np.float32("nan")}, "f4"),
        ({"scale_factor": 1.0, "add_offset": 0.0}, "i2"),
        ({"valid_range": np.array([-32768, 32767], "i2")}, "i2"),
        ({"valid_min": -(10**6)}, "i2"),
        ({"units": "K"}, "i2"),
        ({"_Unsigned": "true"}, "u2"),
        ({"_FillValue": 0}, "?"),
    ):
        assert find_packing(attributes, np.dtype(dtype)) is None, attributes


def test_what_is_no_entry_is_said_and_harms_nothing() -> None:
    packing = find_packing({"missing_value": -9999, "_FillValue": 7}, np.dtype("u1"))
    assert packing is not None
    assert packing.cautions == ("missing_value -9999 is no uint8: no entry can be equal to it",)
    assert packing.missing == (7,)
    packing = find_packing({"missing_value": "-1.e+34f"}, np.dtype("i4"))
    assert packing is not None
    assert (packing.words, packing.problem) == ("", "")
    assert "'-1.e+34f', no number" in packing.cautions[0]


@pytest.mark.parametrize("scale", ["a tenth", 0.0, float("nan"), np.array([0.1, 0.2]), h5py.Empty("f4")])
def test_a_scale_that_is_none_is_refused_unless_entries_are_taken_as_stored(scale: Any, tmp_path: Path) -> None:
    values = np.arange(12, dtype="i2").reshape(3, 4)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["x"] = values
        file["x"].attrs["scale_factor"] = scale
    with pytest.raises(UnsupportedMatrixError, match="scale_factor") as caught:
        bigsvd.open_matrix(tmp_path / "a.h5")
    assert "--raw" in caught.value.remedy
    assert np.array_equal(whole(bigsvd.open_matrix(tmp_path / "a.h5", raw=True)), values)


# --------------------------------------------------------------------------------------------------- as others decode
PACKINGS: dict[str, tuple[str, dict[str, Any]]] = {
    "signed": ("i2", {"scale_factor": 0.01, "add_offset": 273.15, "_FillValue": np.int16(-32767)}),
    "single": ("i2", {"scale_factor": np.float32(0.3052037), "add_offset": np.float32(0), "_FillValue": np.int16(-1)}),
    "unsigned": ("i1", {"_Unsigned": "true", "scale_factor": 0.5, "_FillValue": np.int8(-1)}),
    "signed after all": ("u1", {"_Unsigned": "false", "scale_factor": 0.5, "_FillValue": np.uint8(255)}),
    "no scale": ("i4", {"missing_value": np.int32(5), "_FillValue": np.int32(5)}),
    "floats": ("f4", {"_FillValue": np.float32(1e20)}),
    "float fill of doubles": ("f8", {"_FillValue": -999.0, "scale_factor": 2.0}),
    "wide": ("u4", {"scale_factor": 1e-3, "_FillValue": np.uint32(2**32 - 1)}),
}


def packed_values(dtype: str, attributes: dict[str, Any], shape: tuple[int, int] = (40, 60)) -> np.ndarray:
    rng = np.random.default_rng(8)
    kind = np.dtype(dtype)
    if kind.kind == "f":
        values = rng.normal(size=shape).astype(kind)
    else:
        limits = np.iinfo(kind)
        values = rng.integers(limits.min, limits.max, shape, dtype=kind, endpoint=True)
    values[rng.random(shape) < 0.1] = attributes.get("_FillValue", 0)
    return values


@pytest.mark.parametrize("kind", ["hdf5", "zarr2", "zarr3"])
@pytest.mark.parametrize("name", PACKINGS)
@pytest.mark.filterwarnings("ignore")  # of xarray, about conflicting or odd attributes
def test_entries_are_what_xarray_makes_of_them(name: str, kind: str, tmp_path: Path) -> None:
    import xarray

    dtype, attributes = PACKINGS[name]
    values = packed_values(dtype, attributes)
    raw = xarray.Dataset({"x": (("row", "column"), values, dict(attributes))})
    expected = xarray.decode_cf(raw, decode_times=False)["x"].values
    source = bigsvd.open_matrix(written(tmp_path, kind, values, attributes))
    found = whole(source)
    assert np.array_equal(np.isnan(found), np.isnan(expected))
    # xarray may compute in single precision where this rounds once.
    step = 4 * np.finfo(np.float32).eps if "f4" in (found.dtype.str[1:], expected.dtype.str[1:]) else 1e-15
    assert np.allclose(found, expected, rtol=step, atol=step * np.nanmax(np.abs(expected)), equal_nan=True)
    # Whatever the rectangle, and whether the buffer lies in one piece.
    again = np.zeros_like(found)
    for rows, columns in (((0, 17), (0, 60)), ((17, 40), (0, 31)), ((17, 40), (31, 60))):
        source.read(rows, columns, again[rows[0] : rows[1], columns[0] : columns[1]])
    assert np.array_equal(found, again, equal_nan=True)
    copy = pickle.loads(pickle.dumps(source))
    assert copy.spec == source.spec
    assert np.array_equal(whole(copy), found, equal_nan=True)
    stored = bigsvd.open_matrix(source.spec.name.rsplit(":", 1)[0], raw=True)
    assert np.array_equal(whole(stored), values)
    assert stored.spec.fingerprint != source.spec.fingerprint


@pytest.mark.parametrize("version", [2, 3])
@pytest.mark.filterwarnings("ignore")  # of xarray and zarr, about their formats
def test_stores_that_xarray_wrote_are_read_as_xarray_reads_them(version: Any, tmp_path: Path) -> None:
    import xarray

    rng = np.random.default_rng(5)
    tide = rng.normal(10, 3, (30, 20))
    tide[rng.random(tide.shape) < 0.1] = np.nan
    frames = {name: (("time", "place"), tide) for name in ("packed", "large", "plain")}
    encoding: dict[str, Any] = {
        "packed": {"dtype": "i2", "scale_factor": 0.01, "add_offset": 5.0, "_FillValue": -9},
        "large": {"_FillValue": 1e20},
        "plain": {},
    }
    xarray.Dataset(frames).to_zarr(tmp_path / "a.zarr", zarr_format=version, encoding=encoding, consolidated=False)
    with xarray.open_zarr(tmp_path / "a.zarr", consolidated=False) as there:
        for name in frames:
            found = whole(bigsvd.open_matrix(tmp_path / "a.zarr", name))
            assert np.allclose(found, there[name].values, rtol=1e-15, atol=1e-15, equal_nan=True), name
    assert bigsvd.open_matrix(tmp_path / "a.zarr", "plain").spec.decoded == ""


def test_zeros_of_a_zarr_array_stay_numbers_whatever_its_fill_value(tmp_path: Path) -> None:
    """Common practice: libraries write 0 as the fill value of format 2 for want of another."""
    array = zarr.create_array(tmp_path / "a.zarr", shape=(6, 5), chunks=(3, 5), dtype="u2", zarr_format=2, fill_value=0)
    array.attrs["_ARRAY_DIMENSIONS"] = ["cell", "gene"]
    array[:] = np.arange(30).reshape(6, 5)
    assert bigsvd.open_matrix(tmp_path / "a.zarr").spec.dtype == np.uint16


# The library knows _Unsigned "true" only; xarray, above, knows both words.
@pytest.mark.parametrize("name", [*(name for name in PACKINGS if name != "signed after all"), "range", "limit"])
def test_files_that_the_netcdf_library_wrote_are_read_as_it_reads_them(name: str, tmp_path: Path) -> None:
    netCDF4 = pytest.importorskip("netCDF4")
    dtype, attributes = PACKINGS.get(name, ("i2", {}))
    if name == "range":
        attributes = {"valid_range": np.array([-20000, 20000], "i2"), "scale_factor": 0.1}
    if name == "limit":
        attributes = {"valid_max": np.int16(100), "_FillValue": np.int16(-5), "add_offset": 1.0}
    values = packed_values(dtype, attributes)
    with netCDF4.Dataset(tmp_path / "a.nc", "w") as file:
        for axis, size in zip(("time", "place"), values.shape, strict=True):
            file.createDimension(axis, size)
        fill = attributes.get("_FillValue")
        variable = file.createVariable("x", dtype, ("time", "place"), fill_value=fill, chunksizes=(10, 60), zlib=True)
        variable.set_auto_maskandscale(False)
        variable.setncatts({key: value for key, value in attributes.items() if key != "_FillValue"})
        variable[:] = values
    with netCDF4.Dataset(tmp_path / "a.nc") as file:
        expected = np.ma.filled(np.ma.asarray(file["x"][:]).astype("f8"), np.nan)
    source = bigsvd.open_matrix(tmp_path / "a.nc", "/x")
    assert source.spec.decoded
    found = whole(source)
    step = 4 * np.finfo(np.float32).eps if found.dtype == np.float32 else 1e-15
    assert np.allclose(found, expected, rtol=step, atol=step * np.nanmax(np.abs(expected)), equal_nan=True)


# ----------------------------------------------------------------------------------------- a whole run, the words
def make_tide(folder: Path, kind: str = "hdf5") -> tuple[Path, np.ndarray]:
    rng = np.random.default_rng(3)
    pool = rng.normal(size=(300, 4)) * [40, 20, 10, 5] @ rng.normal(size=(4, 50)) + rng.normal(size=(300, 50)) + 500
    values = np.round((pool - 273.15) / 0.01).astype("i2")
    path = written(folder, kind, values, {"scale_factor": 0.01, "add_offset": 273.15, "_FillValue": np.int16(-32767)})
    return path, values


@pytest.mark.parametrize("kind", ["hdf5", "zarr2", "zarr3"])
def test_a_decomposition_is_of_the_decoded_matrix(kind: str, tmp_path: Path) -> None:
    path, values = make_tide(tmp_path, kind)
    decoded = values * 0.01 + 273.15
    expected = np.linalg.svd(decoded - decoded.mean(0), compute_uv=False)[:4]
    factors = bigsvd.decompose(path, rank=4)
    assert np.allclose(factors.singular_values, expected, rtol=1e-10)
    assert np.allclose(factors.column_mean, decoded.mean(0), rtol=1e-12)
    words = "scale_factor 0.01, add_offset 273.15, _FillValue -32767; as float64"
    assert factors.attributes["source"]["decoded"] == words
    raw = bigsvd.decompose(path, rank=4, raw=True)
    assert np.allclose(raw.singular_values * 0.01, expected, rtol=1e-9)
    assert raw.attributes["source"]["decoded"] == ""


def test_memory_of_decoding_is_counted(tmp_path: Path) -> None:
    path, _ = make_tide(tmp_path)
    decoded, raw = bigsvd.open_matrix(path).spec, bigsvd.open_matrix(path, raw=True).spec
    assert decoded.decode_bytes - raw.decode_bytes >= BLOCK * 10
    assert decoded.decoded_bytes == 4 * raw.decoded_bytes


def test_the_commands_say_what_is_decoded(tmp_path: Path, command: Command) -> None:
    path, _ = make_tide(tmp_path)
    words = "scale_factor 0.01, add_offset 273.15, _FillValue -32767; as float64"

    def said(*line: object) -> str:
        ended = command(*line)
        assert ended.returncode == 0, ended.stderr
        return " ".join((ended.stdout + ended.stderr).split())

    assert f"/x: decoded by {words}; --raw takes entries as stored" in said("inspect", path)
    assert f"decoded {words}" in said("plan", path, "--rank", 4)
    stored = "attributes scale_factor, add_offset, _FillValue are not applied: entries are taken as stored"
    assert f"caution {stored}" in said("plan", path, "--rank", 4, "--raw")
    assert f"decoded {words}" in said("decompose", path, "--rank", 4, "--out", tmp_path / "o.zarr", "--quiet")
    assert said("verify", tmp_path / "o.zarr", path, "--quiet")
    other = command("verify", tmp_path / "o.zarr", path, "--raw", "--quiet")
    assert other.returncode == 2
    assert "Leave out --raw." in other.stderr


def test_a_real_file_of_cloud_tops_is_read_as_the_netcdf_library_reads_it(shared_data: Path) -> None:
    netCDF4 = pytest.importorskip("netCDF4")
    path = shared_data / "files/netcdf4/Unidata+netcdf4-python/test/20171025_2056.Cloud_Top_Height.nc"
    if not path.exists():
        pytest.skip("real files: this one is missing")
    with netCDF4.Dataset(path) as file:
        expected = np.ma.filled(file["HT"][:].astype("f8"), np.nan)
    found = whole(bigsvd.open_matrix(path, "/HT"))
    assert found.dtype == np.float32
    # 38 % of it is missing, by the list of traps beside the file.
    assert np.isnan(found).mean() == pytest.approx(0.38, abs=0.005)
    assert np.allclose(found, expected, rtol=4e-7, equal_nan=True)

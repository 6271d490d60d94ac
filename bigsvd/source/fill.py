"""The value that a file declares for what was never written, as an entry of the matrix."""

from __future__ import annotations

import base64
from typing import Any

import numpy as np

_WORDS = {"NaN": np.nan, "Infinity": np.inf, "-Infinity": -np.inf}


class FillError(ValueError):
    """No entry can be made of what is declared; says why."""


def hdf5_fill(dataset: Any, dtype: np.dtype) -> np.generic:
    """Fill value of an HDF5 dataset, as the library would answer it.

    Raises
    ------
    FillError
        If there is none: the library then leaves whatever is in the buffer.
    """
    import h5py

    plist = dataset.id.get_create_plist()
    if plist.fill_value_defined() == h5py.h5d.FILL_VALUE_UNDEFINED or plist.get_fill_time() == h5py.h5d.FILL_TIME_NEVER:
        raise FillError("the dataset declares that it has no fill value")
    value = np.asarray(dataset.fillvalue, dataset.dtype)
    if value.dtype.names is not None:
        value = np.asarray(value[value.dtype.names[0]] + 1j * value[value.dtype.names[1]])
    return _finite(value.astype(dtype)[()])


def zarr_fill(declared: Any, stored: np.dtype, dtype: np.dtype) -> np.generic:
    """Fill value that the metadata of a Zarr array declare, format 2 or 3.

    Parameters
    ----------
    declared : object
        ``fill_value`` of the document.
    stored, dtype : numpy.dtype
        Type of the stored entries, and the one they are decoded to.

    Raises
    ------
    FillError
        If none is declared, or none that is a finite entry of this type.
    """
    if declared is None:
        raise FillError("the array declares no fill value (null)")
    try:
        if stored.names is not None:
            return _finite(_pair(declared, stored, dtype))
        if dtype.kind == "c":
            parts = declared if isinstance(declared, list) else [declared, 0]
            real, imaginary = (_number(part, np.dtype(f"f{dtype.itemsize // 2}")) for part in parts)
            return _finite(dtype.type(complex(real, imaginary)))
        return _finite(_number(declared, dtype))
    except (TypeError, ValueError, OverflowError) as error:
        if isinstance(error, FillError):
            raise
        raise FillError(f"the fill value {declared!r} is no entry of type {dtype}") from error


def _pair(declared: Any, stored: np.dtype, dtype: np.dtype) -> np.generic:
    """Complex numbers kept as records: zero, or the bytes of one record in base 64."""
    if declared == 0:
        return dtype.type(0)
    record = np.frombuffer(base64.b64decode(declared, validate=True), stored)
    if record.size != 1 or stored.names is None:
        raise ValueError("not one record")
    real, imaginary = (record[name][0] for name in stored.names)
    return dtype.type(complex(real, imaginary))


def _number(declared: Any, dtype: np.dtype) -> np.generic:
    """One real number: as JSON has it, as a word, or as the bits of a float in hexadecimal."""
    if isinstance(declared, str):
        if dtype.kind != "f":
            raise ValueError("a word")
        if declared.startswith("0x"):
            bits: np.generic = np.array(int(declared, 16), f"u{dtype.itemsize}").view(dtype).flat[0]
            return bits
        return dtype.type(_WORDS[declared]) if declared in _WORDS else _refuse()
    if not isinstance(declared, int | float):
        _refuse()
    with np.errstate(over="ignore"):
        value: np.generic = dtype.type(declared) if dtype.kind in "fb" else _whole(declared, dtype)
    if dtype.kind == "b" and declared not in (0, 1):
        _refuse()
    return value


def _whole(declared: int | float, dtype: np.dtype) -> np.generic:
    """A whole number within the range of its type."""
    limits = np.iinfo(dtype)
    if declared != int(declared) or not limits.min <= declared <= limits.max:
        _refuse()
    return dtype.type(int(declared))


def _refuse() -> Any:
    raise ValueError("no number")


def _finite(value: Any) -> np.generic:
    """The value itself, if it is finite."""
    if not np.isfinite(value):
        raise FillError(f"the fill value is {value}, which is not finite")
    found: np.generic = value
    return found

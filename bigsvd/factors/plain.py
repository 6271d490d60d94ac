"""Attributes as plain JSON and back; JSON has no NaN and no infinity, so these become ``{"number": "NaN"}``."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, is_dataclass
from datetime import date
from pathlib import PurePath
from typing import Any

import numpy as np

from bigsvd.errors import OptionError

_NAMES = ("NaN", "Infinity", "-Infinity")


def to_plain(value: Any, where: str = "attributes") -> Any:
    """Turn a value into what JSON can hold, numbers unchanged to the last bit.

    Parameters
    ----------
    value : object
        Mappings, sequences, NumPy scalars and arrays, dataclasses, paths, dates, text and numbers.
    where : str
        Its place, for the message.

    Returns
    -------
    dict, list, str, int, float, bool or None
        Floats that are not finite become ``{"number": "NaN"}``, ``"Infinity"`` or ``"-Infinity"``.

    Raises
    ------
    OptionError
        If a value of another kind is met.

    Examples
    --------
    >>> to_plain({"share": float("nan"), "shape": (3, 2)})
    {'share': {'number': 'NaN'}, 'shape': [3, 2]}
    >>> from_plain({"share": {"number": "-Infinity"}})
    {'share': -inf}
    """
    if isinstance(value, np.generic | np.ndarray):
        value = value.tolist()
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, float):
        if math.isfinite(value):
            return value
        return {"number": "NaN" if math.isnan(value) else "Infinity" if value > 0 else "-Infinity"}
    if is_dataclass(value) and not isinstance(value, type):
        value = asdict(value)
    if isinstance(value, Mapping):
        return {str(key): to_plain(entry, f"{where}.{key}") for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [to_plain(entry, f"{where}[{index}]") for index, entry in enumerate(value)]
    if isinstance(value, PurePath | np.dtype):
        return str(value)
    if isinstance(value, date):
        return value.isoformat()
    raise OptionError(
        f"{where} is a {type(value).__name__}, which JSON cannot hold",
        remedy=f"Give {where} as text, a number, a list or a mapping.",
    )


def from_plain(value: Any) -> Any:
    """Undo `to_plain` for the numbers that JSON does not know."""
    if isinstance(value, dict):
        if len(value) == 1 and value.get("number") in _NAMES:
            return float(value["number"])
        return {key: from_plain(entry) for key, entry in value.items()}
    if isinstance(value, list):
        return [from_plain(entry) for entry in value]
    return value

"""Whatever a run knows as plain JSON values: no NaN, no infinity, no types of ours."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import fields, is_dataclass
from typing import Any

import numpy as np

Json = dict[str, Any]


def plain(thing: Any) -> Any:
    """Turn a value into what JSON can hold.

    NaN and infinity become null, NumPy types their Python kin, tuples and arrays lists, dataclasses objects,
    everything else its text.

    >>> plain({"bound": np.float32("nan"), "shape": (3, 4), "order": np.array([True, False])})
    {'bound': None, 'shape': [3, 4], 'order': [True, False]}
    """
    if thing is None or isinstance(thing, str | bool | int):
        return thing
    if isinstance(thing, float):
        return thing if math.isfinite(thing) else None
    if isinstance(thing, np.dtype):
        return str(thing)
    if isinstance(thing, np.ndarray | np.generic):
        return plain(thing.tolist())
    if isinstance(thing, Mapping):
        return {str(key): plain(value) for key, value in thing.items()}
    if isinstance(thing, list | tuple | set | frozenset):
        return [plain(item) for item in thing]
    if is_dataclass(thing) and not isinstance(thing, type):
        return {part.name: plain(getattr(thing, part.name)) for part in fields(thing) if not part.name.startswith("_")}
    return str(thing)

"""What a sweep has added up, and what the pilot found, as facts and arrays of a record, and back."""

from __future__ import annotations

from dataclasses import fields
from typing import Any

import numpy as np

from bigsvd.prepare import Preparation
from bigsvd.solve import Pilot
from bigsvd.sweep import Partial

_SCALARS = ("lines", "energy", "cancelled", "bad", "infinite", "first_bad", "bad_lines", "overflow", "beyond")
_LISTS = ("line_mean", "line_inverse_scale", "line_constant")
_PREPARED = ("shift", "inverse_scale", "about")


def from_partial(sums: Partial) -> tuple[dict[str, Any], dict[str, np.ndarray]]:
    """Facts and arrays of the sums of a sweep."""
    facts = {name: _plain(getattr(sums, name)) for name in _SCALARS}
    arrays: dict[str, np.ndarray] = {}
    for field in fields(Partial):
        value = getattr(sums, field.name)
        if field.name in _SCALARS or value is None:
            continue
        if field.name == "ledger":
            arrays["ledger"] = np.array(value, np.uint64)
        elif field.name in _LISTS:
            arrays[field.name] = np.concatenate(value) if value else np.zeros(0)
        else:
            arrays[field.name] = value
    return facts, arrays


def to_partial(facts: dict[str, Any], arrays: dict[str, np.ndarray]) -> Partial:
    """The sums that `from_partial` took apart."""
    sums = Partial(**{name: facts[name] for name in _SCALARS if name in facts})
    if sums.first_bad is not None:
        sums.first_bad = (int(sums.first_bad[0]), int(sums.first_bad[1]))
    for name, value in arrays.items():
        if name == "ledger":
            sums.ledger = [int(word) for word in value]
        else:
            setattr(sums, name, [value] if name in _LISTS else value)
    return sums


def from_pilot(pilot: Pilot) -> tuple[dict[str, Any], dict[str, np.ndarray]]:
    """Facts and arrays of a pilot."""
    facts = {"energy": float(pilot.energy), "single_fits": bool(pilot.single_fits)}
    arrays = {"theta": pilot.theta}
    for name in ("directions", "rounding"):
        if getattr(pilot, name) is not None:
            arrays[name] = getattr(pilot, name)
    for name in _PREPARED:
        if getattr(pilot.preparation, name) is not None:
            arrays[f"preparation_{name}"] = getattr(pilot.preparation, name)
    return facts, arrays


def to_pilot(facts: dict[str, Any], arrays: dict[str, np.ndarray], preparation: Preparation) -> Pilot:
    """The pilot that `from_pilot` took apart; `preparation` is the one it began with."""
    made = Preparation(
        preparation.across_features,
        preparation.center,
        preparation.scale,
        *(arrays.get(f"preparation_{name}") for name in _PREPARED),
    )
    return Pilot(
        made, arrays.get("directions"), arrays["theta"], facts["energy"], arrays.get("rounding"), facts["single_fits"]
    )


def _plain(value: Any) -> Any:
    """A scalar as JSON writes it; doubles keep every bit."""
    return value.item() if isinstance(value, np.generic) else value

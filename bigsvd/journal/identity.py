"""What makes two runs the same run: input, options, plan, versions, processor; where it is written; what differs."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Iterator, Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any

from bigsvd import machine
from bigsvd.errors import DamagedJournalError
from bigsvd.plan import Plan

IDENTITY = "identity.json"
FORMAT = 1
# Options that change the time a run takes, not its bits; what follows from the ceiling is compared as the plan.
_FREE = ("memory", "workers")
_PACKAGES = ("bigsvd", "numpy", "scipy")
_TITLES = {
    "input": "the input",
    "options": "option",
    "plan": "the plan",
    "versions": "version of",
    "processor": "the processor",
}


def identity_of(plan: Plan) -> dict[str, Any]:
    """Everything that the bits of a run follow from.

    Parameters
    ----------
    plan : Plan

    Returns
    -------
    dict
        Two levels, of what JSON can hold.
    """
    spec, geometry = plan.spec, plan.geometry
    request = {name: value for name, value in asdict(plan.request).items() if name not in _FREE}
    return {
        "input": {
            "name": spec.name,
            "shape": list(spec.shape),
            "type": str(spec.dtype),
            "fingerprint": spec.fingerprint,
        },
        "options": request,
        "plan": {
            "route": plan.route,
            "axis": ("rows", "columns")[geometry.axis],
            "panels": geometry.panels,
            "panel edges": _digest(geometry.edges),
            "waves": _digest(plan.waves),
            "pilot": _digest(plan.pilot_panels),
            "columns": list(asdict(plan.widths).values()),
            "matrix held in memory": plan.resident,
            **({"products": plan.products} if plan.geometry.sparse else {}),
        },
        "versions": {name: machine.package_version(name) for name in _PACKAGES},
        "processor": {"matrix kernels": _kernels()},
    }


def differences(before: Mapping[str, Any], now: Mapping[str, Any]) -> Iterator[str]:
    """Say what differs between two identities, a line each."""
    for part, title in _TITLES.items():
        found = before.get(part)
        then, here = found if isinstance(found, Mapping) else {}, dict(now.get(part, {}))
        for name in [*then, *(name for name in here if name not in then)]:
            if then.get(name) != here.get(name):
                label = name.replace("_", "-") if part == "options" else name
                place = f"{title} --{label}" if part == "options" else f"{title} {label}"
                yield f"{place}: {_show(then.get(name))} when the run began, {_show(here.get(name))} now"


def write_identity(folder: Path, record: Mapping[str, Any]) -> None:
    """Write what the folder of a run says of it, whole or not at all, and flush it to the device."""
    new = folder / f"{IDENTITY}.new"
    with open(new, "w") as file:
        json.dump({"format": FORMAT, **record}, file, indent=1)
        file.flush()
        os.fsync(file.fileno())
    os.replace(new, folder / IDENTITY)


def read_identity(folder: Path) -> dict[str, Any]:
    """What the folder of a run says of it, as it was written when the run began.

    Raises
    ------
    DamagedJournalError
        If it says nothing, or nothing that is understood here.
    """
    try:
        record: dict[str, Any] = json.loads((folder / IDENTITY).read_text())
        if record["format"] != FORMAT:
            raise ValueError(f"format {record['format']}, and {FORMAT} is known here")
        if not isinstance(record["identity"], dict) or not isinstance(record["scratch"], str):
            raise ValueError("it is none of ours")
        return record
    except (OSError, ValueError, KeyError, TypeError, RecursionError) as error:
        raise DamagedJournalError(
            f"{folder} does not say which run it is of",
            evidence=[f"{IDENTITY}: {error}"],
            remedy="Add --start-over to discard it, or choose another --out.",
        ) from error


def _digest(value: object) -> str:
    """Short name of a long value."""
    return hashlib.blake2b(repr(value).encode(), digest_size=8).hexdigest()


def _kernels() -> str:
    """The kernels that BLAS chose for this processor; other ones round otherwise."""
    from threadpoolctl import threadpool_info

    pools = [pool for pool in threadpool_info() if pool["user_api"] == "blas"]
    return ", ".join(sorted({str(pool.get("architecture", pool["internal_api"])) for pool in pools}))


def _show(value: Any) -> str:
    """A value for people."""
    return "not given" if value is None else str(value)

"""Results as JSON: what machine and code they come from, and the newest of each case out of all that were kept."""

from __future__ import annotations

import importlib.metadata
import json
import platform
import subprocess
import time
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

PARTS = ("compare", "limits", "workers", "growth")
LIBRARIES = (
    *("bigsvd", "numpy", "scipy", "dask", "h5py", "imagecodecs", "zarr", "hdf5plugin", "numcodecs", "zarrs"),
    "scikit-learn",
)
# Above this load before the start others were at work.
BUSY = 0.7


@dataclass(frozen=True)
class Merged:
    """The newest of everything.

    Attributes
    ----------
    newest : dict
        The record written last under the settings of the newest comparison: machine, versions, settings.
    compare, limits, workers : dict
        Newest entry by name of case.
    growth : dict or None
        The newest record of growth.
    notes : list of str
        Where entries do not come from the machine, versions or code of the newest.
    """

    newest: dict[str, Any]
    compare: dict[str, dict[str, Any]] = field(default_factory=dict)
    limits: dict[str, dict[str, Any]] = field(default_factory=dict)
    workers: dict[str, dict[str, Any]] = field(default_factory=dict)
    growth: dict[str, Any] | None = None
    notes: list[str] = field(default_factory=list)


def machine_facts() -> dict[str, Any]:
    """Processors, memory and versions; no names of hosts or places."""
    import psutil

    from bigsvd.machine import processors

    return {
        "processors": processors(),
        "processor": _processor(),
        "clock_ghz": _clock(),
        "memory_bytes": int(psutil.virtual_memory().total),
        "system": platform.system(),
        "python": platform.python_version(),
        "versions": {name: found for name in LIBRARIES if (found := _version(name))},
    }


def commit() -> str:
    """The commit of the checkout, with a plus where the program differs from it; empty outside a checkout."""
    here = Path(__file__).parents[1]

    def git(*words: str) -> str:
        done = subprocess.run(["git", *words], cwd=here, capture_output=True, text=True, check=False)
        return done.stdout.strip() if done.returncode == 0 else ""

    try:
        found = git("rev-parse", "--short", "HEAD")
        return f"{found}{'+' if git('status', '--porcelain', '--', 'bigsvd') else ''}"
    except OSError:
        return ""


def save_record(
    folder: Path,
    part: str,
    settings: dict[str, Any],
    entries: list[dict[str, Any]],
    *,
    load: float,
    started: float,
    **more: Any,
) -> Path:
    """Write a record of one part; return where.

    Parameters
    ----------
    folder : Path
    part : str
        One of `PARTS`.
    settings : dict
        What must be equal for entries of two records to stand in one table.
    entries : list of dict
        One a case, with its name.
    load : float
        Of the machine before anything was run.
    started : float
        `time.perf_counter` at the start.
    """
    assert part in PARTS
    folder.mkdir(parents=True, exist_ok=True)
    record = {
        "part": part,
        "date": time.strftime("%Y-%m-%d"),
        "commit": commit(),
        "machine": machine_facts(),
        "load": load,
        "settings": settings,
        "entries": entries,
        "seconds": time.perf_counter() - started,
        **more,
    }
    stamp = f"{time.strftime('%Y%m%dT%H%M%S')}-{time.time_ns() % 10**9:09d}"
    path = folder / f"{stamp}-{part}.json"
    path.write_text(json.dumps(record, indent=1))
    return path


def merge(folder: Path) -> Merged | None:
    """Put the newest entries of every part together; None where there are no records."""
    records = [_read(path) for path in sorted(folder.glob("*.json"))]
    records = [record for record in records if record.get("part") in PARTS]
    if not records:
        return None
    # Entries under other settings are not comparable: those of the newest comparison hold for the page.
    leading = next((record for record in reversed(records) if record["part"] == "compare"), records[-1])
    records = [record for record in records if record["settings"] == leading["settings"]]
    newest = records[-1]
    entries: dict[str, dict[str, dict[str, Any]]] = {"compare": {}, "limits": {}, "workers": {}}
    sources: dict[tuple[str, str], dict[str, Any]] = {}
    for record in records:
        for entry in record["entries"] if record["part"] in entries else []:
            entries[record["part"]][entry["name"]] = entry
            sources[record["part"], entry["name"]] = record
    growth = next((record for record in reversed(records) if record["part"] == "growth"), None)
    used = [*sources.values(), *([growth] if growth else [])]
    return Merged(newest, **entries, growth=growth, notes=_notes(used, newest))


def _notes(used: list[dict[str, Any]], newest: dict[str, Any]) -> list[str]:
    """What sets records apart from the newest, each once, with the parts it concerns."""
    found: dict[str, dict[str, None]] = {}
    for record in used:
        if words := _other(record, newest):
            found.setdefault(words, {})[f"{record['part']} of {record['date']}"] = None
    return [f"{', '.join(parts)}: {words}" for words, parts in found.items()]


def _other(record: dict[str, Any], newest: dict[str, Any]) -> str:
    """What sets a record apart from the newest, in words; empty for nothing."""
    words = []
    machine, last = record["machine"], newest["machine"]
    if record["commit"] != newest["commit"]:
        words.append(f"bigsvd at commit {record['commit'] or 'unknown'}")
    if any(machine[name] != last[name] for name in ("processors", "processor", "memory_bytes", "system", "python")):
        words.append(f"{machine['processors']} processors ({machine['processor']}), Python {machine['python']}")
    words += [f"{name} {old}" for name, old in machine["versions"].items() if last["versions"].get(name) != old]
    if record["load"] > BUSY:
        words.append(f"others were at work (load above {BUSY:g} before it began)")
    return ", ".join(words)


def _read(path: Path) -> dict[str, Any]:
    found = json.loads(path.read_text())
    return found if isinstance(found, dict) else {}


def _processor() -> str:
    """Model where the system tells it."""
    try:
        lines = Path("/proc/cpuinfo").read_text().splitlines()
    except OSError:
        return platform.machine()
    told = {key.strip(): value.strip() for key, _, value in (line.partition(":") for line in lines)}
    return told.get("model name", platform.machine())


def _clock() -> float:
    """Clock now, GHz; 0 where the system does not tell."""
    import psutil

    found = psutil.cpu_freq()
    return found.current / 1000 if found else 0.0


def _version(name: str) -> str | None:
    try:
        return importlib.metadata.version(name)
    except importlib.metadata.PackageNotFoundError:
        return None

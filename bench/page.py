"""docs/performance.md: what was measured, on what, and what was not reached."""

from __future__ import annotations

import importlib.metadata
import os
import platform
from pathlib import Path
from typing import Any

from bigsvd.units import show_bytes, show_seconds

LIBRARIES = ("bigsvd", "numpy", "scipy", "dask", "h5py", "zarr", "zarrs", "isal", "scikit-learn")
# Ratios to the best general-purpose setting of equal error, whole processes.
GOALS = {"hdf5-plain": 3.0, "hdf5-gzip": 5.0, "zarr-zstd": 8.0}


def machine_facts() -> dict[str, Any]:
    """Processors, memory and versions; no names of hosts or places."""
    import psutil

    from bigsvd.machine import processors

    return {
        "processors": processors(),
        "processor": _processor(),
        "memory_bytes": int(psutil.virtual_memory().total),
        "system": platform.system(),
        "python": platform.python_version(),
        "load": os.getloadavg()[0],
        "versions": {name: found for name in LIBRARIES if (found := _version(name))},
    }


def _processor() -> str:
    """Model and clock where the system tells them."""
    try:
        lines = Path("/proc/cpuinfo").read_text().splitlines()
    except OSError:
        return platform.machine()
    told = {key.strip(): value.strip() for key, _, value in (line.partition(":") for line in lines)}
    clock = float(told.get("cpu MHz", "0")) / 1000
    return f"{told.get('model name', platform.machine())}{f', {clock:.1f} GHz' if clock else ''}"


def _version(name: str) -> str | None:
    try:
        return importlib.metadata.version(name)
    except importlib.metadata.PackageNotFoundError:
        return None


def write_page(path: Path, record: dict[str, Any]) -> None:
    """Write the page from a record of `bench/run.py`."""
    path.write_text("\n".join(page_lines(record)) + "\n")


def page_lines(record: dict[str, Any]) -> list[str]:
    """The page as lines of Markdown."""
    machine = record["machine"]
    versions = ", ".join(f"{name} {version}" for name, version in machine["versions"].items())
    prepared = "column means subtracted by all" if record["centred"] else "nothing centred, as `svd_compressed` has it"
    load = machine["load"]
    busy = f"; with a load of {load:.1f} others were at work: trust processor seconds more" if load > 3 else ""
    lines = [
        "# Performance",
        "",
        f"Written by `scripts/bench` on {record['date']}. {machine['processors']} processors ({machine['processor']}), "
        f"{show_bytes(machine['memory_bytes'])} of memory, {machine['system']}, Python {machine['python']}; "
        f"{versions}.",
        "",
        f"Rank {record['rank']}, {prepared}. Every time is that of a whole process, from its start to its factors in "
        f"files: median of {record['runs']} interleaved runs (lowest–highest, how many){busy}. All files were in the "
        "page cache. bigsvd proves its intervals to a tolerance of 1e-3, and checks them on slices of the file, within "
        "that time; the others prove nothing: their number of iterations was found by trying against the known truth.",
        "",
        "*value error*: largest relative error of the singular values; *angle*: largest angle between the spaces of "
        "right vectors, radians; both against factors that another program computed in double (`bench/exact.py`). "
        "*processor s*: seconds of all threads, user and system together, which other programs disturb least. "
        f"*peak*: largest resident size; *over*: above the ceiling of {show_bytes(record['memory_bytes'])}, which only "
        "bigsvd can be given. dask reads bands of about 16 MB and multiplies with one thread a task, its fastest "
        "setting here. Of equal error is what reaches bigsvd's error, or 1e-6, where single precision ends.",
        "",
    ]
    for case in record["cases"]:
        lines += [f"## {case['title']}", ""]
        lines += [
            f"{show_bytes(case['decoded_bytes'])} decoded, {show_bytes(case['stored_bytes'])} stored. {_own(case)}",
            "",
        ]
        lines += [*case["table"], ""]
        lines += [f"{each['name']} failed: {' '.join(each['message'])}" for each in case["failed"]]
        lines += [_verdict(case), ""]
    return lines + _missed(record) + [f"The whole run took {show_seconds(record['seconds'])}."]


def _own(case: dict[str, Any]) -> str:
    """What bigsvd did, in a sentence."""
    told = case["candidates"][0]["told"]
    reads = told["bytes_read"] / told["matrix_bytes"]
    parts = ", ".join(f"{stage} {seconds:.1f}" for stage, seconds in told["timings"].items())
    sweeps = f"{told['sweeps']} sweep{'s' if told['sweeps'] > 1 else ''}"
    return (
        f"bigsvd: {told['route']}, {sweeps}, {reads:.2f} reads of the file in all, {told['precision']} precision; "
        f"{told['verdict']}. Seconds of the last run: {parts}."
    )


def _verdict(case: dict[str, Any]) -> str:
    best = case["best"]
    if best is None:
        return "No general-purpose setting reached this error below the ceiling."
    return (
        f"Best general-purpose setting of equal error below the ceiling: {best['name']}, **{best['ratio']:.2f} ×** "
        f"the time of bigsvd ({best['fastest_ratio']:.2f} × between the fastest runs of each, "
        f"{best['processor_ratio']:.2f} × in processor seconds)."
    )


def _missed(record: dict[str, Any]) -> list[str]:
    """Goals that were not reached."""
    lines = ["## What was not reached", ""]
    missed = []
    for case in record["cases"]:
        kind = next((kind for kind in GOALS if case["name"].startswith(kind)), None)
        if kind and case["best"] and case["best"]["ratio"] < GOALS[kind]:
            missed.append(f"- {case['title']}: {case['best']['ratio']:.2f} × where {GOALS[kind]:g} × is wanted.")
        told = case["candidates"][0]["told"]
        if not told["tolerance_met"]:
            missed.append(f"- {case['title']}: tolerance not met: {told['verdict']}.")
        if case["candidates"][0]["peak_bytes"] and max(case["candidates"][0]["peak_bytes"]) > record["memory_bytes"]:
            missed.append(f"- {case['title']}: bigsvd went over its ceiling.")
    return [*lines, *(missed or ["Nothing of what these cases measure."]), ""]

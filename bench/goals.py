"""What is wanted, and for every miss why: sentences made of measured figures alone."""

from __future__ import annotations

from typing import Any

from bench.phases import FLOOR, IN_SWEEP
from bench.records import Merged
from bench.view import View, label, seconds_and_error, stages_of
from bigsvd.units import show_bytes

# Wanted and aimed at: time of the best general-purpose setting of equal error over that of bigsvd, whole processes.
RATIOS = {
    "hdf5-plain": (3.0, 4.0),
    "hdf5-gzip": (5.0, 8.0),
    "hdf5-bitshuffle": (5.0, 8.0),
    "zarr-zstd": (8.0, 12.0),
    "zarr-blosc": (8.0, 12.0),
}
READS = {"exponential": 2.1, "inverse": 3.1, "inverse-root": 4.1}
CLOSENESS, GROWTH, WORKERS, OVER_CEILING, PREDICTION = 1.15, 1.10, 1.8, 20.0, 0.25
# Only this shape has a goal of closeness.
FIRST_COLUMNS = 5_000
# Parts below this share of a whole are not worth a word.
WORTH = 0.05


def views(merged: Merged) -> list[View]:
    """All cases of the comparison."""
    return [View(entry, merged.limits.get(name)) for name, entry in merged.compare.items()]


def missed(merged: Merged) -> list[str]:
    """Every goal that was not reached, with the reason."""
    ceiling = merged.newest["settings"]["memory_bytes"]
    found = []
    for view in views(merged):
        for check in (_ratio, _reads, _prediction, _tolerance):
            found += [f"{view.label}: {words}" for words in check(view)]
        if view.peak > ceiling:
            planned = show_bytes(view.told["planned_bytes"])
            found.append(
                f"{view.label}: peak {show_bytes(view.peak)} above the ceiling of {show_bytes(ceiling)}; planned were"
                f" {planned}."
            )
    for entry in merged.limits.values():
        found += [f"{label(entry)}: {words}" for words in _closeness(entry)]
    for entry in merged.workers.values():
        found += [f"{label(entry)}: {words}" for words in _workers(entry)]
    return found + (_growth(merged.growth, ceiling) if merged.growth else [])


def _ratio(view: View) -> list[str]:
    """The best peer against bigsvd, and what of bigsvd's time could still go."""
    wanted, shown = RATIOS[view.entry["kind"]][0], view.best or view.nearest
    if shown is None or view.least_ratio >= wanted:
        return []
    own = view.own["median_seconds"]
    than = "against" if view.best else "at least, none being as near; the nearest is"
    words = (
        f"{view.least_ratio:.2f} × where {wanted:g} × is wanted, {than} {shown['name']},"
        f" {seconds_and_error(shown)}. Of bigsvd's {own:.1f} s, {_spent(view)}."
    )
    if view.limits is not None:
        most = view.limits["workers"][max(view.limits["workers"], key=int)]
        possible = shown["median_seconds"] / (own - most["seconds"] + most["floor"])
        words += f" With its sweeps at their floor of {most['floor']:.2f} s it would be {possible:.2f} ×."
    return [words]


def _spent(view: View) -> str:
    """Where the time of a whole process went."""
    own = view.own["median_seconds"]
    parts = [(own - view.inside_seconds, "starting and ending the process")]
    parts += [(seconds, stage) for stage, seconds in view.stages().items()]
    parts.sort(reverse=True)
    return ", ".join(f"{seconds:.1f} s {phase}" for seconds, phase in parts if seconds >= WORTH * own)


def _reads(view: View) -> list[str]:
    wanted = READS.get(view.entry["spectrum"])
    if wanted is None or view.reads <= wanted:
        return []
    told = view.told
    rest = view.reads - told["sweeps"] - told["pilot_share"]
    return [
        f"{view.reads:.2f} reads where {wanted:g} are wanted: {told['sweeps']} sweeps, a pilot of"
        f" {told['pilot_share']:.2f}, {rest:.2f} for probe, slices and chunks read twice; width {told['width']},"
        f" {told['precision']} precision."
    ]


def _prediction(view: View) -> list[str]:
    later = view.pilot_predicted_seconds
    predicted, measured = view.predicted_seconds if later is None else later, view.inside_seconds
    if predicted is None or abs(predicted - measured) <= PREDICTION * measured:
        return []
    words = f"{predicted:.1f} s were predicted and {measured:.1f} s taken, {predicted / measured - 1:+.0%}"
    assumed, made = view.told["predicted_sweeps" if later is None else "pilot_predicted_sweeps"], view.told["sweeps"]
    if assumed != made:
        words += f"; {assumed} sweeps were predicted and {made} made"
    known = [(abs(guess - seconds), phase, guess, seconds) for phase, guess, seconds in view.phases()]
    known.sort(reverse=True)
    off = [f"{phase} {guess:.2f} for {seconds:.2f} s" for gap, phase, guess, seconds in known if gap > WORTH * measured]
    return [f"{words}{'; most in ' if off else ''}{', '.join(off)}."]


def _tolerance(view: View) -> list[str]:
    return [] if view.told["tolerance_met"] else [f"tolerance not met: {view.told['verdict']}."]


def _closeness(entry: dict[str, Any]) -> list[str]:
    """Sweeps against their floor: what is slower than alone, what is beside the floor, and idle processors."""
    workers = max(entry["workers"], key=int)
    found = entry["workers"][workers]
    if entry["shape"][1] != FIRST_COLUMNS or found["closeness"] <= CLOSENESS:
        return []
    words = (
        f"sweeps at {found['closeness']:.2f} × their floor where {CLOSENESS:g} is wanted: {found['seconds']:.2f} s"
        f" where the parts alone take {found['floor']:.2f} s with {workers} threads."
    )
    return [f"{words} {_excess(entry)}"]


def _excess(entry: dict[str, Any]) -> str:
    """In processor seconds of the run that was looked into: parts beyond their time alone, others, idle."""
    count = int(entry["in_run_workers"])
    run: dict[str, float] = entry["in_run_processor_seconds"]
    alone = {phase: 0.0 for phase in FLOOR}
    for sweep in entry["workers"][str(count)]["sweeps"]:
        for phase, seconds in sweep["parts"].items():
            alone[phase] += seconds * count
    capacity = count * entry["in_run_sweep_seconds"]
    inside = {phase: run.get(phase, 0.0) for phase in IN_SWEEP}
    parts = [(inside[phase] - alone[phase], f"{phase} beyond its time alone") for phase in FLOOR]
    parts += [(seconds, phase) for phase, seconds in inside.items() if phase not in FLOOR]
    parts.append((capacity - sum(inside.values()), "processors idle or waiting"))
    parts = sorted((part for part in parts if part[0] >= 0.02 * capacity), reverse=True)
    told = ", ".join(f"{seconds:.2f} {words}" for seconds, words in parts) or "nothing above 2 % of it"
    return f"Of {capacity:.2f} processor seconds beyond the floor: {told}."


def speedup(entry: dict[str, Any]) -> tuple[float, float]:
    """Whole process and sweeps alone: time of the fewest workers over that of the most."""
    few, many = entry["runs"][0], entry["runs"][-1]
    return few["median_seconds"] / many["median_seconds"], stages_of(few)["sweep"] / stages_of(many)["sweep"]


def _workers(entry: dict[str, Any]) -> list[str]:
    whole, sweeps = speedup(entry)
    if sweeps >= WORKERS:
        return []
    few, many = entry["runs"][0], entry["runs"][-1]
    before, after = stages_of(few), stages_of(many)
    times = ", ".join(f"{stage} {before[stage]:.1f} → {after.get(stage, 0.0):.1f} s" for stage in before)
    return [
        f"{many['name']} swept {sweeps:.2f} × as fast as {few['name']} ({whole:.2f} × as whole processes) where"
        f" {WORKERS:g} × is wanted: {times}."
    ]


def _growth(record: dict[str, Any], ceiling: int) -> list[str]:
    """Seconds per GiB of the largest against the smallest."""
    entries = record["entries"]
    first, last = entries[0], entries[-1]
    found = []
    ratio = per_gib(last) / per_gib(first)
    if ratio > GROWTH:
        found.append(
            f"Growth: {per_gib(last):.2f} s per GiB at {show_bytes(last['decoded_bytes'])} and {per_gib(first):.2f} at"
            f" {show_bytes(first['decoded_bytes'])}, {ratio:.2f} × where {GROWTH:g} is wanted; {_growing(first, last)};"
            f" {last['cached_share']:.0%} of the larger file was in the page cache."
        )
    if last["over_ceiling"] < OVER_CEILING:
        found.append(f"Growth: the largest file is {last['over_ceiling']:.1f} × the ceiling, not {OVER_CEILING:g} ×.")
    over = [entry for entry in entries if max(entry["run"]["peak_bytes"]) > ceiling]
    for entry in over:
        peak = show_bytes(max(entry["run"]["peak_bytes"]))
        found.append(f"Growth: peak {peak} at {show_bytes(entry['decoded_bytes'])}, above {show_bytes(ceiling)}.")
    return found


def per_gib(entry: dict[str, Any]) -> float:
    """Seconds of the whole process per decoded GiB."""
    return float(entry["run"]["median_seconds"] / entry["decoded_bytes"] * 2**30)


def _growing(first: dict[str, Any], last: dict[str, Any]) -> str:
    """Stages by seconds per GiB, at both ends."""
    small, large = (
        {stage: seconds / entry["decoded_bytes"] * 2**30 for stage, seconds in stages_of(entry["run"]).items()}
        for entry in (first, last)
    )
    found = [
        (each - small.get(stage, 0.0), f"{stage} {small.get(stage, 0.0):.2f} → {each:.2f} s per GiB")
        for stage, each in large.items()
    ]
    return ", ".join(words for _, words in sorted(found, reverse=True)[:3])

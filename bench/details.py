"""The details of the page: all candidates of a case, the parts of its sweeps, growth, predictions."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from bench.goals import per_gib, speedup
from bench.phases import FLOOR, IN_SWEEP
from bench.records import Merged
from bench.tables import table
from bench.view import View, label
from bigsvd.units import show_bytes

CANDIDATES = ("candidate", "seconds (runs)", "processor s", "ratio", "value error", "angle", "peak")


def compare_lines(view: View, ceiling: int) -> list[str]:
    """One case: what bigsvd did, all candidates, the verdict."""
    entry = view.entry
    failed = [
        f"- {each['name']}: {each['failures'][-1]}{' in one run more' if 'seconds' in each else ''}"
        for each in entry["candidates"]
        if each["failures"]
    ]
    failed += [f"- {name}: not run, {why}" for name, why in entry["left_out"]]
    return [
        f"### {entry['title']}",
        "",
        f"{show_bytes(entry['decoded_bytes'])} decoded, {show_bytes(entry['stored_bytes'])} stored,"
        f" {entry['cached_share']:.0%} in the page cache. {_own(view)}",
        "",
        *table(CANDIDATES, [candidate_row(each, view.own, ceiling) for each in (view.own, *view.peers)]),
        "",
        *([*failed, ""] if failed else []),
        _verdict(view, ceiling),
        "",
    ]


def candidate_row(each: dict[str, Any], own: dict[str, Any], ceiling: int) -> list[str]:
    """Cells of one candidate: no time without its error."""
    seconds = each["seconds"]
    spread = f" ({min(seconds):.1f}–{max(seconds):.1f}, {len(seconds)})" if len(seconds) > 1 else " (1)"
    over = ""
    if max(each["peak_bytes"]) > ceiling:
        over = " over" if max(each["own_peak_bytes"]) > ceiling else " mapped"
    name = f"{each['name']}{' (first written)' if each['first_written'] else ''}"
    return [
        name,
        f"{each['median_seconds']:.1f}{spread}",
        f"{each['median_processor_seconds']:.1f}",
        "1" if each is own else f"{each['median_seconds'] / own['median_seconds']:.2f}",
        f"{each['value_error']:.1e}",
        f"{each['angle_error']:.1e}",
        f"{show_bytes(max(each['peak_bytes']))}{over}",
    ]


def _own(view: View) -> str:
    """What bigsvd did, in a sentence."""
    told = view.told
    parts = ", ".join(f"{stage} {seconds:.1f}" for stage, seconds in view.stages().items())
    sweeps = f"{told['sweeps']} sweep{'s' if told['sweeps'] > 1 else ''}"
    return (
        f"bigsvd: {told['route']}, {sweeps}, {view.reads:.2f} reads of the file in all, {told['precision']} precision;"
        f" {told['verdict']}. Seconds by stage: {parts}."
    )


def _verdict(view: View, ceiling: int) -> str:
    best = view.best
    if best is None:
        nearest = view.nearest
        if nearest is None:
            return "No general-purpose setting ended in time."
        return (
            f"No general-purpose setting came as near below the ceiling; the nearest, {nearest['name']}, took"
            f" {nearest['median_seconds'] / view.own['median_seconds']:.2f} × the time of bigsvd."
        )
    own = view.own
    ratio = best["median_seconds"] / own["median_seconds"]
    fastest = min(best["seconds"]) / min(own["seconds"])
    processors = best["median_processor_seconds"] / own["median_processor_seconds"]
    words = (
        f"Best general-purpose setting of equal error: {best['name']}, **{ratio:.2f} ×** the time of bigsvd"
        f" ({fastest:.2f} × between the fastest runs, {processors:.2f} × in processor seconds)."
    )
    resident = view.resident_best(ceiling)
    if resident is not None and resident is not best:
        ratio = resident["median_seconds"] / own["median_seconds"]
        words += f" Of those that stay below the ceiling with their mapped files: {resident['name']}, {ratio:.2f} ×."
    return words


def limits_lines(entry: dict[str, Any]) -> list[str]:
    """One case: every part of its sweeps alone, with few threads and with many."""
    counts = sorted(entry["workers"], key=int)
    rows = []
    for phase in FLOOR:
        alone = [sum(sweep["parts"].get(phase, 0.0) for sweep in entry["workers"][count]["sweeps"]) for count in counts]
        spent = entry["in_run_processor_seconds"].get(phase, 0.0)
        if any(alone) or spent:
            rows.append([phase, *(f"{seconds:.2f}" for seconds in alone), f"{spent:.2f}"])
    own = [(phase, entry["in_run_processor_seconds"].get(phase, 0.0)) for phase in IN_SWEEP if phase not in FLOOR]
    rows += [
        [f"{phase} (bigsvd's own)", *("" for _ in counts), f"{spent:.2f}"] for phase, spent in own if spent >= 0.005
    ]
    found = [entry["workers"][count] for count in counts]
    rows.append(["raw read of the stored bytes", *(f"{each['raw_read_seconds']:.2f}" for each in found), ""])
    rows.append(["**floor of all sweeps**", *(f"{each['floor']:.2f}" for each in found), ""])
    rows.append(["**sweeps as they ran**", *(f"{each['seconds']:.2f}" for each in found), ""])
    rows.append(["**closeness**", *(f"{each['closeness']:.2f}" for each in found), ""])
    threads = [f"{count} thread{'' if count == '1' else 's'}, s" for count in counts]
    bare = ", ".join(f"{entry['bare_product_seconds'][count]:.2f} s with {count}" for count in counts)
    sweeps = f"{entry['sweeps']} sweep{'s' if entry['sweeps'] > 1 else ''}"
    # Parts of a sweep can take longer than the sweep only where something else took the processors.
    busy = min(each["closeness"] for each in found) < 1
    doubt = " Parts took longer than the sweeps: the machine was busy, and these limits say little." if busy else ""
    return [
        f"### {entry['title']}: limits",
        "",
        f"{sweeps} of {entry['panels']:,} panels of {show_bytes(entry['panel_bytes'])}, width {entry['width']},"
        f" {entry['precision']} precision; seconds of all sweeps together.",
        "",
        *table(("part alone", *threads, f"processor s in the run, {entry['in_run_workers']} workers"), rows),
        "",
        f"The products AB by BLAS alone, without carrying sums over into double: {bare}. Reading the stored bytes from"
        f" the device, out of the page cache: {entry['cold_read_seconds']:.1f} s.{doubt}",
        "",
    ]


def growth_lines(merged: Merged) -> list[str]:
    """Sizes at one ceiling, and one worker against several."""
    lines: list[str] = []
    if merged.growth:
        rows = []
        for entry in merged.growth["entries"]:
            run = entry["run"]
            told = run["told"][-1]
            rows.append(
                [
                    show_bytes(entry["decoded_bytes"]),
                    f"{entry['over_ceiling']:.1f}",
                    f"{run['median_seconds']:.1f}",
                    f"{per_gib(entry):.2f}",
                    f"{run['value_error']:.1e}",
                    f"{told['bytes_read'] / told['matrix_bytes']:.2f}",
                    show_bytes(max(run["peak_bytes"])),
                    f"{entry['cached_share']:.0%}",
                    peer_words(entry),
                ]
            )
        headings = (
            *("plain HDF5, f4", "× ceiling", "seconds", "s per GiB", "value error", "reads", "peak", "in cache"),
            "dask svd_compressed of equal error",
        )
        lines += [*table(headings, rows), ""]
    if merged.workers:
        rows = []
        for entry in merged.workers.values():
            whole, sweeps = speedup(entry)
            few, many = entry["runs"][0], entry["runs"][-1]
            rows.append(
                [
                    label(entry),
                    f"{few['median_seconds']:.1f}",
                    f"{many['median_seconds']:.1f}",
                    f"{max(few['value_error'], many['value_error']):.1e}",
                    f"{whole:.2f}",
                    f"{sweeps:.2f}",
                ]
            )
        counts = next(iter(merged.workers.values()))["workers"]
        names = [f"{count} worker{'' if count == 1 else 's'}, s" for count in counts]
        lines += [*table(("case", *names, "value error", "× as fast, process", "× as fast, sweeps"), rows), ""]
    return lines


def peer_words(entry: dict[str, Any]) -> str:
    """The peer of a size of the growth, with its ratio."""
    peer = entry["peer"]
    if peer is None:
        return "did not end"
    seconds = peer["median_seconds"]
    return f"{seconds:.1f} s, {seconds / entry['run']['median_seconds']:.2f} ×"


def prediction_lines(found: Sequence[View]) -> list[str]:
    """Time predicted from the probe beside the time taken, whole and by phase."""
    rows, phases = [], []
    for view in found:
        first, later, measured, told = (
            view.predicted_seconds, view.pilot_predicted_seconds, view.inside_seconds, view.told,
        )  # fmt: skip
        guesses = [
            words
            for guess, sweeps in ((first, told["predicted_sweeps"]), (later, told.get("pilot_predicted_sweeps")))
            for words in (
                ("none", "") if guess is None else (f"{guess:.1f} for {sweeps}", f"{guess / measured - 1:+.0%}")
            )
        ]
        rows.append([view.label, *guesses, f"{measured:.1f} for {told['sweeps']}"])
        phases += [
            [view.label if not number else "", phase, f"{guess:.2f}", f"{seconds:.2f}"]
            for number, (phase, guess, seconds) in enumerate(view.phases())
        ]
    return [
        "Seconds and sweeps of the decomposition, without the start of the interpreter: predicted from a probe before"
        " anything is known of the spectrum, predicted once the pilot has shown it, and taken.",
        "",
        *table(("case", "before the run", "off", "after the pilot", "off", "taken"), rows),
        "",
        "By phase, on the clock, predicted for the sweeps, columns and precision that the run came to:",
        "",
        *table(("case", "phase", "predicted, s", "taken, s"), phases),
        "",
    ]

"""docs/performance.md: one table first, then what was missed and why, how it was measured, and the details."""

from __future__ import annotations

from pathlib import Path

from bench.details import compare_lines, growth_lines, limits_lines, prediction_lines
from bench.figures import growth_picture, limits_picture, times_picture
from bench.goals import CLOSENESS, FIRST_COLUMNS, RATIOS, READS, missed, views
from bench.plot import Picture
from bench.records import Merged
from bench.tables import table
from bench.view import View, seconds_and_error
from bigsvd.units import show_bytes, show_seconds


def write_page(path: Path, merged: Merged) -> None:
    """Write the page, and its pictures beside it."""
    path.parent.mkdir(parents=True, exist_ok=True)
    for name, picture in pictures(merged).items():
        picture.save(path.with_name(f"{path.stem}-{name}.svg"))
    path.write_text("\n".join(page_lines(merged, path.stem)) + "\n")


def pictures(merged: Merged) -> dict[str, Picture]:
    """The pictures for which there are figures."""
    found = {}
    if merged.compare:
        found["times"] = times_picture(views(merged))
    if merged.limits:
        found["limits"] = limits_picture(list(merged.limits.values()))
    if merged.growth:
        found["growth"] = growth_picture(merged.growth["entries"])
    return found


def page_lines(merged: Merged, stem: str = "performance") -> list[str]:
    """The page as lines of Markdown."""
    drawn = pictures(merged)

    def shown(name: str) -> list[str]:
        return [f"![{drawn[name].title}]({stem}-{name}.svg)", ""] if name in drawn else []

    lines = ["# Performance", "", _circumstances(merged), "", _machine(merged), ""]
    if merged.compare:
        lines += [*_summary(merged), "", *shown("times")]
    lines += [
        "## What was not reached, and why",
        "",
        *_missed(merged),
        "",
        "## How it was measured",
        "",
        *_method(merged),
    ]
    if merged.compare:
        lines += ["## Beside general-purpose libraries", ""]
        for view in views(merged):
            lines += compare_lines(view, merged.newest["settings"]["memory_bytes"])
    if merged.limits:
        lines += ["## Beside the limits of the machine", "", *shown("limits")]
        for entry in merged.limits.values():
            lines += limits_lines(entry)
    if merged.growth or merged.workers:
        lines += ["## Larger files, more workers", "", *shown("growth"), *growth_lines(merged)]
    if merged.compare:
        lines += ["## Predicted and measured", "", *prediction_lines(views(merged))]
    return lines


def _circumstances(merged: Merged) -> str:
    """What this page is about, and where the other one is."""
    settings = merged.newest["settings"]
    if settings["limit"] == "group":
        ceiling = show_bytes(settings["memory_bytes"])
        return (
            f"Files larger than memory: the system holds every process to {ceiling}, pages of the files that it reads"
            " included. With the same files in the page cache of a large machine: [performance-cached.md]"
            "(performance-cached.md)."
        )
    return (
        "Files that the page cache holds as a whole, on a machine that is larger than they are, with nothing held to a"
        " limit. With files larger than memory, the case that bigsvd is for: [performance.md](performance.md)."
    )


def _machine(merged: Merged) -> str:
    """Where and when, in a paragraph."""
    newest, machine = merged.newest, merged.newest["machine"]
    versions = ", ".join(f"{name} {version}" for name, version in machine["versions"].items())
    notes = f" Other circumstances: {'; '.join(merged.notes)}." if merged.notes else ""
    clock = f", {machine['clock_ghz']:.1f} GHz" if machine["clock_ghz"] else ""
    return (
        f"Written by `scripts/bench` on {newest['date']}. {machine['processors']} processors"
        f" ({machine['processor']}{clock}), {show_bytes(machine['memory_bytes'])} of memory, {machine['system']},"
        f" Python {machine['python']}; commit {newest['commit'] or 'unknown'}; {versions}.{notes}"
    )


def _summary(merged: Merged) -> list[str]:
    """One line a case."""
    rows = []
    for view in views(merged):
        best = view.best or view.nearest
        wanted = RATIOS[view.entry["kind"]][0]
        closeness = "not measured" if view.closeness is None else f"{view.closeness:.2f}"
        if view.entry["shape"][1] == FIRST_COLUMNS and view.closeness is not None:
            closeness += f" (≤ {CLOSENESS:g})"
        reads = READS.get(view.entry["spectrum"])
        rows.append(
            [
                view.label,
                seconds_and_error(view.own),
                f"{best['name']}: {seconds_and_error(best)}{'' if view.best else ', none as near'}" if best else "none",
                f"{'' if view.best else '> '}{view.least_ratio:.2f}",
                f"≥ {wanted:g}, {_reached(view, wanted)}",
                closeness,
                f"{view.reads:.2f}{f' (≤ {reads:g})' if reads else ''}",
                show_bytes(view.peak),
            ]
        )
    ceiling = show_bytes(merged.newest["settings"]["memory_bytes"])
    peak = f"peak (≤ {ceiling})"
    headings = ("case", "bigsvd", "best general-purpose setting", "ratio", "goal", "closeness", "reads", peak)
    words = [
        "",
        "Whole processes: median seconds, in brackets the largest relative error of a singular value. *Ratio*: time of"
        " the fastest general-purpose setting that comes as near to the truth, over that of bigsvd. *Closeness*: time"
        " of the sweeps over what their parts take alone. *Reads*: of the file, pilot and checks included. *Peak*:"
        " largest resident size. In brackets behind the figures what is wanted.",
    ]
    return [*table(headings, rows), *words]


def _reached(view: View, wanted: float) -> str:
    """Whether the goal is reached; open where the nearest peer was faster than that, and would need longer."""
    if view.least_ratio >= wanted:
        return "reached"
    return "missed" if view.best else "open"


def _missed(merged: Merged) -> list[str]:
    found = missed(merged)
    open_parts = [
        words
        for words, there in (
            ("the comparison", merged.compare),
            ("the limits of the machine", merged.limits),
            ("growth", merged.growth),
            ("workers", merged.workers),
        )
        if not there
    ]
    lines = [f"- {words}" for words in found] or ["Nothing of what was measured."]
    return lines + (["", f"Not measured: {', '.join(open_parts)}."] if open_parts else [])


def _method(merged: Merged) -> list[str]:
    """What the figures mean."""
    settings, count = merged.newest["settings"], merged.newest["runs"]
    runs = f"{count} run{'' if count == 1 else 's'}"
    prepared = (
        "column means subtracted by all" if settings["centred"] else "nothing centred, as `svd_compressed` has it"
    )
    cache = "out of the page cache before every run" if settings["cold"] else "in the page cache before every run"
    limit = {
        "group": "The system held every process to the ceiling, pages of the files that it reads and writes included (a"
        " memory control group): the files are larger than the memory there is for them. Who holds more is killed.",
        "none": "No limit of the system was set: each peak is held against the ceiling.",
        "data": "The system held every process to the ceiling (RLIMIT_DATA: all memory it may write to).",
        "as": "The system held every process to the ceiling (RLIMIT_AS: all its addresses).",
    }[settings["limit"]]
    timeout = show_seconds(merged.newest["timeout"])
    return [
        f"Rank {settings['rank']}, {prepared}. Every time is that of a whole process, from its start to its factors in"
        f" files: median of {runs}, bigsvd and the main peers in turn; others ran once, and none longer than"
        f" {timeout}. Files were {cache}. bigsvd proves its intervals to a tolerance of 1e-3, and checks them on slices"
        " of the file, within that time; the others prove nothing: their number of iterations was found by trying"
        " against the known truth.",
        "",
        "*Value error*: largest relative error of the singular values; *angle*: largest angle between the spaces of"
        " right vectors, radians; both against factors that another program computed in double (`bench/exact.py`), for"
        " growth against what was planted, which float32 holds to about 1e-6. Of equal error is what reaches bigsvd's"
        " error, or 1e-6, where single precision ends. *Processor s*: seconds of all threads, which other programs"
        " disturb least.",
        "",
        f"*Peak*: largest resident size; *over*: above the ceiling of {show_bytes(settings['memory_bytes'])}, which"
        " only bigsvd can be given. Pages of a mapped file count in it, but the system takes them back where memory is"
        f" short: a peer is not ruled out by them, and the table says *mapped*. {limit}",
        "",
        "Tuned dask reads bands of about 16 MB of whole chunks and multiplies with one thread a task, its fastest"
        " setting here. What is *first written* has the defaults of its library. `randomized_svd` needs an array: it is"
        " given the mapped file where that is plain, else a copy that is decoded into a mapped float32 file within its"
        " time.",
        "",
        "*Limits*, with files in the page cache: the inner functions of a sweep are caught in a run and made again"
        " alone, on the same data at the same shapes and precision, in one thread and in as many as there are workers"
        " (`bench/limits.py`). The floor"
        " of a sweep is the larger of the raw read of the stored bytes and the sum of the parts, each as fast as it was"
        " in the fastest round; sweeps are medians.",
        "",
    ]

"""The three pictures of the page."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from bench.goals import per_gib
from bench.phases import FLOOR
from bench.plot import Picture, decades
from bench.view import View, label, seconds_and_error
from bigsvd.units import show_bytes

# The names of candidates stand left of the bars, times and errors right of them.
WIDTH, LEFT, NAMES, TIMES, BAR, GAP = 1_000.0, 20.0, 470.0, 130.0, 15.0, 5.0


def times_picture(views: Sequence[View]) -> Picture:
    """Seconds of whole processes on a logarithmic axis, each beside its error."""
    rows = [(view, _shown(view)) for view in views]
    seconds = [each["median_seconds"] for _, shown in rows for _, each in shown]
    words = "; ".join(
        f"{view.label}: " + ", ".join(f"{each['name']} {seconds_and_error(each)}" for _, each in shown)
        for view, shown in rows
    )
    picture = Picture(WIDTH, "Seconds of bigsvd and of general-purpose libraries", words)
    ticks = decades(min(seconds), max(seconds))
    span, room = math.log(ticks[-1] / ticks[0]), WIDTH - NAMES - TIMES

    def place(value: float) -> float:
        return NAMES + room * math.log(value / ticks[0]) / span

    head = "Seconds of a whole process (logarithmic), in brackets the largest relative error of a singular value"
    picture.text(LEFT, 22, head, kind="head")
    rows_height = sum(26 + len(shown) * (BAR + GAP) for _, shown in rows)
    for tick in ticks:
        picture.text(place(tick), 46, f"{tick:g}", kind="faint", anchor="middle")
        picture.line(place(tick), 52, place(tick), 56 + rows_height)
    y = 64.0
    for view, shown in rows:
        picture.text(LEFT, y + 4, view.label)
        y += 14
        for colour, each in shown:
            length = max(2.0, place(each["median_seconds"]) - NAMES)
            picture.text(NAMES - 8, y + 12, each["name"], kind="faint", anchor="end")
            picture.bar(NAMES, y, length, BAR, colour, f"{each['name']}: {seconds_and_error(each)}")
            picture.text(NAMES + length + 6, y + 12, seconds_and_error(each))
            y += BAR + GAP
        y += 12
    return picture


def _shown(view: View) -> list[tuple[int, dict[str, Any]]]:
    """Candidates of a case that are drawn: bigsvd, the best of equal error, the first written that comes nearest."""
    found = [(0, view.own)]
    chosen = view.best or view.nearest
    if chosen is not None:
        found.append((1, chosen))
    first = [each for each in view.peers if each["first_written"] and not each["centred"] and each is not chosen]
    if first:
        found.append((6, min(first, key=lambda each: each["value_error"])))
    return found


def limits_picture(entries: Sequence[dict[str, Any]]) -> Picture:
    """Parts of a sweep alone, laid end to end, and the time that the sweeps took."""
    words, rows = [], []
    for entry in entries:
        most = entry["workers"][max(entry["workers"], key=int)]
        parts = [(phase, sum(sweep["parts"].get(phase, 0.0) for sweep in most["sweeps"])) for phase in FLOOR]
        rows.append((entry, most, parts))
        told = ", ".join(f"{phase} {seconds:.2f} s" for phase, seconds in parts if seconds)
        words.append(f"{label(entry)}: sweeps {most['seconds']:.2f} s, floor {most['floor']:.2f} s of {told}")
    picture = Picture(WIDTH, "Sweeps beside the time of their parts alone", "; ".join(words))
    picture.text(
        LEFT, 22, "Seconds of all sweeps (outline) and of their parts alone (filled), all workers", kind="head"
    )
    x, y = LEFT, 34.0
    for colour, phase in enumerate(FLOOR):
        if x + 30 + 7 * len(phase) > WIDTH:
            x, y = LEFT, y + 20
        picture.bar(x, y, 12, 12, colour, phase)
        picture.text(x + 17, y + 11, phase, kind="faint")
        x += 40 + 7 * len(phase)
    y += 34
    longest = max(max(most["seconds"], sum(seconds for _, seconds in parts)) for _, most, parts in rows)
    scale = (WIDTH - LEFT - 220) / longest
    for entry, most, parts in rows:
        picture.text(LEFT, y, label(entry))
        y += 7
        x = LEFT
        for colour, (phase, seconds) in enumerate(parts):
            picture.bar(x, y, seconds * scale, 18, colour, f"{phase}: {seconds:.2f} s")
            x += seconds * scale
        picture.frame(LEFT, y - 2, most["seconds"] * scale, 22)
        end = max(x, LEFT + most["seconds"] * scale)
        picture.text(end + 8, y + 14, f"{most['seconds']:.2f} s, {most['closeness']:.2f} × the floor", kind="faint")
        y += 42
    return picture


def growth_picture(entries: Sequence[dict[str, Any]]) -> Picture:
    """Seconds per GiB over the size of the matrix."""
    sizes = [entry["decoded_bytes"] / 2**30 for entry in entries]
    rates = [per_gib(entry) for entry in entries]
    told = [
        f"{show_bytes(entry['decoded_bytes'])}: {rate:.2f} s per GiB, error {entry['run']['value_error']:.0e}, peak"
        f" {show_bytes(max(entry['run']['peak_bytes']))}"
        for entry, rate in zip(entries, rates, strict=True)
    ]
    picture = Picture(WIDTH, "Seconds per GiB over the size of the matrix", "; ".join(told))
    picture.text(LEFT, 22, "Seconds per decoded GiB, whole process, at one memory ceiling", kind="head")
    left, right, top, bottom = 70.0, WIDTH - 130, 50.0, 270.0
    step = next(step for step in (m * 10.0**p for p in range(-4, 5) for m in (1, 2, 5)) if 4 * step >= 1.1 * max(rates))
    high = 4 * step
    span = math.log(sizes[-1] / sizes[0]) or 1.0
    for count in range(5):
        y = bottom - (bottom - top) * count / 4
        picture.line(left, y, right, y)
        picture.text(left - 8, y + 4, f"{step * count:g}", kind="faint", anchor="end")
    points = []
    for size, rate, entry in zip(sizes, rates, entries, strict=True):
        x = left + (right - left) * math.log(size / sizes[0]) / span
        y = bottom - (bottom - top) * rate / high
        points.append((x, y))
        picture.text(x, bottom + 18, show_bytes(entry["decoded_bytes"]), kind="faint", anchor="middle")
        picture.text(x, bottom + 36, f"error {entry['run']['value_error']:.0e}", kind="faint", anchor="middle")
        peak = show_bytes(max(entry["run"]["peak_bytes"]))
        picture.text(x, bottom + 54, f"peak {peak}", kind="faint", anchor="middle")
        picture.text(x, y - 10, f"{rate:.2f}", anchor="middle")
    picture.curve(points, 0)
    return picture

"""How near the sweeps of one file come to what the machine can do: every part of a sweep alone, and all together.

    python bench/limits.py big.h5 --rank 20 --center none --memory 768MiB

bigsvd is run with one worker and with all, and the time of its sweeps is taken. The inner functions that a sweep cannot
do without (read and decode, convert and centre, sums, energy, products, QR fold) are caught in one such run and made
again alone, on the same data at the same shapes and precision, in one thread and in as many as there are workers:

    floor = max(raw read of the stored bytes, Σ parts, each in as many threads as workers)
    closeness = time of the sweeps / floor

Word sums (a changing file is caught by them), rounding measured, scratch and sums of partials are bigsvd's own and no
part of the floor. Prints one JSON object.
"""

from __future__ import annotations

import argparse
import json
import os
import statistics
import tempfile
import threading
import time
from collections import defaultdict
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

import bigsvd
from bench.cache import PIECE, drop, stored_files, warm
from bench.capture import Captures, rate, seconds_for
from bench.phases import FLOOR, ONCE, READ, install
from bigsvd.plan import Geometry
from bigsvd.source import Source
from bigsvd.sweep import Control, Engine, PanelReader, one_blas_thread

# Read alone, a file is read whole up to so many decoded bytes, else panels all over it.
READ_BYTES = 512 * 2**20


class SweepClock:
    """Wall seconds of every sweep of the last run, without what the caller does between them."""

    def __init__(self, captures: Captures) -> None:
        self.captures = captures
        self.seconds: dict[str, float] = {}
        self.geometry: Geometry | None = None
        self.resident = False
        sweep = Engine.sweep

        def timed(engine: Engine, task: Any, *words: Any, **options: Any) -> Any:
            start = time.perf_counter()
            try:
                return sweep(engine, task, *words, **options)
            finally:
                if self.captures.stage.startswith("sweep"):
                    self.seconds[self.captures.stage] = time.perf_counter() - start
                    self.geometry, self.resident = task.reader.geometry, task.reader.keep

        Engine.sweep = timed  # type: ignore[assignment, method-assign]


def main(arguments: list[str] | None = None) -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("path", type=Path)
    parser.add_argument("--rank", type=int, default=20)
    parser.add_argument("--center", choices=("features", "none"), default="features")
    parser.add_argument("--memory", default="768MiB")
    parser.add_argument("--workers", type=int, nargs="+", help="numbers of threads; 1 and as many as processors")
    parser.add_argument("--route", default="auto")
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--cold", action="store_true", help="with the file out of the page cache before every run")
    given = parser.parse_args(arguments)
    print(json.dumps(measure(given)))


def measure(given: argparse.Namespace) -> dict[str, Any]:
    """Look into one run, then time sweeps and parts in turn, as often as asked."""
    from bigsvd.machine import processors

    workers = sorted(set(given.workers or [1, processors()]), reverse=True)
    captures = Captures()
    captures.on = False
    install(captures)
    clock = SweepClock(captures)
    warm(given.path)
    source = bigsvd.open_matrix(given.path)
    try:
        found = _look_into(source, given, clock, workers[0])
        rounds: dict[int, Rounds] = {count: Rounds([], [], []) for count in workers}
        for _ in range(given.runs):
            for count in workers:
                _add_round(rounds[count], source, given, clock, count)
        with one_blas_thread():
            found["bare_product_seconds"] = {count: _bare(captures, count) for count in workers}
        found["cold_read_seconds"] = raw_read(given.path, workers[0], cold=True)
        warm(given.path)
    finally:
        source.close()
    return found | {"cold": given.cold, "workers": {count: summary(rounds[count]) for count in workers}}


def _look_into(source: Source, given: argparse.Namespace, clock: SweepClock, workers: int) -> dict[str, Any]:
    """Catch the calls of one run, and say where the processor seconds of another went."""
    captures = clock.captures
    captures.on = captures.catching = True
    _decompose(source, given, workers)
    # Catching copies and holds Python's lock: times are those of a run without.
    captures.catching = False
    captures.seconds.clear()
    captures.stage = "open"
    record = _decompose(source, given, workers)
    captures.on = False
    spent: dict[str, float] = defaultdict(float)
    for (stage, phase), seconds in captures.seconds.items():
        if stage.startswith("sweep"):
            spent[phase] += seconds
    assert clock.geometry is not None
    return {
        "panels": clock.geometry.panels,
        "panel_bytes": clock.geometry.panel_bytes,
        "precision": record["precision"],
        "width": record["width"],
        "sweeps": len(clock.seconds),
        "in_run_workers": workers,
        "in_run_processor_seconds": dict(spent),
        "in_run_sweep_seconds": sum(clock.seconds.values()),
    }


@dataclass(frozen=True)
class Rounds:
    """What each round showed.

    Attributes
    ----------
    sweeps : list of dict
        Seconds of every sweep.
    parts : list of dict of dict
        Seconds of every part alone, by sweep.
    raw : list of float
        Seconds of the raw read, once a sweep.
    """

    sweeps: list[dict[str, float]]
    parts: list[dict[str, dict[str, float]]]
    raw: list[float]


def _add_round(rounds: Rounds, source: Source, given: argparse.Namespace, clock: SweepClock, workers: int) -> None:
    """One run as it is, the parts alone, the raw read."""
    if given.cold:
        drop(given.path)
    clock.seconds, clock.captures.stage = {}, "open"
    _decompose(source, given, workers)
    rounds.sweeps.append(clock.seconds)
    with one_blas_thread():
        rounds.parts.append(_parts(source, clock, workers))
    rounds.raw.append(raw_read(given.path, workers, cold=given.cold))


def summary(rounds: Rounds) -> dict[str, Any]:
    """Median of the sweeps over the rounds, the floor of each sweep and the closeness of all together.

    A limit is what was reached once: of parts and raw read the fastest round counts, which never flatters.
    """
    disk = min(rounds.raw)
    each = []
    for stage, first in rounds.parts[0].items():
        alone = {phase: min(found[stage][phase] for found in rounds.parts) for phase in first}
        seconds = statistics.median(found[stage] for found in rounds.sweeps)
        # A sweep over a matrix that is held in memory has no part that reads.
        floor = max(disk if READ in alone else 0.0, sum(alone.values()))
        each.append({"sweep": stage, "seconds": seconds, "parts": alone, "floor": floor})
    totals = [sum(found.values()) for found in rounds.sweeps]
    floor = sum(one["floor"] for one in each)
    return {
        "sweeps": each,
        "raw_read_seconds": disk,
        "seconds": statistics.median(totals),
        "all_seconds": totals,
        "floor": floor,
        "closeness": statistics.median(totals) / floor,
    }


def _decompose(source: Source, given: argparse.Namespace, workers: int) -> dict[str, Any]:
    """One run; its record."""
    # Scratch goes where it goes when candidates are compared: beside the files.
    with tempfile.TemporaryDirectory(dir=given.path.parent) as folder:
        factors = bigsvd.decompose(
            source,
            Path(folder) / "out.zarr",
            rank=given.rank,
            center=given.center,
            memory=given.memory,
            route=given.route,
            workers=workers,
        )
        record: dict[str, Any] = factors.attributes
    return record


def _parts(source: Source, clock: SweepClock, threads: int) -> dict[str, dict[str, float]]:
    """Seconds of every part alone, for whole sweeps, by sweep."""
    captures = clock.captures
    assert clock.geometry is not None
    entries = clock.geometry.lines * clock.geometry.across
    read = read_panels(source, clock.geometry, threads)
    found: dict[str, dict[str, float]] = {}
    for number, stage in enumerate(captures.stages()):
        # A matrix that is held in memory is read in the first sweep only.
        found[stage] = {} if clock.resident and number else {READ: read}
        for phase in FLOOR:
            calls = captures.caught(stage, phase, threads)
            if calls:
                # What converts a unit twice needs it once: no more than the matrix counts.
                size = captures.sizes[stage, phase]
                size = min(size, entries) if phase in ONCE else size
                found[stage][phase] = seconds_for(size, calls)
    return found


def _bare(captures: Captures, threads: int) -> float:
    """Seconds of all products AB by BLAS alone, sums not carried over into double."""
    total = 0.0
    for stage in captures.stages():
        calls = captures.caught(stage, "product AB", threads)
        if not calls:
            continue
        work = []
        for caught in calls:
            segment, tile, columns = caught[0].words
            block = segment.task.block[columns]
            out = np.empty((len(tile), block.shape[1]), tile.dtype)
            work.append(([partial(np.matmul, tile, block, out=out)], int(tile.size)))
        total += captures.sizes[stage, "product AB"] / rate(work)
    return total


def read_panels(source: Source, geometry: Geometry, threads: int) -> float:
    """Seconds in which so many threads read and decode the whole matrix, panel by panel, and do nothing else."""
    reader = PanelReader(source, geometry, Control())
    step = max(1, geometry.panels * geometry.panel_bytes // READ_BYTES)
    panels = list(range(0, geometry.panels, step))
    lines = sum(geometry.edges[panel + 1] - geometry.edges[panel] for panel in panels)

    def work(index: int) -> None:
        buffer = reader.buffer()
        for panel in panels[index::threads]:
            reader.fetch(panel, buffer)

    return together(threads, work) * geometry.lines / lines


def raw_read(path: Path, threads: int, *, cold: bool) -> float:
    """Seconds in which so many threads read the stored bytes, and do nothing with them."""
    if cold:
        drop(path)
    pieces = [(part, start) for part in stored_files(path) for start in range(0, part.stat().st_size, PIECE)]

    def work(index: int) -> None:
        buffer = bytearray(PIECE)
        for part, start in pieces[index::threads]:
            handle = os.open(part, os.O_RDONLY)
            os.preadv(handle, [buffer], start)
            os.close(handle)

    return together(threads, work)


def together(threads: int, work: Callable[[int], None]) -> float:
    """Seconds until all threads have done their share; the first error of any is raised."""
    errors: list[BaseException] = []

    def guarded(index: int) -> None:
        try:
            work(index)
        except BaseException as error:
            errors.append(error)

    running = [threading.Thread(target=guarded, args=(index,)) for index in range(threads)]
    start = time.perf_counter()
    for thread in running:
        thread.start()
    for thread in running:
        thread.join()
    seconds = time.perf_counter() - start
    if errors:
        raise errors[0]
    return seconds


if __name__ == "__main__":
    main()

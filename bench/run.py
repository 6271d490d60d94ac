"""bigsvd beside general-purpose libraries and beside what the machine can do: no time without its error.

    scripts/bench                       five kinds of storage, 100,000 × 5,000, beside the others
    scripts/bench --limits              the same files: how near the sweeps come to the machine's limits
    scripts/bench --growth              1 to 16 GiB at one ceiling; one worker and two on compressed files
    scripts/bench --all                 the three of them
    scripts/bench --full …              also 20,000 × 60,000 and 2,000,000 × 300, 1/i, 1/√i and the slow ones (hours)
    scripts/bench --gigabytes 0.02 …    a trial of small files, kept apart from real results
    scripts/bench --page-only           write the page anew from the results that are there

Every process is held to the ceiling by a control group, pages of the files it reads included, and begins with its file
out of the page cache: files larger than memory, on any machine. That wants root; with --limit none nothing is held, and
files are in the page cache.

Every part writes a JSON under bench/results/held or bench/results/cached; the newest of each case are put together on
docs/performance.md or docs/performance-cached.md with their pictures. Files are made where they are missing, with their
true factors, and stay in --data.
"""

from __future__ import annotations

import argparse
import os
import time
import traceback
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import Any

from bench.cases import KINDS, SHAPES, SPECTRA, Case, choose_cases
from bench.group import can_group
from bench.growth import COLUMNS, SIZES, compressed_cases, measure_growth, measure_workers
from bench.page import write_page
from bench.process import run_process
from bench.records import BUSY, merge, save_record
from bench.side import CaseFailedError, Seen, Setup, Side
from bigsvd.machine import available_bytes
from bigsvd.units import parse_bytes, show_seconds

HERE = Path(__file__).parent
TRIAL_COLUMNS = 300


Job = tuple[str, Callable[[], list[dict[str, Any]]]]


def main(arguments: list[str] | None = None) -> None:
    given = _arguments(arguments)
    name = "performance.md" if given.limit == "group" else "performance-cached.md"
    results = HERE / "results" / ("held" if given.limit == "group" else "cached")
    results = given.results or (HERE / "results/trial" if given.gigabytes else results)
    page = given.page or (results if given.gigabytes else HERE.parent / "docs") / name
    failed = [] if given.page_only else _measure(given, results)
    merged = merge(results)
    if merged is not None:
        write_page(page, merged)
        print(f"Page: {page}")
    elif not failed:
        raise SystemExit(f"no results in {results}: run without --page-only first")
    if failed:
        raise SystemExit("\n".join(["Not everything was measured:", *failed]))


def _measure(given: argparse.Namespace, results: Path) -> list[str]:
    """Run the parts that were asked for, and keep each case as soon as it is there; return what failed."""
    load = os.getloadavg()[0]
    if load > BUSY:
        print(f"Others are at work (load {load:.1f}): times will not be those of a quiet machine.")
    setup = _setup(given)
    settings = {
        "rank": setup.rank,
        "memory_bytes": setup.ceiling,
        "centred": setup.centred,
        "limit": setup.limit,
        "cold": setup.cold,
    }
    failed = []
    for part, job in _jobs(given, setup):
        started = time.perf_counter()
        try:
            entries = job()
        except Exception as error:
            # What fails is told at the end, and what comes after it is measured all the same.
            if not isinstance(error, CaseFailedError):
                traceback.print_exc()
            failed.append(f"{part}: {error}")
            print(failed[-1], flush=True)
            continue
        more = {"load": load, "runs": setup.runs, "timeout": setup.timeout}
        path = save_record(results, part, settings, entries, started=started, **more)
        print(f"{show_seconds(time.perf_counter() - started)}. {path}", flush=True)
    setup.clear()
    return failed


def _setup(given: argparse.Namespace) -> Setup:
    return Setup(
        folder=given.data.absolute(),
        rank=given.rank,
        centred=given.centred,
        runs=given.runs,
        ceiling=parse_bytes(given.memory),
        limit=given.limit,
        cold=given.cold,
        timeout=given.timeout,
        slow=given.slow or given.full,
    )


def _jobs(given: argparse.Namespace, setup: Setup) -> list[Job]:
    """What is to be measured: a job a case, so that each is kept when it is done."""
    cases = choose_cases(
        full=given.full, kinds=given.kinds, spectra=given.spectra, shapes=given.shapes, gigabytes=given.gigabytes
    )
    jobs: list[Job] = []
    seen: Seen = {}
    if given.compare:
        jobs += [("compare", partial(_compare, case, setup, seen)) for case in cases]
    if given.limits:
        # So small a file as a trial's would be held in memory, without a panel.
        route = "krylov" if given.gigabytes else "auto"
        jobs += [("limits", partial(_limits, case, setup, route)) for case in cases]
    if given.growth:
        unit, columns = 2**30, COLUMNS
        if given.gigabytes:
            unit, columns = round(given.gigabytes * 1e9 / SIZES[-1]), TRIAL_COLUMNS
        jobs += [("workers", partial(measure_workers, setup, case, given.workers)) for case in compressed_cases(cases)]
        jobs.append(("growth", partial(measure_growth, setup, unit, columns)))
    return jobs


def _compare(case: Case, setup: Setup, seen: Seen) -> list[dict[str, Any]]:
    """All candidates on one file."""
    return [Side(case, setup, seen).measure(available_bytes())]


def _limits(case: Case, setup: Setup, route: str) -> list[dict[str, Any]]:
    """The parts of a sweep alone, in a process of their own."""
    print(f"\n{case.title}: limits", flush=True)
    path = case.file(setup.folder)
    words = [str(path), "--rank", str(setup.rank), "--memory", str(setup.ceiling), "--runs", str(setup.runs)]
    words += ["--center", "features" if setup.centred else "none", "--route", route]
    ended = run_process(words, timeout=10 * setup.timeout, script="limits")
    if ended.told is None:
        raise CaseFailedError(f"limits of {case.name} failed: {ended.failure}")
    for count, found in ended.told["workers"].items():
        print(f"  {count} threads: {found['seconds']:.2f} s, floor {found['floor']:.2f}, {found['closeness']:.2f} ×")
    return [case.facts() | ended.told]


def _arguments(arguments: list[str] | None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(
        prog="scripts/bench", description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parts = parser.add_argument_group("parts (the comparison where none is named)")
    parts.add_argument("--compare", action="store_true", help="beside the other libraries")
    parts.add_argument("--limits", action="store_true", help="beside what the machine can do")
    parts.add_argument("--growth", action="store_true", help="larger files, one worker and several")
    parts.add_argument("--all", action="store_true", help="all three")
    parts.add_argument("--page-only", action="store_true", help="measure nothing, write the page")
    files = parser.add_argument_group("files")
    files.add_argument("--full", action="store_true", help="all shapes and spectra, and --slow")
    files.add_argument(
        "--kinds", nargs="+", choices=KINDS, help="these, with --spectra and --shapes in all combinations"
    )
    files.add_argument("--spectra", nargs="+", choices=SPECTRA)
    files.add_argument("--shapes", nargs="+", choices=SHAPES)
    files.add_argument("--gigabytes", type=float, help="a trial: files of this decoded size in 10⁹ bytes")
    files.add_argument("--data", type=Path, default=HERE / "data", help="folder of the files (default: bench/data)")
    how = parser.add_argument_group("how")
    how.add_argument("--rank", type=int, default=20)
    how.add_argument("--runs", type=int, default=3, help="runs of the main candidates (default 3)")
    how.add_argument("--workers", type=int, nargs=2, default=[1, 2], help="compared by --growth (default 1 2)")
    how.add_argument("--memory", default="768MiB", help="ceiling: given to bigsvd, held against the others")
    how.add_argument(
        "--limit",
        choices=("group", "data", "as", "none"),
        default="group",
        help="what the system holds every process to: a control group with file pages (default), writable memory, all"
        " addresses, nothing",
    )
    how.add_argument("--centred", action="store_true", help="subtract column means, all candidates")
    how.add_argument(
        "--cold", action="store_true", help="drop files from the page cache before every run also outside of a group"
    )
    how.add_argument("--slow", action="store_true", help="also svds, IncrementalPCA, dask svd, NumPy in memory")
    how.add_argument("--timeout", type=float, default=300, help="seconds after which a process is ended (default 300)")
    how.add_argument("--results", type=Path, help="folder of the JSONs (default: bench/results)")
    how.add_argument("--page", type=Path, help="page to write (default: docs/performance.md)")
    given = parser.parse_args(arguments)
    if given.runs < 1 or given.rank < 1:
        parser.error("--runs and --rank are at least 1")
    if given.gigabytes is not None and given.gigabytes <= 0:
        parser.error("--gigabytes is above 0")
    if given.limit == "group" and not (given.page_only or can_group()):
        parser.error("control groups of memory cannot be made here, which wants root: use --limit none")
    given.cold |= given.limit == "group"
    given.compare |= given.all or not (given.limits or given.growth)
    given.limits |= given.all
    given.growth |= given.all
    return given


if __name__ == "__main__":
    main()

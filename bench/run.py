"""bigsvd beside general-purpose libraries: whole processes, interleaved, no time without its error.

    scripts/bench                       plain and compressed HDF5 and Zarr, 1 GB decoded each
    scripts/bench --spectra exponential inverse --runs 5    1/i on compressed files too (an hour)
    scripts/bench --full                100,000 × 5,000; 20,000 × 60,000; 2,000,000 × 300 (hours)

Files are made where they are missing, with their true factors (minutes, once), and stay in --data. Every file is in the
page cache before its first run. Results: JSON under bench/results/, tables here and in docs/performance.md (--no-page
leaves that as it is).
"""

from __future__ import annotations

import argparse
import json
import os
import shutil
import subprocess
import sys
import time
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

from bench.cases import DEFAULT_KINDS, KINDS, SPECTRA, Case, make_cases, warm
from bench.exact import exact_factors
from bench.measure import (
    HEADINGS,
    Candidate,
    Errors,
    candidate_rows,
    errors_of,
    least_iterations,
    table,
    target_error,
)
from bench.page import machine_facts, write_page
from bigsvd.units import parse_bytes, show_bytes, show_seconds

HERE = Path(__file__).parent
TOLERANCE = 1e-3
MOST_ITERATIONS = 8


def main(arguments: list[str] | None = None) -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--kinds", nargs="+", choices=KINDS, default=list(DEFAULT_KINDS))
    parser.add_argument(
        "--spectra", nargs="+", choices=SPECTRA, help="default: exponential on all kinds, inverse on plain HDF5 too"
    )
    parser.add_argument("--gigabytes", type=float, default=1.0, help="decoded size in 10⁹ bytes (default 1)")
    parser.add_argument("--full", action="store_true", help="the large shapes instead")
    parser.add_argument("--rank", type=int, default=20)
    parser.add_argument("--runs", type=int, default=3, help="runs of each candidate (default 3)")
    parser.add_argument("--memory", default="768MiB", help="ceiling: given to bigsvd, held against the others")
    parser.add_argument("--centred", action="store_true", help="subtract column means, all candidates")
    parser.add_argument("--slow", action="store_true", help="also svds, and IncrementalPCA with --centred; once")
    parser.add_argument("--data", type=Path, default=HERE / "data", help="folder of the files")
    parser.add_argument("--no-page", action="store_true", help="leave docs/performance.md as it is")
    given = parser.parse_args(arguments)
    if given.runs < 1 or given.rank < 1:
        parser.error("--runs and --rank are at least 1")
    started = time.perf_counter()
    results = HERE / "results"
    results.mkdir(exist_ok=True)
    measured: list[dict[str, Any]] = []
    # What iterations led to on an earlier file of the same spectrum says where to look first on the next.
    seen: dict[str, dict[int, float]] = {}
    for case in make_cases(given.kinds, given.spectra, given.gigabytes, full=given.full):
        side = _Side(case, given, seen.get(case.spectrum, {}))
        measured.append(side.measure())
        seen.setdefault(case.spectrum, {}).update(side.single_errors())
    facts = machine_facts()
    record = {
        "date": time.strftime("%Y-%m-%d"),
        "machine": facts,
        "rank": given.rank,
        "memory_bytes": parse_bytes(given.memory),
        "centred": given.centred,
        "runs": given.runs,
        "cases": measured,
        "seconds": time.perf_counter() - started,
    }
    shutil.rmtree(given.data / "work", ignore_errors=True)
    target = results / f"{time.strftime('%Y%m%dT%H%M%S')}.json"
    target.write_text(json.dumps(record, indent=1))
    print(f"{show_seconds(record['seconds'])}. Results: {target}")
    if not given.no_page:
        write_page(HERE.parent / "docs/performance.md", record)
        print("Page: docs/performance.md")


class _Side:
    """One file, and all candidates side by side on it."""

    def __init__(self, case: Case, given: argparse.Namespace, seen: dict[int, float]) -> None:
        self.case, self.given, self.seen = case, given, seen
        self.ceiling = parse_bytes(given.memory)
        self.path = case.file(given.data)
        self.values, self.right = exact_factors(self.path, given.rank, centred=given.centred)
        self.right = self.right[:, : given.rank]
        self.stored_bytes = warm(self.path)
        self.tried: dict[tuple[int, bool], Candidate] = {}
        self.failed: list[dict[str, Any]] = []

    def measure(self) -> dict[str, Any]:
        """Choose the peer's setting, then run everything in turn."""
        print(f"\n{self.case.title}", flush=True)
        own = Candidate("bigsvd", ["bigsvd", "--memory", self.given.memory])
        if not self._run(own) or own.errors is None:
            raise SystemExit(f"bigsvd failed on {self.case.name}: there is nothing to compare with")
        near, near_double = self._choose(TOLERANCE)
        equal, double = self._choose(target_error(own.errors.value))
        chosen = [] if near is None else [self._dask(near, near_double)]
        if equal is not None and (equal, double) != (near, near_double):
            chosen.append(self._dask(equal, double))
        if equal is None:
            # Where none is good enough, the best of those tried stands for all.
            tried = [each for each in self.tried.values() if each.errors is not None and each not in chosen]
            chosen += sorted(tried, key=_value_error)[:1]
        record = self._for_the_record(chosen[-1], chosen[0]) if chosen else []
        for _ in range(1, self.given.runs):
            for each in [own, *chosen]:
                if len(each.seconds) < self.given.runs:
                    self._run(each)
            for each in record:
                if not each.once:
                    self._run(each)
        record = [each for each in record if each.errors is not None]
        everything = [own, *chosen, *record]
        lines = table(HEADINGS, candidate_rows(everything, self.ceiling))
        print("\n".join(lines), flush=True)
        return {
            "name": self.case.name,
            "title": self.case.title,
            "decoded_bytes": self.case.decoded_bytes,
            "stored_bytes": self.stored_bytes,
            "gap": float(self.values[self.given.rank - 1] / self.values[self.given.rank]),
            "target_error": target_error(own.errors.value),
            "iterations": equal,
            "tolerance_iterations": near,
            "candidates": [each.as_json() for each in everything],
            "tried": [each.as_json() for each in self.tried.values() if each not in everything],
            "failed": self.failed,
            "table": lines,
            "best": self._best(own, [*chosen, *record]),
        }

    def _choose(self, target: float) -> tuple[int | None, bool]:
        """Fewest iterations that reach an error, in single if that can, else in double."""
        first = min(
            (count for count, error in (self.seen | self.single_errors()).items() if error <= target), default=1
        )
        for double in (False, True):
            found = least_iterations(partial(self._error, double), target, first=first, most=MOST_ITERATIONS)
            if found is not None:
                return found, double
        return None, True

    def single_errors(self) -> dict[int, float]:
        """Error by number of iterations, of all that were tried in single."""
        return {count: self._error(False, count) for count, double in self.tried if not double}

    def _error(self, double: bool, iterations: int) -> float:
        return _value_error(self._dask(iterations, double))

    def _dask(self, iterations: int, double: bool) -> Candidate:
        """dask with the QR iterator, reading the file anew; run once for every setting that is asked for."""
        if (iterations, double) not in self.tried:
            count = f"{iterations} iteration{'' if iterations == 1 else 's'}"
            name = f"dask svd_compressed, QR, {count}{', double' if double else ''}"
            words = ["dask", "--iterator", "QR", "--iterations", str(iterations), "--compute"]
            made = Candidate(name, words + (["--double"] if double else []))
            self.tried[iterations, double] = made
            self._run(made)
        return self.tried[iterations, double]

    def _for_the_record(self, best: Candidate, near: Candidate) -> list[Candidate]:
        """The same with other settings: held in memory, by powers, through the Rust pipeline; slow ones on demand."""
        words = best.arguments
        lazy = [word for word in words if word != "--compute"]
        # Powers of AᴴA without QR between overflow single at many iterations: as many as the tolerance needs.
        power = ["power" if word == "QR" else word for word in near.arguments]
        found = [
            Candidate(f"{best.name}, compute=False", lazy, once=True),
            Candidate(near.name.replace("QR", "power (its default)"), power, once=True),
        ]
        if self.case.kind.startswith("zarr"):
            found.append(Candidate(f"{best.name}, Rust pipeline", [*words, "--rust"]))
        if self.given.slow:
            found.append(Candidate("scipy svds, operator that reads", ["svds"], once=True))
            if self.given.centred:
                found.append(Candidate("scikit-learn IncrementalPCA", ["incremental"], once=True))
        for each in found:
            self._run(each)
        return found

    def _best(self, own: Candidate, peers: list[Candidate]) -> dict[str, Any] | None:
        """The fastest peer of equal error that stays below the ceiling and reads by its default pipeline."""
        assert own.errors is not None
        target = target_error(own.errors.value)
        equal = [
            peer
            for peer in peers
            if peer.errors
            and peer.errors.value <= target
            and peer.peak <= self.ceiling
            and "--rust" not in peer.arguments
        ]
        if not equal:
            return None
        best = min(equal, key=lambda peer: peer.median)
        return {
            "name": best.name,
            "ratio": best.median / own.median,
            "processor_ratio": best.processor_median / own.processor_median,
            "fastest_ratio": min(best.seconds) / min(own.seconds),
        }

    def _run(self, candidate: Candidate) -> bool:
        """Run a candidate once in a process of its own; a failure is kept, not timed."""
        scratch = self.given.data / "work"
        scratch.mkdir(exist_ok=True)
        result = scratch / "factors.npz"
        result.unlink(missing_ok=True)
        words = [sys.executable, str(HERE / "worker.py"), candidate.arguments[0], str(self.path), str(result)]
        words += [*candidate.arguments[1:], "--rank", str(self.given.rank)]
        words += ["--centred"] if self.given.centred else []
        settings = dict(os.environ)
        if candidate.arguments[0] == "dask":
            # dask brings the threads; with OpenBLAS's own on top it took up to ten times as long.
            settings |= {"OPENBLAS_NUM_THREADS": "1", "MKL_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"}
        before, start = os.times(), time.perf_counter()
        done = subprocess.run(words, capture_output=True, text=True, env=settings, check=False)
        seconds, after = time.perf_counter() - start, os.times()
        if done.returncode or not result.is_file():
            self.failed.append({"name": candidate.name, "message": done.stderr.strip().splitlines()[-1:]})
            print(f"  {candidate.name}: failed, {''.join(done.stderr.strip().splitlines()[-1:])}", flush=True)
            return False
        candidate.told = json.loads(done.stdout.strip().splitlines()[-1])
        candidate.seconds.append(seconds)
        spent = after.children_user - before.children_user + after.children_system - before.children_system
        candidate.processor_seconds.append(spent)
        candidate.peak_bytes.append(candidate.told["peak_bytes"])
        with np.load(result) as factors:
            found = errors_of(factors["singular_values"], factors["right_vectors"], self.values, self.right)
        if candidate.errors is not None:
            found = Errors(max(found.value, candidate.errors.value), max(found.angle, candidate.errors.angle))
        candidate.errors = found
        peak = show_bytes(candidate.peak_bytes[-1])
        print(
            f"  {candidate.name}: {seconds:.1f} s, {spent:.1f} of processors, error {found.value:.1e}, {peak}",
            flush=True,
        )
        return True


def _value_error(candidate: Candidate) -> float:
    return candidate.errors.value if candidate.errors is not None else float("inf")


if __name__ == "__main__":
    main()

"""One file, and all candidates side by side on it: the tuned settings found, then the main ones in turn."""

from __future__ import annotations

import json
import shutil
from contextlib import nullcontext
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

from bench.cache import cached_share, drop, warm
from bench.cases import Case
from bench.exact import exact_factors
from bench.group import memory_group
from bench.measure import (
    Candidate,
    Errors,
    TooSlowError,
    best_peer,
    errors_of,
    least_iterations,
    target_error,
)
from bench.peers import MOST_ITERATIONS, Family, families, slow_ones, variants
from bench.process import Ended, run_process
from bigsvd.units import show_bytes

TOLERANCE = 1e-3
# An iteration that leaves so much of the error gains no more: rounding has been reached.
STANDING = 0.7
# Iterations and error on an earlier file of the same spectrum: where to look first on the next.
Seen = dict[tuple[str, str], dict[int, float]]


class CaseFailedError(Exception):
    """Bigsvd itself did not end well: there is nothing to compare with, and the other cases go on."""


@dataclass(frozen=True)
class Setup:
    """What holds for every process of a run.

    Attributes
    ----------
    folder : Path
        Of the files, with room for work.
    rank : int
    centred : bool
    runs : int
        Of the main candidates; the others run once.
    ceiling : int
        Bytes: given to bigsvd, held against the others.
    limit : str
        ``none``, or what the system holds every process to: ``group``, ``data`` or ``as``.
    cold : bool
        Drop the file from the page cache before every process, instead of having it there.
    timeout : float
        Seconds.
    slow : bool
        Also what takes minutes.
    """

    folder: Path
    rank: int
    centred: bool
    runs: int
    ceiling: int
    limit: str
    cold: bool
    timeout: float
    slow: bool

    def run(self, path: Path, arguments: list[str], *, one_blas_thread: bool, centred: bool) -> tuple[Ended, Path]:
        """Run a candidate in a clean folder; return how it ended and where its factors are."""
        work = self.folder / "work"
        shutil.rmtree(work, ignore_errors=True)
        work.mkdir(parents=True)
        result = work / "factors.npz"
        words = [arguments[0], str(path), str(result), *arguments[1:], "--rank", str(self.rank)]
        words += ["--centred"] if centred else []
        # The candidate before may have needed the memory in which the file was.
        (drop if self.cold else warm)(path)
        with memory_group(self.ceiling) if self.limit == "group" else nullcontext() as group:
            words += ["--limit", f"{self.limit}:{group or self.ceiling}"] if self.limit != "none" else []
            return run_process(words, timeout=self.timeout, one_blas_thread=one_blas_thread), result

    def clear(self) -> None:
        """Remove what the last candidate left."""
        shutil.rmtree(self.folder / "work", ignore_errors=True)


@dataclass(eq=False)
class Side:
    """All candidates on one file.

    Attributes
    ----------
    case : Case
    setup : Setup
    seen : Seen
        Shared by all cases, and added to.
    """

    case: Case
    setup: Setup
    seen: Seen
    tried: dict[tuple[str, int, bool], Candidate] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.path = self.case.file(self.setup.folder)
        self.truth: dict[bool, tuple[np.ndarray, np.ndarray]] = {}
        self.stored_bytes = warm(self.path)
        if self.setup.cold:
            drop(self.path)
        self.cached = cached_share(self.path)

    def measure(self, available_bytes: int) -> dict[str, Any]:
        """Find the peers' settings, run everything once, then the main ones in turn."""
        print(f"\n{self.case.title}", flush=True)
        own = Candidate("bigsvd", ["bigsvd", "--memory", str(self.setup.ceiling)])
        values, _ = self._truth(self.setup.centred)
        if not self._run(own):
            raise CaseFailedError(f"bigsvd failed on {self.case.name}: {own.failures[-1]}")
        target = target_error(own.value_error)
        main, others, chosen = [], [], {}
        for family in families(self.case, centred=self.setup.centred):
            if family.slow and not self.setup.slow:
                continue
            near, equal = self._choose(family, TOLERANCE), self._choose(family, target)
            chosen[family.name] = {"tolerance": _words(near), "equal": _words(equal)}
            if equal is not None and not family.slow:
                main.append(equal)
            others += [each for each in (near, equal) if each is not None and each not in main]
            if equal is None:
                others += self._nearest(family)
        dask = [each for each in main if each.arguments[0] == "dask"]
        tuned = dask[0] if dask else next((each for each in others if each.arguments[0] == "dask"), None)
        double = tuned is not None and "--double" in tuned.arguments
        rest = variants(self.case, tuned, double=double, centred=self.setup.centred)
        left_out: list[tuple[str, str]] = []
        if self.setup.slow:
            slow, left_out = slow_ones(self.case, self.setup.ceiling, available_bytes)
            rest += slow
        for each in rest:
            self._run(each)
        peers = list({id(each): each for each in [*main, *others, *rest]}.values())
        self._interleave(own, main, peers)
        best = best_peer(own, peers, self.setup.ceiling)
        self.setup.clear()
        return {
            **self.case.facts(),
            "stored_bytes": self.stored_bytes,
            "cached_share": self.cached,
            "gap": float(values[self.setup.rank - 1] / values[self.setup.rank]),
            "target_error": target,
            "chosen": chosen,
            "candidates": [each.as_json() for each in (own, *peers)],
            "tried": [each.as_json() for each in self.tried.values() if each not in peers],
            "left_out": left_out,
            "best": None if best is None else best.name,
        }

    def _interleave(self, own: Candidate, main: list[Candidate], peers: list[Candidate]) -> None:
        """Run bigsvd, the tuned settings and whatever is fastest at equal error in turn, as often as asked."""
        while True:
            best = best_peer(own, peers, self.setup.ceiling)
            turn = [*main, *[each for each in peers if each is best or each.others_pipeline]]
            turn = list({id(each): each for each in turn if each.seconds and not each.failures}.values())
            waiting = [each for each in (own, *turn) if len(each.seconds) < self.setup.runs and not each.failures]
            if not waiting:
                return
            fewest = min(len(each.seconds) for each in waiting)
            # bigsvd takes part in every round, so that a best that is found late has it for a neighbour too.
            for each in (own, *[other for other in waiting if other is not own and len(other.seconds) == fewest]):
                self._run(each)

    def _choose(self, family: Family, target: float) -> Candidate | None:
        """Fewest iterations that reach an error, in single if that can, else in double."""
        seen = self.seen.get((family.name, self.case.spectrum), {})
        first = min((count for count, error in seen.items() if error <= target), default=1)
        for double in (False, True) if family.in_double else (False,):
            error_at = partial(self._error_at, family, double)
            found = least_iterations(error_at, target, first=max(first, family.least), most=MOST_ITERATIONS)
            if found is not None:
                return self.tried[family.name, found, double]
            before, last = (self.tried.get((family.name, MOST_ITERATIONS - back, double)) for back in (1, 0))
            if before is None or last is None or last.value_error < STANDING * before.value_error:
                # More iterations would still gain: it is not the precision that is wanting.
                return None
        return None

    def _error_at(self, family: Family, double: bool, iterations: int) -> float:
        """Error after so many iterations; run once for every setting that is asked for."""
        if iterations < family.least:
            return float("inf")
        key = (family.name, iterations, double)
        if key not in self.tried:
            self.tried[key] = family.make(iterations, double)
            self._run(self.tried[key])
            if not double and self.tried[key].errors is not None:
                seen = self.seen.setdefault((family.name, self.case.spectrum), {})
                seen[iterations] = self.tried[key].value_error
        found = self.tried[key]
        if found.errors is None:
            raise TooSlowError
        return found.value_error

    def _nearest(self, family: Family) -> list[Candidate]:
        """Where no number of iterations is enough, the best of those tried stands for all."""
        tried = [each for (name, _, _), each in self.tried.items() if name == family.name]
        return sorted(tried, key=lambda each: each.value_error)[:1]

    def _truth(self, centred: bool) -> tuple[np.ndarray, np.ndarray]:
        """True values, one more than the rank, and right vectors."""
        if centred not in self.truth:
            values, right = exact_factors(self.path, self.setup.rank, centred=centred)
            self.truth[centred] = values, right[:, : self.setup.rank]
        return self.truth[centred]

    def _run(self, candidate: Candidate) -> bool:
        """Run a candidate once more; a failure is kept, not timed."""
        centred = self.setup.centred or candidate.centred
        values, right = self._truth(centred)
        ended, result = self.setup.run(
            self.path, candidate.arguments, one_blas_thread=candidate.one_blas_thread, centred=centred
        )
        if ended.told is None or not result.is_file():
            candidate.failures.append(ended.failure or "it wrote no factors")
            print(f"  {candidate.name}: failed, {candidate.failures[-1]}", flush=True)
            return False
        with np.load(result) as factors:
            found = errors_of(factors["singular_values"], factors["right_vectors"], values, right)
        add(candidate, ended, found)
        peak = show_bytes(ended.peak_bytes)
        print(
            f"  {candidate.name}: {ended.seconds:.1f} s, {ended.processor_seconds:.1f} of processors,"
            f" error {found.value:.1e}, {peak}",
            flush=True,
        )
        return True


def add(candidate: Candidate, ended: Ended, errors: Errors) -> None:
    """Keep what one run showed."""
    assert ended.told is not None
    candidate.seconds.append(ended.seconds)
    candidate.processor_seconds.append(ended.processor_seconds)
    candidate.peak_bytes.append(ended.peak_bytes)
    candidate.own_peak_bytes.append(ended.own_peak_bytes)
    candidate.told.append(json.loads(json.dumps(ended.told)))
    candidate.errors = errors.worst(candidate.errors)


def _words(candidate: Candidate | None) -> str | None:
    return None if candidate is None else candidate.name

"""One process that decomposes for hours, stopped, cut, gone on with: memory, descriptors and files stay as they are.

    scripts/kill-storm --soak 3600

Every round is one result: begun, ended a few times at random moments (asked to stop, by an error, or killed in a
process of its own), gone on with, compared bit by bit. What the process holds is looked at after every round.
"""

from __future__ import annotations

import os
import random
import shutil
import signal
import statistics
import subprocess
import tempfile
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from kill_storm import OPTIONS, SHORT, digest, start, write_matrix

import bigsvd
from bigsvd.machine import resident_bytes
from bigsvd.sweep import Progress, StoppedError

MIB = 2**20
# Rounds after which caches are full and libraries are loaded.
WARM_UP = 5
# Resident size may be so much larger in the last quarter of the rounds than in the second. The allocator keeps up to
# 16 MiB free for each of its arenas, so a few rounds say nothing: sizes go up and down by 100 MiB.
MOST_GROWTH = 32 * MIB
LEAST_ROUNDS = 100


@dataclass(frozen=True)
class Held:
    """What the process holds after a round."""

    resident: int
    descriptors: int
    threads: int


@dataclass
class Soaked:
    """What a soak came to.

    Attributes
    ----------
    held : list of Held
        After every round.
    cuts : dict of str to int
        How often a run was ended, by how.
    faults : list of str
        Whatever was not as it should be.
    """

    held: list[Held] = field(default_factory=list)
    cuts: dict[str, int] = field(default_factory=dict)
    faults: list[str] = field(default_factory=list)

    @property
    def growth(self) -> int:
        """Resident size of the last quarter of the rounds less that of the second; 0 for too few rounds."""
        sizes = [each.resident for each in self.held[WARM_UP:]]
        quarter = len(sizes) // 4
        if len(sizes) < LEAST_ROUNDS:
            return 0
        return int(statistics.median(sizes[-quarter:]) - statistics.median(sizes[quarter : 2 * quarter]))

    def judge(self) -> list[str]:
        """Everything that is wrong."""
        wrong = list(self.faults)
        if self.growth > MOST_GROWTH:
            wrong.append(f"resident size grew by {self.growth / MIB:.1f} MiB")
        settled = self.held[WARM_UP:]
        for name in ("descriptors", "threads"):
            counts = [getattr(each, name) for each in settled]
            if counts and counts[-1] > counts[0]:
                wrong.append(f"{name}: {counts[0]} after the warm-up, {counts[-1]} at the end")
        return wrong


class Cut:
    """A listener that ends the run after so many events."""

    def __init__(self, events: int, error: BaseException) -> None:
        self.left, self.error = events, error
        self._lock = threading.Lock()

    def __call__(self, event: Progress) -> None:
        """Count an event."""
        with self._lock:
            self.left -= 1
            over = self.left <= 0
        if over:
            raise self.error


def soak(seconds: float, folder: Path, *, seed: int = 0, verbose: bool = False) -> Soaked:
    """Decompose for so long.

    Parameters
    ----------
    seconds : float
    folder : Path
        Empty; holds the matrix and the result.
    seed : int
        Of the moments.
    verbose : bool
        Print a line a minute.

    Returns
    -------
    Soaked
    """
    exec(SHORT)
    with _temporary_in(folder / "tmp"):
        return _rounds(seconds, folder, random.Random(seed), verbose=verbose)


@contextmanager
def _temporary_in(place: Path) -> Iterator[None]:
    """Let temporary files of this process and its children go to a folder of their own, where those left are seen."""
    place.mkdir()
    before = tempfile.tempdir, os.environ.get("TMPDIR")
    tempfile.tempdir = os.environ["TMPDIR"] = str(place)
    try:
        yield
    finally:
        tempfile.tempdir = before[0]
        os.environ.pop("TMPDIR")
        if before[1] is not None:
            os.environ["TMPDIR"] = before[1]


def _rounds(seconds: float, folder: Path, draw: random.Random, *, verbose: bool) -> Soaked:
    """Rounds for so many seconds."""
    soaked, matrix, out = Soaked(), folder / "soak.h5", folder / "soak.zarr"
    write_matrix(matrix)
    events: list[Progress] = []
    began = time.monotonic()
    bigsvd.decompose(matrix, out, progress=events.append, **OPTIONS)
    whole = time.monotonic() - began
    wanted = digest(out)
    said = began
    while time.monotonic() - began < seconds:
        shutil.rmtree(out)
        for _ in range(draw.randint(0, 3)):
            _cut_once(matrix, out, draw, len(events), whole, soaked)
            if (out / "zarr.json").exists():
                break
        bigsvd.decompose(matrix, out, **OPTIONS)
        _look(folder, out, wanted, soaked)
        if verbose and time.monotonic() - said >= 60:
            said = time.monotonic()
            print(_words(soaked, said - began), flush=True)
    return soaked


def _cut_once(matrix: Path, out: Path, draw: random.Random, events: int, whole: float, soaked: Soaked) -> None:
    """Begin, or go on with, a run, and end it at a random moment."""
    how = draw.choice(("stopped", "failed", "killed"))
    if how == "killed":
        process = start(matrix, out)
        try:
            process.wait(draw.uniform(0.3, 1.5) * whole + 0.3)
        except subprocess.TimeoutExpired:
            process.send_signal(signal.SIGKILL)
        process.communicate()
    else:
        error: BaseException = StoppedError() if how == "stopped" else OSError(5, "Input/output error")
        try:
            bigsvd.decompose(matrix, out, progress=Cut(draw.randint(1, events), error), **OPTIONS)
        except (StoppedError, OSError):
            pass
        else:
            how = "not in time"
    soaked.cuts[how] = soaked.cuts.get(how, 0) + 1


def _look(folder: Path, out: Path, wanted: str, soaked: Soaked) -> None:
    """Compare the result, and note what the process holds and what lies about."""
    if digest(out) != wanted:
        soaked.faults.append(f"round {len(soaked.held) + 1}: OTHER BITS")
    names = {path.name for path in folder.iterdir()} - {"soak.h5", "soak.zarr", "soak.zarr.log", "tmp"}
    names |= {f"tmp/{path.name}" for path in (folder / "tmp").iterdir()}
    if names:
        soaked.faults.append(f"round {len(soaked.held) + 1}: left behind: {', '.join(sorted(names))}")
    descriptors = len(os.listdir("/proc/self/fd")) if os.path.isdir("/proc/self/fd") else 0
    soaked.held.append(Held(resident_bytes(), descriptors, threading.active_count()))


def _words(soaked: Soaked, seconds: float) -> str:
    """One line about how it stands."""
    last = soaked.held[-1]
    cuts = ", ".join(f"{count} {how}" for how, count in sorted(soaked.cuts.items()))
    return (
        f"{seconds:.0f} s: {len(soaked.held)} rounds; runs ended before their time: {cuts or 'none'};"
        f" {last.resident / MIB:.0f} MiB resident, {last.descriptors} descriptors, {last.threads} threads;"
        f" growth {soaked.growth / MIB:+.1f} MiB"
    )


def show_soak(seconds: float, **options: Any) -> int:
    """Soak and print; returns the exit status."""
    with tempfile.TemporaryDirectory(prefix="soak-") as folder:
        began = time.monotonic()
        soaked = soak(seconds, Path(folder), verbose=True, **options)
        print(_words(soaked, time.monotonic() - began))
    wrong = soaked.judge()
    print("\n".join(wrong) or "same bits in every round, memory flat, no descriptor, thread or file left")
    return 1 if wrong else 0

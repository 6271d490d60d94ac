"""Where the processor time of one decomposition goes, by stage and phase, without a profiler's guesses.

    python bench/phases.py big.h5 --rank 20 --center none --memory 768MiB

Every named function is wrapped by a clock of its own thread; what nested ones took is taken off. Waiting counts as
nothing, so the figures hold on a busy machine; wall seconds of each stage stand in the last column.
"""

from __future__ import annotations

import argparse
import functools
import importlib
import json
import tempfile
import threading
import time
from collections import defaultdict
from collections.abc import Callable
from pathlib import Path
from typing import Any

from bench.tables import table

# Phase, module, and the function or method in it that is wrapped where it is looked up.
PHASES: tuple[tuple[str, str, str], ...] = (
    ("read and decode", "bigsvd.sweep.panels", "PanelReader.fetch"),
    ("word sums", "bigsvd.sweep.segment", "_word_sum"),
    ("convert and centre", "bigsvd.sweep.segment", "prepare_unit"),
    ("sums of lines", "bigsvd.sweep.segment", "Segment._tile_sums"),
    ("energy", "bigsvd.sweep.segment", "_squares"),
    ("product AB", "bigsvd.sweep.segment", "Segment._first_product"),
    ("product AᴴY", "bigsvd.sweep.segment", "Segment._add_product"),
    ("sum of AᴴA", "bigsvd.sweep.segment", "add_gram"),
    ("turn Y", "bigsvd.sweep.segment", "Segment._second_product"),
    ("rounding measured", "bigsvd.sweep.segment", "Segment._measure"),
    ("gather for the fold", "bigsvd.sweep.gathering", "Gatherer.add"),
    ("QR fold", "bigsvd.sweep.gathering", "fold"),
    ("QR fold", "bigsvd.sweep.gathering", "fold_upon"),
    ("scratch read", "bigsvd.sweep.scratch", "Scratch.read"),
    ("scratch write", "bigsvd.sweep.scratch", "Scratch.write"),
    ("sum of partials", "bigsvd.sweep.waves", "combine"),
    ("rest of a segment", "bigsvd.sweep.waves", "run_segment"),
    ("basis: absorb", "bigsvd.solve.state", "State.absorb"),
    ("basis: restart", "bigsvd.solve.state", "State.restart"),
    ("Ritz values", "bigsvd.solve.state", "State.ritz"),
    ("missed-direction chains", "bigsvd.drive.run", "carry_chains"),
    ("basis: start", "bigsvd.drive.run", "start_block"),
    ("basis: grow", "bigsvd.drive.run", "grow_block"),
    ("basis: defect", "bigsvd.solve.state", "State.basis_defect"),
    ("certificate", "bigsvd.drive.run", "certify"),
    ("solve the pilot", "bigsvd.drive.sweeps", "take_pilot"),
    ("compare a slice with LAPACK", "bigsvd.drive.slices", "check_slice"),
    ("tall vectors", "bigsvd.solve.tall", "TallVectors.__init__"),
    ("tall vectors", "bigsvd.solve.tall", "TallVectors.rows"),
    ("store and verify", "bigsvd.factors.writer", "FactorsWriter.write_vectors"),
    ("store and verify", "bigsvd.factors.writer", "FactorsWriter.finish"),
    ("plan and probe", "bigsvd.api", "_foresee"),
)


READ = "read and decode"
# What no way of sweeping can do without: the floor of a sweep is made of these.
FLOOR = (READ, "convert and centre", "sums of lines", "energy", "product AB", "product AᴴY", "sum of AᴴA", "QR fold")
# Parts that every entry of the matrix needs once, however often a sweep may come to it.
ONCE = ("convert and centre", "sums of lines", "energy")
# All that happens inside a sweep; the rest is done by the caller between sweeps.
IN_SWEEP = tuple(dict.fromkeys(phase for phase, module, _ in PHASES if module.startswith("bigsvd.sweep")))


class Clocks:
    """Processor seconds by (stage, phase), each thread's own, nested phases taken off.

    Attributes
    ----------
    on : bool
        Off, the functions run as they are.
    """

    def __init__(self) -> None:
        self.on = True
        self.seconds: dict[tuple[str, str], float] = defaultdict(float)
        self.calls: dict[tuple[str, str], int] = defaultdict(int)
        self.stage = "open"
        self._lock = threading.Lock()
        self._local = threading.local()

    def timed(self, phase: str, function: Callable[..., Any]) -> Callable[..., Any]:
        """The same function under a clock."""

        @functools.wraps(function)
        def run(*words: Any, **options: Any) -> Any:
            if not self.on:
                return function(*words, **options)
            nested, before = self._nested(), time.thread_time()
            self.note(phase, function, words, options)
            start = time.thread_time()
            if nested:
                # Looking takes its time too, which is nobody's.
                nested[-1] += start - before
            nested.append(0.0)
            try:
                return function(*words, **options)
            finally:
                spent = time.thread_time() - start
                inside = nested.pop()
                if nested:
                    nested[-1] += spent
                with self._lock:
                    self.seconds[self.stage, phase] += spent - inside
                    self.calls[self.stage, phase] += 1

        return run

    def note(self, phase: str, function: Callable[..., Any], words: tuple[Any, ...], options: dict[str, Any]) -> None:
        """Look at a call before it is made; nothing here."""

    def _nested(self) -> list[float]:
        """Seconds of nested phases, for every phase that this thread is in."""
        if not hasattr(self._local, "nested"):
            self._local.nested = []
        found: list[float] = self._local.nested
        return found


def install(clocks: Clocks) -> None:
    """Wrap every phase, and follow the stages of the run."""
    for phase, module_name, name in PHASES:
        owner: Any = importlib.import_module(module_name)
        *path, last = name.split(".")
        for part in path:
            owner = getattr(owner, part)
        setattr(owner, last, clocks.timed(phase, getattr(owner, last)))
    control = importlib.import_module("bigsvd.sweep").Control
    begin = control.begin

    def follow(self: Any, stage: str, total: int, sweep: int = 0, note: str = "") -> None:
        # A slice runs the engine too, under a control of its own that must not pass for the run's.
        if clocks.stage != "slices" or stage in ("slices", "write"):
            clocks.stage = f"{stage} {sweep}" if sweep else stage
        begin(self, stage, total, sweep, note)

    control.begin = follow


def main(arguments: list[str] | None = None) -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("path", type=Path)
    parser.add_argument("--rank", type=int, default=20)
    parser.add_argument("--center", choices=("features", "none"), default="features")
    parser.add_argument("--memory", default="768MiB")
    parser.add_argument("--workers", type=int)
    parser.add_argument("--json", action="store_true", help="print one JSON object instead of a table")
    given = parser.parse_args(arguments)
    import bigsvd

    clocks = Clocks()
    install(clocks)
    start, imports = time.perf_counter(), time.process_time()
    with tempfile.TemporaryDirectory() as folder:
        factors = bigsvd.decompose(
            given.path,
            Path(folder) / "out.zarr",
            rank=given.rank,
            center=given.center,
            memory=given.memory,
            workers=given.workers,
        )
    wall, total = time.perf_counter() - start, time.process_time()
    record = factors.attributes
    facts = {
        "wall_seconds": wall,
        "processor_seconds": total,
        "before_the_call": imports,
        "not_in_any_phase": total - imports - sum(clocks.seconds.values()),
        "stage_wall_seconds": record["timings"],
        "phases": [
            {"stage": stage, "phase": phase, "seconds": seconds, "calls": clocks.calls[stage, phase]}
            for (stage, phase), seconds in clocks.seconds.items()
        ],
        "sweeps": record["sweeps"],
        "reads": record["bytes_read"] / record["matrix_bytes"],
        "precision": record["precision"],
        "width": record["width"],
    }
    print(json.dumps(facts) if given.json else "\n".join(_lines(facts)))


def _lines(facts: dict[str, Any]) -> list[str]:
    stages = list(dict.fromkeys(each["stage"] for each in facts["phases"]))
    phases = list(dict.fromkeys(phase for phase, _, _ in PHASES))
    found = {(each["stage"], each["phase"]): each["seconds"] for each in facts["phases"]}
    rows = [
        [phase, *(f"{found[stage, phase]:.2f}" if (stage, phase) in found else "" for stage in stages)]
        for phase in phases
        if any((stage, phase) in found for stage in stages)
    ]
    sums = [sum(seconds for (stage, _), seconds in found.items() if stage == wanted) for wanted in stages]
    rows.append(["together", *(f"{each:.2f}" for each in sums)])
    walls = ", ".join(f"{stage} {seconds:.2f}" for stage, seconds in facts["stage_wall_seconds"].items())
    return [
        *table(["processor seconds", *stages], rows),
        f"before the call (imports) {facts['before_the_call']:.2f}, in no phase {facts['not_in_any_phase']:.2f}, "
        f"in all {facts['processor_seconds']:.2f}; wall {facts['wall_seconds']:.2f} ({walls})",
        f"{facts['sweeps']} sweeps, {facts['reads']:.2f} reads, {facts['precision']}, width {facts['width']}",
    ]


if __name__ == "__main__":
    main()

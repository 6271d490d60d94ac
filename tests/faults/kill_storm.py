"""Kills a run at random moments, goes on each time, and compares the bits of the result with an uninterrupted run.

    scripts/kill-storm 200            so many kills (SIGKILL), over as many runs as that takes
    scripts/kill-storm 20 --term      ended by SIGTERM instead, which must leave by itself within seconds
    scripts/kill-storm --soak 3600    for so many seconds in one process (tests/faults/soak.py)

Prints a line per finished run, and at the end what was lost and found; exits with 1 if any bit differs.
"""

from __future__ import annotations

import argparse
import hashlib
import random
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5py
import numpy as np

import bigsvd
from bigsvd import journal

LINES, ACROSS, RANK = 24_000, 400, 12
# Waves and savings so short that any moment of a run can be hit.
SHORT = """
import bigsvd.journal.journal as journal
import bigsvd.plan.geometry as geometry
geometry.WAVE_SECONDS = 0.02
journal.WORTH_KEEPING, journal.SHARE_OF_TIME = 0.0, 1e9
"""
# The command line in a process of its own.
WORKER = f"""
import sys
{SHORT}
from bigsvd.cli import main
main(sys.argv[1:])
"""
OPTIONS: dict[str, Any] = {
    "rank": RANK, "route": "krylov", "axis": "rows", "save_every": 0.0, "memory": "1GiB", "tolerance": 1e-5,
    "scale": "unit", "overwrite": True,
}  # fmt: skip


@dataclass
class Tally:
    """What the storm came to."""

    kills: int = 0
    runs: int = 0
    differ: int = 0
    kept: int = 0
    resumed: int = 0
    seconds: list[float] = field(default_factory=list)
    leaving: list[float] = field(default_factory=list)


def write_matrix(path: Path) -> None:
    """Invented counts whose leading values lie close, so that several sweeps are needed."""
    draw = np.random.default_rng(11)
    left = draw.standard_normal((LINES, 40)) * np.arange(1, 41) ** -0.5
    values = left @ draw.standard_normal((40, ACROSS)) * 60 + draw.standard_normal((LINES, ACROSS)) * 8 + 900
    with h5py.File(path, "w") as file:
        file.create_dataset(
            "counts", data=np.clip(np.round(values), 0, 65535).astype(np.uint16), chunks=(200, ACROSS), compression=1
        )


def digest(store: Path) -> str:
    """Digest of every array of a result; the root document holds times and is left out."""
    found = hashlib.sha256()
    for path in sorted(store.rglob("*")):
        if path.is_file() and path != store / "zarr.json":
            found.update(path.relative_to(store).as_posix().encode() + path.read_bytes())
    return found.hexdigest()


def start(matrix: Path, out: Path) -> subprocess.Popen[str]:
    """Begin, or go on with, the run."""
    words = ["decompose", str(matrix), "--out", str(out), "--quiet"]
    for name, value in OPTIONS.items():
        option = f"--{name.replace('_', '-')}"
        words += [option] if value is True else [option, str(value)]
    line = [sys.executable, "-c", WORKER, *words]
    return subprocess.Popen(line, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def finish(process: subprocess.Popen[str], out: Path) -> int:
    """Wait for a run to end by itself; return how often it was gone on with."""
    _, complaints = process.communicate()
    if process.returncode:
        raise SystemExit(f"a run failed by itself with {process.returncode}:\n{complaints}")
    return int(bigsvd.open_factors(out).attributes["resumed"])


def storm(kills: int, folder: Path, *, number: int = signal.SIGKILL, seed: int = 0, verbose: bool = False) -> Tally:
    """Kill so many times.

    Parameters
    ----------
    kills : int
    folder : Path
        Empty; holds the matrix and the results.
    number : int
        The signal.
    seed : int
        Of the moments.
    verbose : bool
        Print a line per finished run.

    Returns
    -------
    Tally
    """
    draw = random.Random(seed)
    matrix, out = folder / "storm.h5", folder / "storm.zarr"
    write_matrix(matrix)
    began = time.perf_counter()
    finish(start(matrix, out), out)
    whole = time.perf_counter() - began
    wanted = digest(out)
    tally = Tally()
    while tally.kills < kills:
        shutil.rmtree(out)
        hits, began = 0, time.perf_counter()
        # A run that is hit between the last step and the end of its process is whole.
        while not (out / "zarr.json").exists():
            process = start(matrix, out)
            if tally.kills == kills:
                tally.resumed += finish(process, out) > 0
                break
            try:
                # The first third of so short a run is the start of the interpreter.
                process.wait(draw.uniform(0.3, 1.1) * whole)
                tally.resumed += finish(process, out) > 0
            except subprocess.TimeoutExpired:
                process.send_signal(number)
                sent = time.perf_counter()
                process.communicate()
                # Too early for its own way to stop, in time for it, or just ended.
                if process.returncode not in (-number, 128 + number, 0):
                    raise SystemExit(f"a run that was hit ended with {process.returncode}") from None
                tally.leaving.append(time.perf_counter() - sent)
                tally.kills += 1
                tally.kept += any(out.with_name(out.name + ".run").glob("sums-*"))
                hits += 1
        journal.discard_finished(out)
        tally.runs += 1
        tally.seconds.append(time.perf_counter() - began)
        same = digest(out) == wanted
        tally.differ += not same
        left = sorted(path.name for path in folder.iterdir() if path not in (matrix, out))
        left = [name for name in left if not name.endswith(".log")]
        if left:
            raise SystemExit(f"left behind: {', '.join(left)}")
        if verbose:
            words = "same bits" if same else "OTHER BITS"
            print(f"run {tally.runs}: {hits} kills, {tally.seconds[-1]:.1f} s, {words}", flush=True)
    return tally


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("kills", type=int, nargs="?", default=20, help="how many kills (default 20)")
    parser.add_argument("--soak", type=float, metavar="SECONDS", help="one process for so long, instead")
    parser.add_argument("--term", action="store_true", help="SIGTERM instead of SIGKILL")
    parser.add_argument("--seed", type=int, default=0, help="of the moments (default 0)")
    given = parser.parse_args()
    if given.soak is not None:
        from soak import show_soak

        sys.exit(show_soak(given.soak, seed=given.seed))
    with tempfile.TemporaryDirectory(prefix="storm-") as folder:
        number = signal.SIGTERM if given.term else signal.SIGKILL
        tally = storm(given.kills, Path(folder), number=number, seed=given.seed, verbose=True)
    print(
        f"{tally.kills} kills ({tally.kept} with sums in the journal) over {tally.runs} runs:"
        f" {tally.runs - tally.differ} of {tally.runs} with the same bits, {tally.resumed} of them gone on with;"
        f" gone {max(tally.leaving, default=0):.1f} s after the signal"
        f" at the latest; {sum(tally.seconds):.0f} s in all"
    )
    sys.exit(1 if tally.differ else 0)


if __name__ == "__main__":
    main()

"""What the journal costs: the same run with and without it, taken in turns, and the ratio of their times.

    python bench/journal.py big.h5                      the file is made, 2 GB decoded, if it is not there
    python bench/journal.py big.h5 --kind hdf5-plain --gigabytes 1 --pairs 5
    python bench/journal.py cells.zarr --matrix /counts

With it is what ``bigsvd decompose`` does by default: sums saved every five seconds with the scratch flushed, a folder,
a lock, a log and a status file. Without it there is none of these; everything else is the same, and so must be the
bits. Each run is a process of its own; the two of a pair change places from one pair to the next, so that what other
programs do at the time falls on both. The file is in the page cache.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import os
import statistics
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

HERE = Path(__file__).parent
if str(HERE.parent) not in sys.path:
    sys.path.insert(0, str(HERE.parent))

from bench.cache import warm  # noqa: E402
from bench.data import DTYPES, MATRIX, make_recipe, write_benchmark  # noqa: E402
from bench.process import run_process  # noqa: E402

COLUMNS = 5_000
WITH, WITHOUT = "with", "without"


def main(arguments: list[str] | None = None) -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("path", type=Path)
    parser.add_argument("--matrix", help="path inside the file; only of a file that is there")
    parser.add_argument("--kind", choices=sorted(DTYPES), default="hdf5-gzip", help="of the file to be made")
    parser.add_argument("--gigabytes", type=float, default=2.0, help="decoded, of the file to be made")
    parser.add_argument("--spectrum", default="inverse-root", help="of the file to be made: slow decay, several sweeps")
    parser.add_argument("--pairs", type=int, default=3)
    parser.add_argument("--rank", type=int, default=20)
    parser.add_argument("--memory", default="768MiB")
    parser.add_argument("--tolerance", type=float, default=1e-3)
    parser.add_argument("--result", type=Path, help="JSON file to be written with every time")
    parser.add_argument("--one", choices=(WITH, WITHOUT), help=argparse.SUPPRESS)
    given = parser.parse_args(arguments)
    if given.one:
        print(json.dumps(one_run(given)))
        return
    if not given.path.exists():
        make(given)
    warm(given.path)
    found = measure(given)
    for line in summary(found):
        print(line)
    if given.result:
        given.result.write_text(json.dumps(found, indent=1) + "\n")


def make(given: argparse.Namespace) -> None:
    """Write the file."""
    rows = max(1_000, round(given.gigabytes * 1e9 / COLUMNS / DTYPES[given.kind].itemsize))
    made = write_benchmark(given.kind, given.path, make_recipe(given.kind, rows, COLUMNS, spectrum=given.spectrum))
    print(f"{given.path}: {made.decoded_bytes / 1e9:.2f} GB decoded, written in {made.seconds:.0f} s", flush=True)
    given.matrix = None if given.kind.startswith("zarr") else MATRIX


def measure(given: argparse.Namespace) -> list[dict[str, Any]]:
    """Run pairs; each process tells its own seconds, from before the file is opened to the result in place."""
    words = [str(given.path), "--rank", str(given.rank), "--memory", given.memory, "--tolerance", str(given.tolerance)]
    words += ["--matrix", given.matrix] if given.matrix else []
    pairs = []
    for number in range(given.pairs):
        pair: dict[str, Any] = {}
        for which in (WITH, WITHOUT) if number % 2 == 0 else (WITHOUT, WITH):
            ended = run_process([*words, "--one", which], timeout=7200, script="journal")
            if ended.told is None:
                raise SystemExit(f"a run {which} a journal failed: {ended.failure}")
            pair[which] = ended.told | {"processor_seconds": ended.processor_seconds}
        if pair[WITH]["digest"] != pair[WITHOUT]["digest"]:
            raise SystemExit("with and without a journal the bits differ")
        pairs.append(pair)
        print(pair_words(number, pair), flush=True)
    return pairs


def pair_words(number: int, pair: dict[str, Any]) -> str:
    """One line about a pair."""
    kept, bare = pair[WITH], pair[WITHOUT]
    return (
        f"pair {number + 1}: with {kept['seconds']:.2f} s, without {bare['seconds']:.2f} s,"
        f" ratio {kept['seconds'] / bare['seconds']:.3f}"
        f" (processor {kept['processor_seconds'] / bare['processor_seconds']:.3f});"
        f" {kept['savings']} savings in {kept['saved_seconds']:.2f} s, {kept['sweeps']} sweeps"
    )


def summary(pairs: list[dict[str, Any]]) -> list[str]:
    """Medians over the pairs."""
    ratios = sorted(pair[WITH]["seconds"] / pair[WITHOUT]["seconds"] for pair in pairs)
    spent = sorted(pair[WITH]["processor_seconds"] / pair[WITHOUT]["processor_seconds"] for pair in pairs)
    own = statistics.median(pair[WITH]["saved_seconds"] / pair[WITH]["seconds"] for pair in pairs)
    return [
        f"with over without: {statistics.median(ratios):.3f} ({ratios[0]:.3f}–{ratios[-1]:.3f}, {len(pairs)} pairs);"
        f" processor seconds {statistics.median(spent):.3f} ({spent[0]:.3f}–{spent[-1]:.3f})",
        f"saving itself, while the workers go on: {own:.1%} of a run",
    ]


def one_run(given: argparse.Namespace) -> dict[str, Any]:
    """Decompose once in this process."""
    import bigsvd
    from bigsvd import api
    from bigsvd.journal import journal

    kept: list[journal.Journal] = []
    savings: list[Path] = []
    if given.one == WITHOUT:
        api.keep_run = _keep_nothing
    else:
        begin, write = journal.Journal.__init__, journal.write_record

        def noted(self: journal.Journal, *words: Any, **options: Any) -> None:
            begin(self, *words, **options)
            kept.append(self)

        def counted(path: Path, *words: Any) -> int:
            savings.append(path)
            return write(path, *words)

        journal.Journal.__init__ = noted
        journal.write_record = counted
    # Beside the file, not in memory, where a folder of temporary files may lie.
    with tempfile.TemporaryDirectory(prefix=".bench-journal-", dir=given.path.resolve().parent) as folder:
        out = Path(folder) / "factors.zarr"
        start = time.perf_counter()
        factors = bigsvd.decompose(
            given.path, out, matrix=given.matrix, rank=given.rank, memory=given.memory, tolerance=given.tolerance
        )
        seconds = time.perf_counter() - start
        return {
            "seconds": seconds,
            "savings": len(savings),
            "saved_seconds": sum(each.saved_seconds for each in kept),
            "sweeps": factors.attributes["sweeps"],
            "digest": _digest(out),
        }


@contextmanager
def _keep_nothing(out: Path | None, plan: Any, scratch: Path, control: Any, **_: Any) -> Iterator[None]:
    """What `keep_run` is for an array in memory: no folder, no journal, no log."""
    yield None


def _digest(out: Path) -> str:
    """Digest of every array of a result."""
    found = hashlib.sha256()
    for path in sorted(out.rglob("*")):
        if path.is_file() and path.parent != out:
            found.update(os.fsencode(path.relative_to(out)) + path.read_bytes())
    return found.hexdigest()


if __name__ == "__main__":
    main()

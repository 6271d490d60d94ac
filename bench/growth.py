"""bigsvd on ever larger files at one ceiling, and with one worker against several on compressed files."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from bench.cache import cached_share, drop, warm
from bench.cases import KINDS, Case
from bench.data import make_recipe, write_benchmark
from bench.exact import exact_factors
from bench.measure import Candidate, errors_of, target_error
from bench.peers import MOST_ITERATIONS, dask_tuned
from bench.side import CaseFailedError, Setup, add
from bigsvd.units import show_bytes, show_seconds

KIND, COLUMNS = "hdf5-plain", 5_000
SIZES = (1, 2, 4, 8, 16)
# Planted values beyond these are a millionth of the first: what is planted is the truth, to the rounding of float32.
PLANTED = 60
COMPRESSED = ("hdf5-gzip", "hdf5-bitshuffle", "zarr-zstd")


def measure_growth(setup: Setup, unit_bytes: int, columns: int) -> list[dict[str, Any]]:
    """Write, decompose and delete a file of each size, `unit_bytes` the smallest; errors against what was planted."""
    found = []
    for size in SIZES:
        rows = round(size * unit_bytes / (4 * columns))
        path = setup.folder / f"growth-{rows}x{columns}.h5"
        recipe = make_recipe(KIND, rows, columns, rank=PLANTED)
        try:
            if not path.exists():
                made = write_benchmark(KIND, path, recipe)
                print(f"\n{show_bytes(made.decoded_bytes)} written in {show_seconds(made.seconds)}", flush=True)
            truth = recipe.values[: setup.rank], recipe.right_vectors[:, : setup.rank]
            own = Candidate(f"{show_bytes(recipe.decoded_bytes)}", ["bigsvd", "--memory", str(setup.ceiling)])
            cached = _run_all(setup, path, [own], truth)
            peer = _peer(setup, path, own, truth)
        finally:
            path.unlink(missing_ok=True)
            path.with_name(f"{path.name}.truth.npz").unlink(missing_ok=True)
        found.append(
            {
                "shape": [rows, columns],
                "decoded_bytes": recipe.decoded_bytes,
                "over_ceiling": recipe.decoded_bytes / setup.ceiling,
                "cached_share": cached,
                "run": own.as_json(),
                "peer": None if peer is None else peer.as_json(),
            }
        )
    return found


def _peer(setup: Setup, path: Path, own: Candidate, truth: tuple[np.ndarray, np.ndarray]) -> Candidate | None:
    """Tuned dask with the fewest iterations that come as near to the truth, run once; None where it does not end."""
    for iterations in range(1, MOST_ITERATIONS):
        peer = dask_tuned(iterations, double=False)
        ended, result = setup.run(
            path, peer.arguments, one_blas_thread=peer.one_blas_thread, centred=setup.centred
        )  # fmt: skip
        if ended.told is None:
            print(f"  {peer.name}: failed, {ended.failure}", flush=True)
            return None
        with np.load(result) as factors:
            add(peer, ended, errors_of(factors["singular_values"], factors["right_vectors"], *truth))
        print(f"  {peer.name}: {ended.seconds:.1f} s, {show_bytes(ended.peak_bytes)}", flush=True)
        if peer.value_error <= target_error(own.value_error):
            return peer
    return None


def measure_workers(setup: Setup, case: Case, workers: list[int]) -> list[dict[str, Any]]:
    """One worker against several, in turn, on a compressed file."""
    print(f"\n{case.title}: workers", flush=True)
    path = case.file(setup.folder)
    values, right = exact_factors(path, setup.rank, centred=setup.centred)
    words = ["bigsvd", "--memory", str(setup.ceiling), "--workers"]
    several = [Candidate(_workers(count), [*words, str(count)]) for count in workers]
    _run_all(setup, path, several, (values, right[:, : setup.rank]))
    return [case.facts() | {"workers": workers, "runs": [each.as_json() for each in several]}]


def compressed_cases(cases: list[Case]) -> list[Case]:
    """The compressed ones among the exponential cases of a run."""
    assert set(COMPRESSED) <= set(KINDS)
    return [case for case in cases if case.kind in COMPRESSED and case.spectrum == "exponential"]


def _run_all(setup: Setup, path: Path, candidates: list[Candidate], truth: tuple[np.ndarray, np.ndarray]) -> float:
    """Run all in turn, as often as asked; return the share of the file that was in the page cache before."""
    warm(path)
    if setup.cold:
        drop(path)
    cached = cached_share(path)
    for _ in range(setup.runs):
        for each in candidates:
            ended, result = setup.run(path, each.arguments, one_blas_thread=False, centred=setup.centred)
            if ended.told is None:
                raise CaseFailedError(f"bigsvd failed on {path.name}: {ended.failure}")
            with np.load(result) as factors:
                add(each, ended, errors_of(factors["singular_values"], factors["right_vectors"], *truth))
            print(f"  {each.name}: {ended.seconds:.1f} s, {show_bytes(ended.peak_bytes)}", flush=True)
    setup.clear()
    return cached


def _workers(count: int) -> str:
    return f"{count} worker{'' if count == 1 else 's'}"

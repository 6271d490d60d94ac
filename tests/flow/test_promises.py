"""What every run promises: reads that are counted, the same bits, memory as planned, work that two workers share."""

from __future__ import annotations

import json
import re
import subprocess
import sys
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import table
from promise_samples import CountingSource, low_rank, stored_bits, write_gzip_counts, write_npy, write_zarr
from threadpoolctl import threadpool_limits

import bigsvd
from bigsvd import machine
from bigsvd.errors import MemoryCeilingError

pytestmark = pytest.mark.alone

MIB = 2**20


# ------------------------------------------------------------------------------------------------------------- reads
def decaying(rows: int, columns: int, values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """A float32 matrix with about these singular values times √rows, and its left factor, whose values are the same."""
    random = np.random.default_rng(3)
    right = np.linalg.qr(random.standard_normal((columns, len(values))))[0].T
    left = random.standard_normal((rows, len(values))) * values
    return np.asarray(left @ right, np.float32), left


EXPONENTIAL, HARMONIC = 0.8 ** np.arange(60), 1 / np.arange(1, 200)


@pytest.mark.parametrize("axis", ["rows", "columns"])
@pytest.mark.parametrize("center", ["features", "none"])
def test_bytes_reported_are_the_bytes_read(axis: str, center: str) -> None:
    # 72 MB, so that a probe is made too; chunks of 100 lines along either axis.
    matrix, _ = decaying(12_000, 1500, HARMONIC)
    turned, chunks = (matrix, (100, 1500)) if axis == "rows" else (matrix.T, (1500, 100))
    source = CountingSource(turned, chunks, "memory")  # a class of which nothing is kept between sweeps
    factors = bigsvd.decompose(
        source, rank=10, route="krylov", axis=axis, center=center, memory="1GiB", progress=source.listen, tolerance=1e-6
    )
    attributes = factors.attributes
    assert attributes["plan"]["axis"] == axis
    assert attributes["bytes_read"] == source.bytes
    assert set(source.by_stage) == {"probe", "pilot", "sweep", "slices"}
    assert sum(source.by_stage.values()) == source.bytes
    assert attributes["sweeps"] >= 2
    assert source.by_stage["sweep"] == attributes["sweeps"] * matrix.nbytes
    assert source.by_stage["pilot"] == attributes["plan"]["pilot_panels"] * attributes["plan"]["panel_bytes"]
    assert source.by_stage["pilot"] <= 0.05 * matrix.nbytes
    assert source.by_stage["slices"] <= 0.01 * matrix.nbytes
    assert source.by_stage["probe"] <= 4 * attributes["plan"]["panel_bytes"]


@pytest.mark.parametrize("route", ["direct", "gram", "tsqr", "krylov"])
def test_every_route_reports_what_it_reads(route: str) -> None:
    source = CountingSource(decaying(3000, 200, EXPONENTIAL)[0], (50, 200), "plain")
    factors = bigsvd.decompose(source, rank=6, route=route, memory="512MiB", progress=source.listen, panel_lines=150)
    assert factors.attributes["bytes_read"] == source.bytes
    sweeps = 1 if factors.attributes["plan"]["resident"] else factors.attributes["sweeps"]
    assert source.by_stage["sweep"] + source.by_stage.get("pilot", 0) <= (sweeps + 0.05) * source.matrix.nbytes
    assert source.by_stage["sweep"] >= (sweeps - 0.06) * source.matrix.nbytes


def test_panels_that_cut_chunks_report_the_chunks() -> None:
    source = CountingSource(decaying(3000, 200, EXPONENTIAL)[0], (500, 200))
    factors = bigsvd.decompose(
        source, rank=6, route="krylov", axis="rows", memory="512MiB", panel_lines=200, progress=source.listen
    )
    assert factors.attributes["bytes_read"] == source.bytes
    # 200 lines touch one chunk of 500, or two where 500, 1,500 and 2,500 lie inside: 18 chunks for 6.
    resident = factors.attributes["plan"]["resident"]
    assert source.by_stage["sweep"] == 3 * source.matrix.nbytes * (1 if resident else factors.attributes["sweeps"])


def test_an_exponential_spectrum_takes_at_most_two_and_a_tenth_reads_of_the_file() -> None:
    matrix, left = decaying(16_000, 1200, EXPONENTIAL)
    source = CountingSource(matrix, (100, 1200), "memory")
    factors = bigsvd.decompose(source, rank=20, route="krylov", axis="rows", memory="512MiB", progress=source.listen)
    assert factors.certificate.tolerance_met
    assert factors.certificate.index_proved.all()
    assert not factors.attributes["plan"]["resident"]
    assert factors.attributes["bytes_read"] == source.bytes <= 2.1 * matrix.nbytes
    true = np.linalg.svd(left - left.mean(axis=0), compute_uv=False)[:20]
    np.testing.assert_allclose(factors.singular_values[:], true, rtol=1e-3)


# --------------------------------------------------------------------------------------------------------- same bits
CASES = [
    ("krylov", "rows", "f4", "unit"),
    ("krylov", "columns", "u2", "none"),
    ("gram", "rows", "f8", "unit"),
    ("tsqr", "columns", "c16", "none"),
    ("direct", "rows", "f8", "none"),
]


def sampled(dtype: str) -> np.ndarray:
    """1,600 × 120 with ten components over noise, in any type."""
    matrix = table.planted(np.linspace(9, 3, 10), (1600, 120), 71, imaginary=dtype == "c16")
    noise = np.random.default_rng(72).standard_normal(matrix.shape) / 40
    scaled = (matrix + noise) * (4000 if dtype == "u2" else 1)
    if dtype == "u2":
        scaled = np.round(scaled - scaled.min())
    return np.asarray(scaled, dtype)


@pytest.mark.parametrize("several_waves", [False, True], ids=["one_wave", "several_waves"])
@pytest.mark.parametrize(("route", "axis", "dtype", "scale"), CASES)
def test_one_two_and_four_workers_give_the_same_bits(
    route: str, axis: str, dtype: str, scale: str, several_waves: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    if several_waves:
        # A wave of no more than the leaves: what ten seconds of work make of a large matrix.
        monkeypatch.setattr(bigsvd.plan.geometry, "WAVE_SECONDS", 1e-9)
    matrix = sampled(dtype)
    stored = matrix if axis == "rows" else np.ascontiguousarray(matrix.T)
    options: dict[str, Any] = {"route": route, "axis": axis, "samples": axis, "scale": scale, "rank": 8}
    options |= {"panel_lines": 50, "memory": "1GiB", "tolerance": 1e-5}
    waves = bigsvd.forecast(stored, **options).plan.waves
    assert sum(len(wave) for wave in waves) >= 8
    assert (len(waves) > 2) == several_waves
    results = [stored_bits(bigsvd.decompose(stored, workers=workers, **options)) for workers in (1, 2, 4, 2)]
    for other in results[1:]:
        assert other.keys() == results[0].keys()
        assert [name for name in other if other[name] != results[0][name]] == []


def test_stored_results_of_two_equal_runs_are_equal(tmp_path: Path) -> None:
    matrix = sampled("f4")
    runs = [bigsvd.decompose(matrix, tmp_path / f"{i}.zarr", rank=8, memory="1GiB", workers=i + 1) for i in range(2)]
    assert stored_bits(runs[0]) == stored_bits(runs[1])


def test_another_layout_gives_the_same_factors_to_the_tolerance() -> None:
    matrix = sampled("f8")
    layouts: list[tuple[tuple[int, int], str]] = [((1, 1), "memory"), ((1, 120), "npy"), ((64, 40), "zarr")]
    layouts += [((300, 7), "compressed"), ((1600, 1), "plain")]
    found = [
        bigsvd.decompose(CountingSource(matrix, chunks, storage), rank=8, route="krylov", memory="512MiB")
        for chunks, storage in layouts
    ]
    true = table.truth_of(matrix, table.CENTRED)
    for factors in found:
        assert factors.certificate.tolerance_met
        table.assert_factors_true(factors, true)
        np.testing.assert_allclose(factors.singular_values[:], found[0].singular_values[:], rtol=1e-3)


# ---------------------------------------------------------------------------------------------------------- speed-up
def free_processors() -> float:
    """How many times as much two threads multiply as one, now: other programs may hold the second processor."""
    block = np.random.default_rng(1).standard_normal((300, 300))

    def multiply() -> None:
        for _ in range(60):
            block @ block

    with threadpool_limits(limits=1), ThreadPoolExecutor(2) as pool:
        seconds = []
        for threads in (1, 2):
            start = time.perf_counter()
            for future in [pool.submit(multiply) for _ in range(threads)]:
                future.result()
            seconds.append(time.perf_counter() - start)
    return 2 * seconds[0] / seconds[1]


@pytest.mark.skipif(machine.processors() < 2, reason="one processor: two workers cannot share the work")
def test_two_workers_sweep_at_least_half_as_fast_again_as_one() -> None:
    # Wide enough that products, not the Householder folds of narrow panels, are what a sweep does.
    matrix = np.random.default_rng(4).standard_normal((20_000, 2_000))
    best = {1: np.inf, 2: np.inf}
    for _ in range(3):
        before = free_processors()
        if before < 1.8:
            pytest.skip(f"other programs hold the processors: two threads do {before:.2f} times the work of one")
        for workers in best:
            factors = bigsvd.decompose(
                matrix,
                rank=30,
                route="krylov",
                axis="rows",
                workers=workers,
                memory="1GiB",
                max_sweeps=2,
                tolerance=1e-9,
            )
            best[workers] = min(best[workers], factors.attributes["timings"]["sweep"])
        if best[1] / best[2] >= 1.5:
            return
    after = free_processors()
    if after < 1.8:
        pytest.skip(f"other programs hold the processors: two threads do {after:.2f} times the work of one")
    raise AssertionError(f"one worker {best[1]:.2f} s, two workers {best[2]:.2f} s, on processors that were free")


# ------------------------------------------------------------------------------------------------------------ memory
# Run in a process of its own. Prints the peak of the resident size by the kernel's record, and what the result says.
MEASURED = """
import json, re, resource, sys
import numpy as np
import bigsvd
from bigsvd.plan import geometry
path, options, held, limit = sys.argv[1], json.loads(sys.argv[2]), int(sys.argv[3]), int(sys.argv[4])
geometry.WAVE_SECONDS = float(sys.argv[5])
if limit:
    resource.setrlimit(resource.RLIMIT_DATA, (limit, limit))
source = np.load(path) if held else path
factors = bigsvd.decompose(source, **options)
status = open('/proc/self/status').read()
facts = {name: factors.attributes[name] for name in ('planned_bytes', 'memory_bytes', 'peak_resident_bytes', 'plan')}
facts |= {'peak': int(re.search(r'VmHWM:\\s+(\\d+)', status)[1]) * 1024, 'met': factors.certificate.tolerance_met}
facts |= {'matrix_bytes': factors.attributes['matrix_bytes'], 'workers': factors.attributes['workers']}
print(json.dumps(facts))
"""
linux = pytest.mark.skipif(
    not Path("/proc/self/status").exists(), reason="no /proc: the kernel's record cannot be read"
)


def measure(
    path: Path, *, held: bool = False, limit: int = 0, wave_seconds: float = 10.0, **options: Any
) -> dict[str, Any]:
    """Decompose in a process of its own and return what was measured."""
    words = [sys.executable, "-c", MEASURED, str(path), json.dumps(options)]
    words += [str(int(held)), str(limit), str(wave_seconds)]
    done = subprocess.run(words, capture_output=True, text=True, timeout=120, check=False)
    assert done.returncode == 0, done.stderr
    facts: dict[str, Any] = json.loads(done.stdout)
    return facts


def least_ceiling(path: Path, **options: Any) -> int:
    """The least ceiling in MiB that plans, as the refusal names it."""
    with pytest.raises(MemoryCeilingError) as refused:
        bigsvd.forecast(path, memory="64MiB", **options)
    named = re.search(r"--memory to (\d+)MiB", refused.value.remedy)
    assert named
    return int(named[1])


def assert_as_planned(facts: dict[str, Any]) -> None:
    """Measured ≤ planned ≤ ceiling, with the figures in the message."""
    peak, planned, ceiling = (facts[name] / MIB for name in ("peak", "planned_bytes", "memory_bytes"))
    terms = "\n".join(f"{size / MIB:9.1f} MiB  {what}" for size, what in facts["plan"]["memory"])
    assert peak <= planned <= ceiling, f"measured {peak:.0f}, planned {planned:.0f}, ceiling {ceiling:.0f} MiB\n{terms}"


@pytest.fixture(scope="module")
def files(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """One file of each kind."""
    folder = tmp_path_factory.mktemp("memory")
    made = {name: folder / name for name in ("counts.h5", "signal.zarr", "signal.npy", "waves.npy")}
    write_gzip_counts(made["counts.h5"], (20_000, 1500), (500, 500))
    write_zarr(made["signal.zarr"], (10_000, 1200), (500, 300))
    write_npy(made["signal.npy"], (8000, 800), "f8")
    write_npy(made["waves.npy"], (6000, 600), "c8")
    return made


MEMORY_CASES = [
    ("counts.h5", {"route": "krylov", "axis": "rows", "rank": 20, "scale": "unit"}),
    ("counts.h5", {"route": "krylov", "axis": "columns", "samples": "columns", "rank": 5, "max_sweeps": 2}),
    ("signal.zarr", {"route": "krylov", "axis": "rows", "rank": 50}),
    ("signal.zarr", {"route": "tsqr", "axis": "rows", "rank": 10}),
    ("signal.npy", {"route": "gram", "axis": "rows", "rank": 10}),
    ("signal.npy", {"route": "krylov", "axis": "columns", "samples": "rows", "rank": 10, "max_sweeps": 2}),
    ("waves.npy", {"route": "krylov", "axis": "rows", "rank": 60, "scale": "unit"}),
]


@linux
@pytest.mark.parametrize(("name", "options"), MEMORY_CASES)
def test_resident_size_stays_below_the_least_plan(name: str, options: dict[str, Any], files: dict[str, Path]) -> None:
    least = least_ceiling(files[name], **options)
    assert_as_planned(measure(files[name], memory=f"{least}MiB", **options))


@linux
@pytest.mark.parametrize("route", ["gram", "tsqr"])
def test_sums_of_several_waves_fit_beside_the_workers(route: str, files: dict[str, Path]) -> None:
    # A wave of one panel: the caller folds one wave while the workers fold the next.
    options = {"route": route, "axis": "rows", "rank": 5, "panel_lines": 2500}
    least = least_ceiling(files["signal.zarr"], **options)
    assert_as_planned(measure(files["signal.zarr"], memory=f"{least}MiB", wave_seconds=1e-9, **options))


@linux
def test_resident_size_stays_below_the_plan_that_holds_the_matrix(files: dict[str, Path]) -> None:
    facts = measure(files["signal.npy"], memory="384MiB", route="direct", rank=10)
    assert facts["plan"]["resident"]
    assert_as_planned(facts)


@linux
def test_resident_size_stays_below_a_roomy_plan_of_two_workers(files: dict[str, Path]) -> None:
    facts = measure(files["counts.h5"], memory="1GiB", route="krylov", rank=50, workers=2)
    assert facts["workers"] == 2
    assert_as_planned(facts)


@linux
def test_an_array_already_held_does_not_count_and_growth_is_as_planned(files: dict[str, Path]) -> None:
    facts = measure(files["signal.npy"], held=True, memory="256MiB", rank=10, route="krylov")
    assert facts["peak"] > facts["matrix_bytes"]
    assert facts["peak_resident_bytes"] <= facts["planned_bytes"] <= facts["memory_bytes"]


@linux
def test_a_matrix_four_times_the_ceiling_is_decomposed_within_it(tmp_path: Path) -> None:
    # 1.2 GB, three quarters of them holes; the hard limit leaves 256 MiB for stacks and buffers that are reserved but
    # never touched. One copy of a tenth of the matrix too many would end the run.
    path = tmp_path / "large.npy"
    write_npy(path, (120_000, 2500), "f4", every=4)
    least = least_ceiling(path, rank=5, route="krylov", axis="rows")
    facts = measure(path, memory=f"{least}MiB", rank=5, route="krylov", axis="rows", limit=(least + 256) * MIB)
    assert facts["matrix_bytes"] >= 4 * facts["memory_bytes"]
    assert facts["met"]
    assert_as_planned(facts)


@linux
def test_the_command_keeps_to_its_ceiling_and_says_what_it_took(files: dict[str, Path], tmp_path: Path) -> None:
    out = tmp_path / "out.zarr"
    words = [sys.executable, "-m", "bigsvd", "decompose", str(files["counts.h5"]), "--out", str(out)]
    words += ["--rank", "10", "--samples", "rows", "--memory", "256MiB"]
    done = subprocess.run(words, capture_output=True, text=True, timeout=120, check=False)
    assert done.returncode == 0, done.stderr
    attributes = bigsvd.open_factors(out).attributes
    assert attributes["peak_resident_bytes"] <= attributes["planned_bytes"] <= attributes["memory_bytes"] == 256 * MIB


# -------------------------------------------------------------------------------------------------------------- time
def test_a_stop_is_obeyed_within_a_panel_and_leaves_nothing_behind(tmp_path: Path) -> None:
    from bigsvd.sweep import Progress

    left, right = low_rank(20_000, 400)
    source = CountingSource(left @ right, (100, 400))

    def interrupt(event: Progress) -> None:
        if event.stage == "sweep" and event.bytes_done > 0:
            raise KeyboardInterrupt

    started = time.perf_counter()
    with pytest.raises(KeyboardInterrupt):
        bigsvd.decompose(source, tmp_path / "out.zarr", rank=5, route="krylov", memory="512MiB", progress=interrupt)
    assert time.perf_counter() - started < 20
    assert source.bytes < 1.5 * source.matrix.nbytes
    assert list(tmp_path.iterdir()) == []

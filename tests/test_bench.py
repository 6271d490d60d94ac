"""The benchmark's own arithmetic, and every part of it from end to end on small files."""

from __future__ import annotations

import json
import re
import sys
import xml.etree.ElementTree as ET
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

ROOT = Path(__file__).parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

from bench import (  # noqa: E402
    cache,
    capture,
    exact,
    goals,
    group,
    limits,
    measure,
    page,
    peers,
    phases,
    plot,
    process,
    records,
    worker,
)
from bench import run as benchmark  # noqa: E402
from bench.cases import KINDS, SHAPES, Case, choose_cases  # noqa: E402
from bench.view import View  # noqa: E402


def decaying(m: int, n: int) -> np.ndarray:
    rng = np.random.default_rng(3)
    left = np.linalg.qr(rng.standard_normal((m, 30)))[0]
    right = np.linalg.qr(rng.standard_normal((n, 30)))[0]
    return (left * 0.7 ** np.arange(30)) @ right.T + 2.0


@pytest.mark.parametrize("centred", [False, True])
@pytest.mark.parametrize("most_gram", [1_000, 10], ids=["gram", "iterated"])
def test_truth_agrees_with_lapack(most_gram: int, centred: bool) -> None:
    matrix = decaying(500, 80)
    values, right = exact.streamed_factors(matrix, 6, centred=centred, most_gram=most_gram, band_bytes=50_000)
    prepared = matrix - matrix.mean(axis=0) if centred else matrix
    _, lapack, vectors = np.linalg.svd(prepared, full_matrices=False)
    energy, epsilon = float(np.linalg.norm(matrix)) ** 2, np.finfo(float).eps
    np.testing.assert_allclose(values, lapack[:7], atol=100 * epsilon * np.sqrt(energy))
    # Vectors come from AᵀA: its rounding over the gap that parts the wanted space from the rest.
    bound = 10 * epsilon * energy / (lapack[5] ** 2 - lapack[6] ** 2)
    assert measure.errors_of(values, right, lapack[:6], vectors[:6].T).angle < bound


def test_truth_is_kept_beside_the_file_for_as_many_components_as_asked(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        file["matrix"] = decaying(60, 40)
    first = exact.exact_factors(path, 4, centred=False)
    path.unlink()
    again = exact.exact_factors(path, 2, centred=False)
    np.testing.assert_array_equal(again[0], first[0][:3])
    np.testing.assert_array_equal(again[1], first[1][:, :2])


def test_errors_are_the_largest_relative_one_and_the_angle_in_radians() -> None:
    true_right = np.eye(5)[:, :2]
    turned = np.array([[1.0, 0, 0, 0, 0], [0, np.cos(0.1), np.sin(0.1), 0, 0]]).T
    found = measure.errors_of(np.array([10.0, 4.0]), turned, np.array([10.1, 5.0]), true_right)
    assert found.value == pytest.approx(0.2)
    assert found.angle == pytest.approx(0.1)


def test_small_angles_keep_their_figures() -> None:
    turned = np.array([[1.0, 1e-11, 0]]).T
    assert measure.errors_of(np.ones(1), turned, np.ones(1), np.eye(3)[:, :1]).angle == pytest.approx(1e-11)


@pytest.mark.parametrize("values", [np.array([1.0]), np.array([1.0, np.nan])], ids=["too few", "not finite"])
def test_missing_values_count_as_wholly_wrong(values: np.ndarray) -> None:
    assert measure.errors_of(values, np.eye(3)[:, :2], np.ones(2), np.eye(3)[:, :2]).value == float("inf")


@pytest.mark.parametrize("first", range(9))
def test_fewest_iterations_are_found_from_any_guess(first: int) -> None:
    asked: list[int] = []

    def error_at(count: int) -> float:
        asked.append(count)
        return float(10.0**-count)

    assert measure.least_iterations(error_at, 2e-3, first=first, most=8) == 3
    assert {2, 3} <= set(asked)


def test_no_iterations_are_found_where_none_suffice() -> None:
    assert measure.least_iterations(lambda count: 1.0, 0.5, first=1, most=4) is None


def test_a_setting_that_is_too_slow_ends_the_search_with_what_was_found() -> None:
    def slow_below_three(count: int) -> float:
        if count < 3:
            raise measure.TooSlowError
        return 0.1

    assert measure.least_iterations(slow_below_three, 0.5, first=4, most=8) == 3
    assert measure.least_iterations(slow_below_three, 0.5, first=1, most=8) is None


# --------------------------------------------------------------------------------------------------------- candidates
MIB = 2**20


def candidate(name: str, seconds: list[float], error: float, *, own_peak: int = MIB, **more: Any) -> measure.Candidate:
    made = measure.Candidate(name, [name], **more)
    made.seconds, made.processor_seconds = seconds, seconds
    made.peak_bytes, made.own_peak_bytes = [4 * MIB] * len(seconds), [own_peak] * len(seconds)
    made.errors = measure.Errors(error, error)
    return made


def test_best_peer_is_as_near_as_bigsvd_below_the_ceiling_and_by_its_own_pipeline() -> None:
    own = candidate("bigsvd", [1.0], 1e-8)
    mapped = candidate("mapped", [5.0, 6.0, 9.0], 1e-7)
    others = [
        mapped,
        candidate("worse", [1.0], 1e-5),
        candidate("large", [2.0], 1e-7, own_peak=3 * MIB),
        candidate("rust", [3.0], 1e-7, others_pipeline=True),
        candidate("of another matrix", [4.0], 1e-7, centred=True),
        measure.Candidate("never ended", ["x"], failures=["stopped after 1 s"]),
    ]
    # Its pages of a mapped file, 4 MiB with them, are not held against a peer.
    assert measure.best_peer(own, others, 2 * MIB) is mapped
    assert measure.best_peer(own, others[1:], 2 * MIB) is None


def test_blocks_hold_whole_stored_chunks() -> None:
    assert worker.block_shape((50_000, 5_000), 4, None, 16_000_000) == (800, 5_000)
    assert worker.block_shape((50_000, 5_000), 4, (1_000, 2_000), 16_000_000) == (1_000, 5_000)
    assert worker.block_shape((20_000, 60_000), 2, (1_000, 2_000), 16_000_000) == (1_000, 8_000)
    assert worker.block_shape((300, 10), 4, (1_000, 2_000), 16_000_000) == (300, 10)


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_is_read_as_it_was_written(kind: str, tmp_path: Path) -> None:
    case = Case(kind, "exponential", 400, 300)
    path = case.file(tmp_path)
    assert case.file(tmp_path) == path
    values, _ = exact.exact_factors(path, 5, centred=True)
    with np.load(path.with_name(f"{path.name}.truth.npz")) as planted:
        # Integers are rounded: a tenth of a percent of 300 counts.
        np.testing.assert_allclose(values[:5], planted["singular_values"][:5], rtol=1e-3)


@pytest.mark.parametrize("name", worker.CANDIDATES)
def test_candidates_find_the_truth_of_a_small_file(
    name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = Case("hdf5-plain", "exponential", 300, 60).file(tmp_path)
    true_values, true_right = exact.exact_factors(path, 5, centred=True)
    more = {"dask": ["--iterations", "3", "--compute", "--iterator", "QR"], "randomized": ["--normalizer", "QR"]}
    words = [name, str(path), str(tmp_path / "out.npz"), "--rank", "5", "--memory", "512MiB", *more.get(name, [])]
    worker.main([*words, "--centred"])
    assert json.loads(capsys.readouterr().out)["peak_bytes"] > 0
    with np.load(tmp_path / "out.npz") as found:
        errors = measure.errors_of(found["singular_values"], found["right_vectors"], true_values[:5], true_right)
    # Sums of 300 terms in single precision.
    assert errors.value < 300 * 2.0**-24
    assert errors.angle < 1e-4


@pytest.mark.parametrize("kind", ["hdf5-bitshuffle", "zarr-blosc"])
def test_a_matrix_that_cannot_be_mapped_is_decoded_into_a_copy(
    kind: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = Case(kind, "exponential", 300, 60).file(tmp_path)
    true_values, _ = exact.exact_factors(path, 3, centred=False)
    worker.main(["randomized", str(path), str(tmp_path / "out.npz"), "--rank", "3", "--normalizer", "QR"])
    assert json.loads(capsys.readouterr().out)["copied"]
    with np.load(tmp_path / "out.npz") as found:
        np.testing.assert_allclose(found["singular_values"], true_values[:3], rtol=1e-5)


def test_what_a_case_leaves_no_room_for_is_named_with_the_reason() -> None:
    _, left_out = peers.slow_ones(Case("hdf5-plain", "exponential", 100_000, 5_000), 768 * MIB, 2**30)
    assert [name for name, _ in left_out] == ["dask svd", "NumPy svd in memory"]
    found, left_out = peers.slow_ones(Case("hdf5-plain", "exponential", 2_000_000, 300), 768 * MIB, 2**40)
    assert {"dask-svd", "numpy"} <= {each.arguments[0] for each in found}
    assert not left_out


# ---------------------------------------------------------------------------------------------- files and processes
def test_programme_has_every_kind_at_the_first_shape_and_trials_have_the_size_asked_for() -> None:
    default = choose_cases()
    assert [case.kind for case in default[:5]] == list(KINDS)
    assert {(case.rows, case.columns) for case in default} == {SHAPES["first"]}
    assert [case.spectrum for case in default] == ["exponential"] * 5 + ["inverse"]
    full = choose_cases(full=True)
    assert {(case.rows, case.columns) for case in full} == set(SHAPES.values())
    assert len({case.name for case in full}) == len(full)
    for case in choose_cases(full=True, gigabytes=0.01):
        assert case.decoded_bytes == pytest.approx(1e7, rel=1e-3)
    chosen = choose_cases(kinds=["zarr-zstd"], spectra=["inverse", "spikes"], shapes=["wide"])
    assert [(case.spectrum, case.columns) for case in chosen] == [("inverse", 60_000), ("spikes", 60_000)]


@pytest.mark.parametrize("kind", ["hdf5-plain", "zarr-zstd"])
def test_page_cache_is_filled_emptied_and_looked_at(kind: str, tmp_path: Path) -> None:
    path = Case(kind, "exponential", 600, 400).file(tmp_path)
    parts = [path] if path.is_file() else [part for part in path.rglob("*") if part.is_file()]
    assert cache.warm(path) == sum(part.stat().st_size for part in parts)
    assert cache.cached_share(path) == 1.0
    cache.drop(path)
    # Where the folder lies in memory nothing can be dropped.
    assert 0.0 <= cache.cached_share(path) <= 1.0


def test_a_process_that_is_too_slow_is_ended_and_one_that_fails_says_why(tmp_path: Path) -> None:
    path = Case("hdf5-plain", "exponential", 300, 60).file(tmp_path)
    ended = process.run_process(["numpy", str(path), str(tmp_path / "out.npz")], timeout=0.01)
    assert ended.timed_out
    assert ended.told is None
    assert ended.failure == "stopped after 0 s"
    failed = process.run_process(["incremental", str(path), str(tmp_path / "out.npz")], timeout=60)
    assert not failed.timed_out
    assert "IncrementalPCA centres" in failed.failure


@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="sizes of other processes are read from /proc")
def test_peaks_are_seen_from_outside_and_a_limit_of_the_system_holds(tmp_path: Path) -> None:
    path = tmp_path / "large.h5"
    with h5py.File(path, "w") as file:
        file["matrix"] = np.random.default_rng(1).standard_normal((20_000, 400)).astype("f4")
    words = ["numpy", str(path), str(tmp_path / "out.npz"), "--rank", "3"]
    free = process.run_process(words, timeout=60)
    # The matrix in double, its copy, and U: 64 MB each.
    assert free.told is not None
    assert free.own_peak_bytes > 128e6
    assert free.peak_bytes >= free.told["peak_bytes"]
    held = process.run_process([*words, "--limit", f"data:{160 * MIB}"], timeout=60)
    assert held.told is None
    assert "emory" in held.failure


@pytest.mark.skipif(not group.can_group(), reason="control groups of memory cannot be made here")
def test_a_group_holds_what_is_written_to_and_lets_pages_of_files_come_and_go(tmp_path: Path) -> None:
    path = tmp_path / "large.h5"
    with h5py.File(path, "w") as file:
        file["matrix"] = np.random.default_rng(1).standard_normal((60_000, 800)).astype("f4")
    words = [str(path), str(tmp_path / "out.npz"), "--rank", "3"]
    with group.memory_group(160 * MIB) as folder:
        whole = process.run_process(["numpy", *words, "--limit", f"group:{folder}"], timeout=60)
        streamed = process.run_process(
            ["dask", *words, "--iterator", "QR", "--iterations", "1", "--compute", "--limit", f"group:{folder}"],
            timeout=60,
            one_blas_thread=True,
        )
    assert whole.failure == "killed by the system, which held it to its limit of memory"
    # The file itself, 192 MB, passed through the group.
    assert streamed.told is not None, streamed.failure
    assert not folder.exists()


# -------------------------------------------------------------------------------------------------------------- limits
def test_every_phase_names_something_that_is_there(monkeypatch: pytest.MonkeyPatch) -> None:
    wrapped: list[str] = []

    class Clocks(phases.Clocks):
        def timed(self, phase: str, function: Callable[..., Any]) -> Callable[..., Any]:
            assert callable(function)
            wrapped.append(phase)
            return function

    from bigsvd.sweep import Control

    monkeypatch.setattr(Control, "begin", Control.begin)
    phases.install(Clocks())
    assert len(wrapped) == len(phases.PHASES)
    assert set(phases.FLOOR) <= set(phases.IN_SWEEP) <= set(wrapped)


def test_nested_phases_are_not_counted_twice() -> None:
    clocks = phases.Clocks()

    def work(size: int) -> float:
        return float(np.linalg.norm(np.sin(np.arange(size, dtype="f8"))))

    inner = clocks.timed("inner", lambda: work(2_000_000))
    clocks.timed("outer", inner)()
    assert clocks.seconds["open", "inner"] > 10 * clocks.seconds["open", "outer"]


def test_calls_are_caught_by_their_looks_and_copied() -> None:
    captures = capture.Captures()
    captures.stage = "sweep 1"
    seen: list[np.ndarray] = []
    multiply = captures.timed("product AB", seen.append)
    buffer = np.ones((4, 3))
    for _ in range(3):
        multiply(buffer)
    multiply(np.ones((2, 3)))
    buffer[:] = 7
    assert captures.sizes["sweep 1", "product AB"] == 3 * 12 + 6
    (calls,) = captures.caught("sweep 1", "product AB", 1)
    assert len(calls) == 3
    calls[0].call()
    np.testing.assert_array_equal(seen[-1], np.ones((4, 3)))
    # Another thread makes the same calls where only one came to them.
    assert captures.caught("sweep 1", "product AB", 2) == [calls, calls]
    assert captures.caught("sweep 1", "QR fold", 2) == []


def test_rate_counts_the_work_of_all_threads() -> None:
    import time

    one = capture.rate([([lambda: time.sleep(0.01)], 5)])
    two = capture.rate([([lambda: time.sleep(0.01)], 5)] * 2)
    # Sleeping takes at least its time, and on a busy machine longer.
    assert one <= 5 / 0.01
    assert one < two <= 10 / 0.01


def test_floor_is_the_slower_of_disk_and_parts_and_closeness_is_above_it() -> None:
    parts = [
        {"sweep 1": {phases.READ: 1.0, "energy": 2.0}, "sweep 2": {phases.READ: 1.0}},
        {"sweep 1": {phases.READ: 3.0, "energy": 2.0}, "sweep 2": {phases.READ: 1.0}},
    ]
    sweeps = [{"sweep 1": 5.0, "sweep 2": 4.0}, {"sweep 1": 7.0, "sweep 2": 4.0}]
    found = limits.summary(limits.Rounds(sweeps, parts, [2.5, 2.5]))
    # The fastest round of each part, the middle of the sweeps.
    assert [each["floor"] for each in found["sweeps"]] == [3.0, 2.5]
    assert found["seconds"] == 10.0
    assert found["closeness"] == pytest.approx(10.0 / 5.5)


def test_limits_of_a_small_file_name_every_part_of_its_sweeps(tmp_path: Path) -> None:
    # 1,000 lines of integers: read, converted, summed, multiplied twice and folded.
    path = Case("hdf5-gzip", "inverse", 12_000, 400).file(tmp_path)
    words = [str(path), "--rank", "5", "--memory", "512MiB", "--runs", "1", "--route", "krylov", "--workers", "1", "2"]
    ended = process.run_process(words, timeout=120, script="limits")
    assert ended.told is not None, ended.failure
    assert set(ended.told["workers"]) == {"1", "2"}
    for found in ended.told["workers"].values():
        first = found["sweeps"][0]["parts"]
        assert set(first) == set(phases.FLOOR) - {"sum of AᴴA"}
        assert all(seconds > 0 for seconds in first.values())
        assert found["floor"] == pytest.approx(sum(each["floor"] for each in found["sweeps"]))
        assert found["closeness"] > 0
    spent = ended.told["in_run_processor_seconds"]
    assert set(phases.FLOOR) - {"sum of AᴴA"} <= set(spent)
    assert ended.told["bare_product_seconds"]["1"] > 0


# ---------------------------------------------------------------------------------------------------- records and page
MACHINE = {
    **{"processors": 2, "processor": "a processor", "clock_ghz": 2.0, "memory_bytes": 2**34, "system": "Linux"},
    **{"python": "3.11", "versions": {"numpy": "2.4"}},
}
SETTINGS = {"rank": 20, "memory_bytes": 512 * MIB, "centred": False, "limit": "none", "cold": False}
FACTS = Case("hdf5-plain", "exponential", 100_000, 5_000).facts()


def record(part: str, entries: list[dict[str, Any]], **more: Any) -> dict[str, Any]:
    made = {"part": part, "date": "2026-01-01", "commit": "abc", "machine": MACHINE, "load": 0.1, "settings": SETTINGS}
    return made | {"entries": entries, "runs": 3, "timeout": 60.0} | more


def own_run(seconds: float, *, reads: float = 1.1, peak: int = 256 * MIB, predicted: float = 2.0) -> dict[str, Any]:
    told = {
        **{"sweeps": 1, "bytes_read": reads * 100, "matrix_bytes": 100, "precision": "single", "width": 94},
        **{"route": "krylov", "pilot_share": 0.05, "planned_bytes": 300 * MIB, "tolerance_met": True, "verdict": "20"},
        **{"seconds": 0.8 * seconds, "predicted_seconds": predicted, "timings": {"sweep": 0.5 * seconds, "write": 0.1}},
        **{"predicted_sweeps": 2, "phases": {"read": {"predicted": predicted, "measured": 0.4 * seconds}}},
    }
    made = candidate("bigsvd", [seconds] * 3, 1e-8)
    made.peak_bytes, made.told = [peak] * 3, [told] * 3
    return made.as_json()


def compared(own: dict[str, Any], best: str | None = "dask, QR") -> dict[str, Any]:
    dask = candidate("dask, QR", [5.0] * 3, 1e-7).as_json()
    first = candidate("dask, defaults", [4.0], 1e-2, first_written=True).as_json()
    slow = measure.Candidate("svds", ["svds"], failures=["stopped after 60 s"]).as_json()
    more = {"stored_bytes": 10, "cached_share": 1.0, "target_error": 1e-6, "left_out": [["NumPy", "too large"]]}
    return FACTS | more | {"candidates": [own, dask, first, slow], "best": best}


def limited(closeness: float) -> dict[str, Any]:
    parts = {phases.READ: 0.2, "product AB": 0.3}
    sweep = {"sweep": "sweep 1", "seconds": 0.5 * closeness, "parts": parts, "floor": 0.5}
    found = {"sweeps": [sweep], "raw_read_seconds": 0.1, "seconds": 0.5 * closeness, "floor": 0.5}
    return FACTS | {
        **{"panels": 100, "panel_bytes": MIB, "precision": "single", "width": 94, "sweeps": 1, "cold": False},
        **{"in_run_workers": 2, "in_run_sweep_seconds": 0.5 * closeness, "cold_read_seconds": 1.0},
        "in_run_processor_seconds": {phases.READ: 0.4, "product AB": 0.9, "scratch write": 0.2},
        "bare_product_seconds": {"1": 0.5, "2": 0.25},
        "workers": {"1": found | {"closeness": closeness}, "2": found | {"closeness": closeness}},
    }


def grown(seconds: list[float]) -> list[dict[str, Any]]:
    sizes = [2**30, 16 * 2**30]
    return [
        {
            "shape": [1, 1],
            "decoded_bytes": size,
            "over_ceiling": size / 2**29,
            "cached_share": 1.0,
            "peer": candidate("dask, QR", [3.0 * each], 1e-7).as_json() if size > 2**30 else None,
            "run": own_run(each),
        }
        for size, each in zip(sizes, seconds, strict=True)
    ]


def written(folder: Path, *made: dict[str, Any]) -> records.Merged:
    folder.mkdir()
    for number, each in enumerate(made):
        (folder / f"{number:03d}.json").write_text(json.dumps(each))
    merged = records.merge(folder)
    assert merged is not None
    return merged


def test_newest_of_each_case_is_taken_from_records_of_the_same_settings(tmp_path: Path) -> None:
    old, new = compared(own_run(9.0)), compared(own_run(1.0))
    other = compared(own_run(5.0)) | {"name": "another case"}
    merged = written(
        tmp_path / "results",
        record("compare", [compared(own_run(7.0)) | {"name": "other settings"}], settings=SETTINGS | {"rank": 5}),
        record("compare", [old, other], commit="old", machine=MACHINE | {"versions": {"numpy": "2.3"}}, load=3.0),
        record("compare", [new]),
        {"cases": "of an older program"},
    )
    assert set(merged.compare) == {FACTS["name"], "another case"}
    assert merged.compare[FACTS["name"]]["candidates"][0]["median_seconds"] == 1.0
    (note,) = merged.notes
    assert "commit old" in note
    assert "numpy 2.3" in note
    assert "others were at work" in note


def test_folder_without_records_merges_to_nothing(tmp_path: Path) -> None:
    assert records.merge(tmp_path) is None


def test_nothing_is_missed_where_all_goals_are_reached(tmp_path: Path) -> None:
    own = own_run(1.0, predicted=0.85)
    workers = FACTS | {"workers": [1, 2], "runs": [own_run(4.0), own_run(2.0)]}
    merged = written(
        tmp_path / "results",
        record("compare", [compared(own)]),
        record("limits", [limited(1.1)]),
        record("workers", [workers]),
        record("growth", grown([2.0, 33.0])),
    )
    assert goals.missed(merged) == []


def test_every_miss_is_told_with_its_figures(tmp_path: Path) -> None:
    own = own_run(2.0, reads=2.5, peak=600 * MIB, predicted=5.0)
    workers = FACTS | {"workers": [1, 2], "runs": [own_run(3.0), own_run(2.0)]}
    merged = written(
        tmp_path / "results",
        record("compare", [compared(own)]),
        record("limits", [limited(2.0)]),
        record("workers", [workers]),
        record("growth", grown([1.0, 32.0])),
    )
    text = "\n".join(goals.missed(merged))
    assert "2.50 × where 3 × is wanted, against dask, QR, 5.0 s (1e-07). Of bigsvd's 2.0 s, 1.0 s sweep" in text
    # At its floor the run takes 2.0 − 1.0 + 0.5 s.
    assert "With its sweeps at their floor of 0.50 s it would be 3.33 ×." in text
    assert "2.50 reads where 2.1 are wanted: 1 sweeps, a pilot of 0.05, 1.45 for probe" in text
    assert "peak 600 MiB above the ceiling of 512 MiB" in text
    assert "5.0 s were predicted and 1.6 s taken, +212%; 2 sweeps were predicted and 1 made" in text
    assert "most in read 5.00 for 0.80 s" in text
    assert "sweeps at 2.00 × their floor where 1.15 is wanted: 1.00 s where the parts alone take 0.50 s" in text
    # Of two processors for one second: 0.9 − 2·0.3 in products, 0.2 in scratch, 2.0 − 1.5 idle.
    assert "0.50 processors idle or waiting, 0.30 product AB beyond its time alone, 0.20 scratch write" in text
    assert "swept 1.50 × as fast" in text
    assert "Growth: 2.00 s per GiB at 16 GiB and 1.00 at 1 GiB, 2.00 × where 1.1 is wanted" in text


def test_where_no_peer_comes_as_near_the_nearest_bounds_the_ratio(tmp_path: Path) -> None:
    entry = compared(own_run(1.0), best=None)
    assert View(entry, None).least_ratio == 5.0
    lines = "\n".join(page.page_lines(written(tmp_path / "results", record("compare", [entry]))))
    assert "none as near | > 5.00 | ≥ 3, reached" in lines
    slower = compared(own_run(2.0), best=None)
    lines = "\n".join(page.page_lines(written(tmp_path / "others", record("compare", [slower]))))
    assert "> 2.50 | ≥ 3, open" in lines


def test_page_begins_with_one_table_and_shows_no_time_without_its_error(tmp_path: Path) -> None:
    merged = written(
        tmp_path / "results",
        record("compare", [compared(own_run(2.0))]),
        record("limits", [limited(1.5)]),
        record("growth", grown([1.0, 32.0])),
    )
    page.write_page(tmp_path / "performance.md", merged)
    text = (tmp_path / "performance.md").read_text()
    summary = next(line for line in text.splitlines() if line.startswith("| HDF5 plain"))
    assert "2.0 s (1e-08)" in summary
    assert "dask, QR: 5.0 s (1e-07) |  2.50 | ≥ 3, missed | 1.50 (≤ 1.15) | 1.10 (≤ 2.1)" in summary
    rows = [line.split("|") for line in text.splitlines() if line.startswith("| dask")]
    assert [row[5].strip() for row in rows] == ["1.0e-07", "1.0e-02"]
    assert "- svds: stopped after 60 s" in text
    assert "- NumPy: not run, too large" in text
    assert "Not measured: workers." in text
    for name in ("times", "limits", "growth"):
        assert f"](performance-{name}.svg)" in text
        drawing = ET.parse(tmp_path / f"performance-{name}.svg").getroot()
        words = {child.tag.rpartition("}")[2]: child.text for child in drawing[:2]}
        assert words["title"]
        assert words["desc"]
    # No peer ended at the smaller size.
    assert re.search(r"\| +did not end \|", text)
    assert re.search(r"\| +96.0 s, 3.00 × \|", text)
    assert "error 1e-08" in (tmp_path / "performance-growth.svg").read_text()


def test_pictures_escape_words_and_carry_ink_for_dark_paper() -> None:
    picture = plot.Picture(100, "a < b", "described & told")
    picture.text(0, 10, "<words>")
    picture.bar(0, 20, -5, 10, 0, "a & b")
    text = picture.svg()
    drawing = ET.fromstring(text)
    assert "prefers-color-scheme: dark" in text
    assert drawing.get("aria-labelledby") == "title description"
    shape = next(child for child in drawing if child.get("x") and child.get("fill"))
    assert float(shape.get("width", "nan")) == 0.0


@pytest.mark.parametrize(
    ("low", "high", "ends"), [(0.7, 9.0, (0.5, 10.0)), (1.0, 1.0, (1.0, 2.0)), (30, 210, (20, 500))]
)
def test_logarithmic_axes_hold_both_ends(low: float, high: float, ends: tuple[float, float]) -> None:
    found = plot.decades(low, high)
    assert (found[0], found[-1]) == pytest.approx(ends)


def test_all_parts_run_from_end_to_end_and_a_failure_is_told_at_the_end(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    words = ["--gigabytes", "0.003", "--kinds", "zarr-zstd", "--runs", "1", "--rank", "5", "--memory", "512MiB"]
    words += ["--data", str(tmp_path / "data"), "--results", str(tmp_path / "results")]
    benchmark.main([*words, "--all"])
    text = (tmp_path / "results/performance.md").read_text()
    assert "Rust pipeline" in text
    assert "closeness" in text
    assert "× as fast, sweeps" in text
    assert not list((tmp_path / "data").glob("growth-*"))
    assert not (tmp_path / "data/work").exists()

    def broken(*_: Any) -> list[dict[str, Any]]:
        raise OSError("the disk is full")

    monkeypatch.setattr(benchmark, "_limits", broken)
    with pytest.raises(SystemExit, match="Not everything was measured:\nlimits: the disk is full"):
        benchmark.main([*words, "--limits"])
    capsys.readouterr()

"""The benchmark's own arithmetic: its truth against LAPACK, its errors, its choice of the peer's setting, its page."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

ROOT = Path(__file__).parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

from bench import exact, measure, page, phases, worker  # noqa: E402
from bench.cases import FULL_SHAPES, Case, make_cases, warm  # noqa: E402


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


def candidate(name: str, seconds: list[float], error: float, **more: Any) -> measure.Candidate:
    made = measure.Candidate(name, [name], **more)
    made.seconds, made.processor_seconds, made.peak_bytes = seconds, seconds, [2**20]
    made.errors = measure.Errors(error, error)
    return made


def test_rows_show_the_ratio_of_medians_beside_the_error_and_a_peak_above_the_ceiling() -> None:
    rows = measure.candidate_rows([candidate("own", [1.0, 2.0, 9.0], 1e-8), candidate("peer", [5.0], 1e-3)], 2**19)
    assert rows[0][1:4] == ["2.0 (1.0–9.0, 3)", "2.0", "1"]
    assert rows[1][3] == "2.50"
    assert rows[1][5] == "1.0e-03"
    assert rows[1][7].endswith("over")


def test_bands_hold_whole_stored_chunks() -> None:
    assert worker.band_rows((50_000, 5_000), 4, 100_000_000) == 5_000
    assert worker.band_rows((50_000, 60_000), 4, 16_000_000) == 1_000
    assert worker.band_rows((300, 10), 4, 16_000_000) == 300


def test_cases_have_the_decoded_size_asked_for() -> None:
    cases = make_cases(["hdf5-plain", "hdf5-gzip"], ["inverse"], 1.0, full=False)
    assert [case.decoded_bytes for case in cases] == [10**9, 10**9]
    default = [(case.kind, case.spectrum) for case in make_cases(["hdf5-plain", "zarr-zstd"], None, 1.0, full=False)]
    assert default == [("hdf5-plain", "exponential"), ("hdf5-plain", "inverse"), ("zarr-zstd", "exponential")]
    assert [case.rows for case in make_cases(["zarr-zstd"], ["inverse"], 1.0, full=True)] == [m for m, _ in FULL_SHAPES]


@pytest.mark.parametrize("kind", ["hdf5-plain", "zarr-zstd"])
def test_files_are_made_once_and_warmed_whole(kind: str, tmp_path: Path) -> None:
    case = Case(kind, "exponential", 60, 40)
    path = case.file(tmp_path)
    assert case.file(tmp_path) == path
    assert np.asarray(exact.open_stored(path)).shape == (60, 40)
    parts = [path] if path.is_file() else [part for part in path.rglob("*") if part.is_file()]
    assert warm(path) == sum(part.stat().st_size for part in parts)


@pytest.mark.parametrize("name", ["bigsvd", "dask", "svds", "incremental"])
def test_candidates_find_the_truth_of_a_small_file(
    name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = Case("hdf5-plain", "exponential", 300, 60).file(tmp_path)
    true_values, true_right = exact.exact_factors(path, 5, centred=True)
    more = ["--iterations", "3", "--compute", "--double"] if name == "dask" else ["--memory", "512MiB"]
    worker.main([name, str(path), str(tmp_path / "out.npz"), "--rank", "5", "--centred", *more])
    assert '"peak_bytes"' in capsys.readouterr().out
    with np.load(tmp_path / "out.npz") as found:
        errors = measure.errors_of(found["singular_values"], found["right_vectors"], true_values[:5], true_right)
    # IncrementalPCA is given single precision, 300 rows of it.
    assert errors.value < (300 * 2.0**-24 if name == "incremental" else 1e-7)
    assert errors.angle < 1e-5


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


def test_nested_phases_are_not_counted_twice() -> None:
    clocks = phases.Clocks()

    def work(size: int) -> float:
        return float(np.linalg.norm(np.sin(np.arange(size, dtype="f8"))))

    inner = clocks.timed("inner", lambda: work(2_000_000))
    clocks.timed("outer", inner)()
    assert clocks.seconds["open", "inner"] > 10 * clocks.seconds["open", "outer"]


def test_page_says_what_was_missed() -> None:
    own = candidate("bigsvd", [2.0], 1e-8).as_json() | {
        "told": {
            **{"route": "krylov", "sweeps": 2, "bytes_read": 21, "matrix_bytes": 10, "precision": "single"},
            **{"verdict": "20 of 20 resolved", "timings": {"sweep": 1.5}, "tolerance_met": True},
        }
    }
    case = {
        **{"name": "hdf5-plain-inverse-1x1", "title": "plain", "decoded_bytes": 10, "stored_bytes": 10},
        **{"table": ["| a |"], "candidates": [own], "failed": [{"name": "other", "message": ["it broke"]}]},
        "best": {"name": "peer", "ratio": 1.5, "processor_ratio": 1.2, "fastest_ratio": 1.4},
    }
    record = {
        **{"date": "2026-01-01", "machine": page.machine_facts(), "rank": 20, "memory_bytes": 2**30},
        **{"centred": False, "runs": 3, "cases": [case], "seconds": 60.0},
    }
    text = "\n".join(page.page_lines(record))
    assert "2.10 reads" in text
    assert "other failed: it broke" in text
    assert "- plain: 1.50 × where 3 × is wanted." in text

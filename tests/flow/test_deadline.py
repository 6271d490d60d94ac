"""A deadline leaves what the last whole sweep certified, and a run that goes on from there ends with the same bits."""

from __future__ import annotations

import importlib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from promise_samples import stored_bits

import bigsvd
from bigsvd.drive import Deadline
from bigsvd.errors import DeadlineError, OptionError
from bigsvd.sweep import Progress, events

NOON = 1_000_000.0


class Clock:
    """A wall clock that jumps past every deadline once a sweep has come half way."""

    def __init__(self, sweep: int) -> None:
        self.sweep, self.late = sweep, False

    def time(self) -> float:
        return NOON + (1e9 if self.late else 0.0)

    def listen(self, event: Progress) -> None:
        """Progress listener."""
        if event.sweep == self.sweep and event.bytes_done * 2 >= event.bytes_total:
            self.late = True


def hilly(tmp_path: Path, *, code: str = "f8", offset: float = 0.0) -> Path:
    """Invented heights, decay 1/√i and noise: several sweeps; as a file, so that a journal is kept."""
    random = np.random.default_rng(3)
    left = random.standard_normal((3000, 30)) * np.arange(1, 31) ** -0.5
    matrix = left @ random.standard_normal((30, 200)) * 900 + 40 * random.standard_normal((3000, 200)) + offset
    path = tmp_path / "hills.npy"
    np.save(path, matrix.astype(code))
    return path


def decompose(path: Path, out: Path, **options: Any) -> Any:
    return bigsvd.decompose(
        path, out, rank=8, route="krylov", axis="rows", panel_lines=100, memory="1GiB", save_every=0.0, **options
    )


def stop_in(sweep: int, path: Path, out: Path, monkeypatch: pytest.MonkeyPatch, **options: Any) -> Any:
    """A run whose time is over in the middle of a sweep."""
    clock = Clock(sweep)
    with monkeypatch.context() as patch:
        patch.setattr(events.time, "time", clock.time)
        # Whether another sweep fits is asked of the real clock otherwise, long past this one's noon.
        patch.setattr(Deadline, "allows", lambda self, seconds: True)
        try:
            return decompose(path, out, finish_by=3600.0, progress=clock.listen, **options)
        finally:
            assert clock.late, "the sweep was never begun"


def test_time_is_set_aside_for_the_end_of_a_run() -> None:
    deadline = Deadline(until=NOON + 100, closing=20.0, clock=lambda: NOON)
    assert deadline.reserve == 31.0
    assert deadline.read_until == NOON + 69
    assert deadline.allows(60.0)
    assert not deadline.allows(65.0)


def test_a_deadline_in_a_sweep_leaves_what_the_sweep_before_certified(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = hilly(tmp_path)
    once = decompose(path, tmp_path / "once.zarr", tolerance=1e-9, max_sweeps=1)
    stopped = stop_in(2, path, tmp_path / "stopped.zarr", monkeypatch, tolerance=1e-9)
    certificate = stopped.certificate
    assert certificate.verdict.startswith("stopped at the deadline after sweep 1; ")
    assert not certificate.tolerance_met
    assert stopped.attributes["sweeps"] == 1
    for name in ("value", "lower", "upper"):
        assert np.array_equal(getattr(certificate, name), getattr(once.certificate, name))
    assert np.array_equal(stopped.left_vectors[:], once.left_vectors[:])


def test_a_stopped_run_goes_on_with_the_same_bits(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = hilly(tmp_path)
    whole = decompose(path, tmp_path / "whole.zarr", tolerance=1e-9)
    assert whole.attributes["sweeps"] >= 2
    out = tmp_path / "stopped.zarr"
    stop_in(2, path, out, monkeypatch, tolerance=1e-9)
    assert (tmp_path / "stopped.zarr.run").is_dir()
    gone_on = decompose(path, out, tolerance=1e-9, overwrite=True)
    assert gone_on.attributes["resumed"] == 1
    assert stored_bits(gone_on) == stored_bits(whole)
    assert not (tmp_path / "stopped.zarr.run").exists()


@pytest.mark.parametrize("limit", [None, 1], ids=["roomy", "restarts"])
def test_the_answer_in_single_outlives_a_sweep_in_double_that_was_cut(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, limit: int | None
) -> None:
    # Made to begin in single, the run goes over to double for its second sweep, which begins a basis of its own.
    run = importlib.import_module("bigsvd.drive.run")
    monkeypatch.setattr(run, "single_is_enough", lambda *pilot, strict: True)
    path = hilly(tmp_path, code="f4", offset=4000.0)
    stopped = stop_in(2, path, tmp_path / "stopped.zarr", monkeypatch, tolerance=1e-9, width_limit=limit)
    assert stopped.attributes["sweeps"] == 1
    assert stopped.attributes["precision"] == "single"
    assert any("double precision from sweep 2" in remark for remark in stopped.attributes["remarks"])
    matrix = np.load(path).astype(float)
    centred = matrix - matrix.mean(axis=0)
    left, right = stopped.left_vectors[:], stopped.right_vectors[:]
    np.testing.assert_allclose(left.T @ left, np.eye(8), atol=1e-10)
    projected = np.linalg.norm(centred @ right - left * stopped.singular_values, axis=0)
    assert projected.max() <= 1e-5 * stopped.singular_values[0]


def test_nothing_is_promised_before_the_first_sweep(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path, out = hilly(tmp_path), tmp_path / "never.zarr"
    with pytest.raises(DeadlineError, match="before the first sweep was") as caught:
        stop_in(1, path, out, monkeypatch, tolerance=1e-9)
    assert "set aside for checks and writing" in str(caught.value)
    assert not out.exists()
    # What was read is not lost.
    assert decompose(path, out, tolerance=1e-9).attributes["resumed"] == 1


@pytest.mark.parametrize("words", ["soon", "25:10", "0h", "", "-5", "2020-01-01T00:00"])
def test_what_is_no_time_to_come_is_refused(words: str, tmp_path: Path) -> None:
    with pytest.raises(OptionError, match="--finish-by needs a time to come or a duration"):
        bigsvd.decompose(np.eye(4), rank=1, finish_by=words)

"""A run that was cut anywhere goes on with the same bits, does not read again what it kept, and says what it read."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import table
from journal_samples import KRYLOV, OPTIONS, Kept, assert_same_bits, begin, cut_at, cut_in, left_in, slow_decay

import bigsvd
from bigsvd.journal import read_standing
from bigsvd.sweep import StoppedError

pytestmark = pytest.mark.usefixtures("short_waves")


def decompose(matrix: np.ndarray, out: Path, **options: Any) -> tuple[Any, Kept]:
    """A whole run, and what it read."""
    source = Kept(matrix)
    factors = bigsvd.decompose(source, out, progress=source.listen, **(OPTIONS | options))
    return factors, source


def lines_kept(matrix: np.ndarray, run: Path, **options: Any) -> int:
    """Lines, over all sweeps, that a run folder holds the sums of."""
    from bigsvd.journal.journal import saved_in

    asked = {name: value for name, value in (OPTIONS | options).items() if name != "save_every"}
    plan = bigsvd.forecast(Kept(matrix), **asked).plan
    last = {each.sweep: each.waves for each in saved_in(run)}
    edges = plan.geometry.edges
    return sum(edges[plan.waves[waves - 1][-1][1]] for waves in last.values())


def go_on_and_compare(
    matrix: np.ndarray, folder: Path, listener: Any, *, dropped: bool = False, **options: Any
) -> tuple[Any, Any]:
    """Cut a run, go on, compare with one that was not cut; returns the result and where the run stood.

    Where the run `dropped` what a sweep had multiplied, that sweep is read again.
    """
    _, once = decompose(matrix, folder / "whole.zarr", **options)
    begin(Kept(matrix), folder / "out.zarr", listener, **options)
    run = folder / "out.zarr.run"
    standing = read_standing(run)
    known = lines_kept(matrix, run, **options)
    gone_on, second = decompose(matrix, folder / "out.zarr", **options)
    assert_same_bits(folder / "out.zarr", folder / "whole.zarr")
    assert gone_on.attributes["resumed"] == 1
    assert gone_on.attributes["earlier_seconds"] == standing.seconds > 0
    assert left_in(folder) == ["out.zarr", "whole.zarr"]
    # Both processes are counted, the first up to its last saving; what was kept is not read again.
    assert gone_on.attributes["bytes_read"] == standing.bytes_read + second.bytes
    line = matrix.nbytes // max(matrix.shape) if matrix.shape[0] >= matrix.shape[1] else matrix[:, 0].nbytes
    held = 0 if "pilot" in second.by_stage else once.by_stage.get("pilot", 0)
    if dropped:
        assert second.bytes <= once.bytes - held
    else:
        assert second.bytes == once.bytes - held - known * line
    return gone_on, standing


ROUTES = [
    ("krylov", "rows", "f8", "none", 2),
    ("krylov", "rows", "f4", "unit", 3),
    ("krylov", "columns", "f8", "unit", 2),
    ("krylov", "columns", "f4", "none", 1),
    ("krylov", "rows", "c16", "unit", 2),
    ("gram", "rows", "f8", "unit", 1),
    ("gram", "columns", "f4", "none", 2),
    ("gram", "rows", "c8", "none", 2),
    ("tsqr", "rows", "f8", "none", 1),
    ("tsqr", "columns", "f8", "unit", 2),
    ("tsqr", "rows", "c16", "unit", 1),
]


@pytest.mark.parametrize(("route", "axis", "dtype", "scale", "sweep"), ROUTES)
def test_every_route_goes_on_with_the_same_bits(
    route: str, axis: str, dtype: str, scale: str, sweep: int, tmp_path: Path
) -> None:
    center = "features" if scale == "unit" or dtype[0] == "f" else "none"
    matrix = slow_decay(dtype)
    stored = matrix if axis == "rows" else np.ascontiguousarray(matrix.T)
    options = {"route": route, "axis": axis, "samples": axis, "scale": scale, "center": center, "rank": 6}
    gone_on, standing = go_on_and_compare(stored, tmp_path, cut_at(sweep, 0.6), tolerance=1e-7, **options)
    assert standing.sweep == sweep
    assert 0 < standing.waves < standing.of
    assert gone_on.attributes["sweeps"] >= 2


@pytest.mark.parametrize("axis", ["rows", "columns"])
def test_features_that_are_lines_go_on_with_the_same_bits(axis: str, tmp_path: Path) -> None:
    """Samples lie across the sweep: every line brings its own mean and scale, which sums must hold."""
    other = "columns" if axis == "rows" else "rows"
    stored = slow_decay() if axis == "rows" else np.ascontiguousarray(slow_decay().T)
    options = {"route": "krylov", "axis": axis, "samples": other, "scale": "unit", "rank": 6, "tolerance": 1e-7}
    go_on_and_compare(stored, tmp_path, cut_at(1, 0.6), **options)


def test_small_values_that_make_a_fold_follow_go_on(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("bigsvd.plan.candidates._NO_MATTER_SECONDS", 0.0)
    matrix = table.planted(np.logspace(0, -9, 30), (4000, 60), 91)
    options = {"rank": 25, "axis": "rows", "panel_lines": 50, "center": "none"}
    for sweep in (1, 2, 3):
        (tmp_path / str(sweep)).mkdir()
        gone_on, _ = go_on_and_compare(matrix, tmp_path / str(sweep), cut_at(sweep, 0.6), **options)
        assert gone_on.attributes["sweeps"] == 3


@pytest.mark.parametrize("sweep", [1, 2])
def test_a_sweep_made_again_in_double_after_an_overflow_goes_on(sweep: int, tmp_path: Path) -> None:
    matrix = np.random.default_rng(5).standard_normal((1600, 60)).astype(np.float32)
    options = {"route": "krylov", "axis": "rows", "rank": 4, "center": "none"}
    pilot = bigsvd.forecast(Kept(matrix), panel_lines=40, memory="1GiB", **options).plan.pilot_panels
    free = next(panel for panel in range(40) if panel not in pilot)
    matrix[40 * free + 7, 11] = 3e24
    gone_on, standing = go_on_and_compare(matrix, tmp_path, cut_at(sweep, 0.6), dropped=sweep > 1, **options)
    assert "double precision: squares of some entries overflow single" in gone_on.attributes["remarks"]
    assert standing.sweep == sweep


@pytest.mark.parametrize("sweep", [1, 2])
@pytest.mark.parametrize("dtype", ["f4", "f8"])
def test_a_sweep_made_again_with_scales_it_learnt_goes_on(sweep: int, dtype: str, tmp_path: Path) -> None:
    matrix = np.random.default_rng(5).standard_normal((1600, 60)).astype(dtype)
    options = {"route": "krylov", "axis": "rows", "rank": 4, "scale": "unit"}
    pilot = bigsvd.forecast(Kept(matrix), panel_lines=40, memory="1GiB", **options).plan.pilot_panels
    free = next(panel for panel in range(40) if panel not in pilot)
    matrix[40 * free + 7, 11] = 1e9
    gone_on, _ = go_on_and_compare(matrix, tmp_path, cut_at(sweep, 0.6), dropped=sweep > 1, **options)
    assert any(remark.startswith("one more sweep") for remark in gone_on.attributes["remarks"])


@pytest.mark.parametrize("sweep", [1, 2])
def test_a_run_that_went_over_to_double_goes_on(sweep: int, tmp_path: Path) -> None:
    random = np.random.default_rng(3)
    options = {"route": "krylov", "axis": "rows", "rank": 8, "panel_lines": 50}
    plan = bigsvd.forecast(Kept(np.zeros((3200, 80), "f4")), memory="1GiB", **options).plan
    loud = random.standard_normal((3200, 1)) * 1e4
    for panel in plan.pilot_panels:
        loud[50 * panel : 50 * panel + 50] /= 1e4
    right = table.orthonormal(4, 80, 13).T
    matrix = (random.standard_normal((3200, 12)) * np.linspace(8, 3, 12)) @ right[1:] + loud @ right[:1]
    gone_on, _ = go_on_and_compare(matrix.astype(np.float32), tmp_path, cut_at(sweep, 0.6), **options)
    assert any("on: rounding in single exceeds" in remark for remark in gone_on.attributes["remarks"])
    assert gone_on.attributes["sweeps"] >= 2


def test_a_run_through_restarts_of_the_basis_goes_on(tmp_path: Path) -> None:
    matrix = np.array(table.entry("root_harmonic").matrix)
    options = {"route": "krylov", "axis": "rows", "rank": 5, "max_sweeps": 20, "tolerance": 1e-6, "width_limit": 1}
    gone_on, standing = go_on_and_compare(matrix, tmp_path, cut_at(4, 0.5), **options)
    assert gone_on.attributes["plan"]["restarts"] >= 1
    # Of the two waves of the fourth sweep the first may not have been folded yet.
    assert standing.sweep in (3, 4)


def test_variance_that_doubles_its_guess_goes_on(tmp_path: Path) -> None:
    matrix = table.planted(np.arange(1, 301) ** -0.5, (1500, 300), 95)
    options = {"variance": 0.8, "max_rank": 200, "panel_lines": 80, "max_sweeps": 12, "route": "krylov", "axis": "rows"}
    go_on_and_compare(matrix, tmp_path, cut_at(2, 0.6), **options)


# ------------------------------------------------------------------------------------------------------ where it is cut
@pytest.mark.parametrize("stage", ["slices", "write"])
def test_cut_after_the_last_sweep_nothing_of_a_sweep_is_read_again(stage: str, tmp_path: Path) -> None:
    matrix = slow_decay()
    whole, _ = decompose(matrix, tmp_path / "whole.zarr", **KRYLOV)
    begin(Kept(matrix), tmp_path / "out.zarr", cut_in(stage), **KRYLOV)
    assert left_in(tmp_path) == ["out.zarr.run", "whole.zarr"]
    gone_on, second = decompose(matrix, tmp_path / "out.zarr", **KRYLOV)
    assert "sweep" not in second.by_stage
    assert_same_bits(tmp_path / "out.zarr", tmp_path / "whole.zarr")
    assert gone_on.attributes["sweeps"] == whole.attributes["sweeps"]


def test_a_run_cut_again_and_again_goes_on(tmp_path: Path) -> None:
    matrix, out = slow_decay(), tmp_path / "out.zarr"
    options = KRYLOV | {"scale": "unit"}
    whole, once = decompose(matrix, tmp_path / "whole.zarr", **options)
    sweeps = whole.attributes["sweeps"]
    assert sweeps >= 3
    for sweep in range(1, sweeps + 1):
        for share in (0.3, 0.7, 0.99):
            begin(Kept(matrix), out, cut_at(sweep, share), **options)
    gone_on, _ = decompose(matrix, out, **options)
    # Processes that were cut before they kept anything do not count.
    assert 2 * sweeps <= gone_on.attributes["resumed"] <= 3 * sweeps
    assert_same_bits(out, tmp_path / "whole.zarr")
    assert left_in(tmp_path) == ["out.zarr", "whole.zarr"]
    # At most a wave and what the two workers had in hand was read twice at each cut, and the pilot never again.
    panel = 40 * 120 * 8
    assert gone_on.attributes["bytes_read"] <= once.bytes + 3 * sweeps * 8 * panel


def test_a_wish_to_stop_keeps_what_was_summed_though_it_was_not_time(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    options = KRYLOV | {"save_every": 1e6}
    listener = cut_at(1, 0.6, StoppedError())
    with pytest.raises(StoppedError):
        bigsvd.decompose(Kept(slow_decay()), tmp_path / "out.zarr", progress=listener, **(OPTIONS | options))
    standing = read_standing(tmp_path / "out.zarr.run")
    assert standing.sweep == 1
    assert 0.3 * standing.of <= standing.waves < standing.of


@pytest.mark.parametrize("seconds", [-1.0, float("nan")])
def test_a_time_between_savings_that_is_none_is_refused(seconds: float, tmp_path: Path) -> None:
    source = Kept(slow_decay())
    with pytest.raises(bigsvd.errors.OptionError, match="--save-every"):
        bigsvd.decompose(source, tmp_path / "out.zarr", **(OPTIONS | {"save_every": seconds}))
    assert source.bytes == 0


def test_savings_are_apart_as_asked_and_as_the_device_takes(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    from bigsvd.journal import Journal
    from bigsvd.sweep import Control

    monkeypatch.undo()
    now = [100.0]
    journal = Journal(tmp_path, Control(), every=5.0, clock=lambda: now[0])
    assert not journal.due(whole=False)
    now[0] += 1.0
    # A whole sweep is kept when it took a second.
    assert journal.due(whole=True)
    assert not journal.due(whole=False)
    now[0] += 4.0
    assert journal.due(whole=False)
    # A slow device is written to less often, so that it costs a fortieth of the time, but once a minute at least.
    for took, gap in ((0.5, 20.0), (30.0, 60.0)):
        journal._last, journal._took = now[0], took
        now[0] += gap - 0.1
        assert not journal.due(whole=False)
        now[0] += 0.1
        assert journal.due(whole=False)


# -------------------------------------------------------------------------------------------------- damaged records
def spoil(path: Path) -> None:
    """Turn a byte in the middle."""
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 16
    path.write_bytes(content)


@pytest.mark.parametrize("damage", ["spoilt", "empty", "gone"])
@pytest.mark.parametrize("which", ["last", "both", "pilot", "first sweep", "everything"])
def test_a_damaged_record_costs_time_and_no_bits(which: str, damage: str, cut: Path) -> None:
    sums = sorted(cut.glob("sums-02-*"))
    assert len(sums) == 2
    chosen = {
        "last": sums[-1:],
        "both": sums,
        "pilot": [cut / "pilot"],
        "first sweep": sorted(cut.glob("sums-01-*")),
        "everything": [cut / "pilot", *cut.glob("sums-*")],
    }[which]
    for path in chosen:
        if damage == "spoilt":
            spoil(path)
        else:
            path.unlink() if damage == "gone" else path.write_bytes(b"")
    standing = read_standing(cut)
    assert len(standing.damaged) == (0 if damage == "gone" else len(chosen))
    wanted = {"last": (2, int(sums[0].name[-5:])), "both": (1, standing.of), "everything": (0, 0)}
    if which in wanted:
        assert (standing.sweep, standing.waves) == wanted[which]
    _, second = decompose(slow_decay(), cut.with_name("out.zarr"), **KRYLOV)
    assert ("pilot" in second.by_stage) == (which in ("pilot", "everything"))
    assert_same_bits(cut.with_name("out.zarr"), cut.with_name("whole.zarr"))
    assert left_in(cut.parent) == ["aside", "out.zarr", "whole.zarr"]


def test_scratch_that_is_gone_is_named_until_start_over(cut: Path) -> None:
    import shutil

    shutil.rmtree(cut / "scratch")
    with pytest.raises(bigsvd.errors.DamagedJournalError, match="intermediate products") as caught:
        decompose(slow_decay(), cut.with_name("out.zarr"), **KRYLOV)
    assert str(cut / "scratch") in str(caught.value)
    anew, _ = decompose(slow_decay(), cut.with_name("out.zarr"), start_over=True, **KRYLOV)
    assert anew.attributes["resumed"] == 0
    assert_same_bits(cut.with_name("out.zarr"), cut.with_name("whole.zarr"))


@pytest.mark.parametrize("block", ["block-00", "block-01"])
def test_a_block_of_scratch_that_is_gone_or_short_is_read_again(block: str, cut: Path) -> None:
    path = cut / "scratch" / block
    path.write_bytes(path.read_bytes()[:-8])
    _, second = decompose(slow_decay(), cut.with_name("out.zarr"), **KRYLOV)
    assert_same_bits(cut.with_name("out.zarr"), cut.with_name("whole.zarr"))
    assert second.by_stage["sweep"] >= slow_decay().nbytes


def test_nothing_an_earlier_process_left_half_written_is_in_the_way(cut: Path) -> None:
    (cut / "sums-02-00009.new").write_bytes(b"half a rec")
    (cut / "status.json.new").write_text("{")
    (cut / ".bigsvd-scratch-tide").mkdir()
    (cut / ".bigsvd-scratch-tide" / "block-00").write_bytes(bytes(100))
    decompose(slow_decay(), cut.with_name("out.zarr"), **KRYLOV)
    assert_same_bits(cut.with_name("out.zarr"), cut.with_name("whole.zarr"))
    assert left_in(cut.parent) == ["aside", "out.zarr", "whole.zarr"]

"""A run goes on only as the run it was: whatever differs is named in words, and --start-over discards it."""

from __future__ import annotations

import importlib.metadata
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from journal_samples import KRYLOV, OPTIONS, Kept, begin, bits, cut_at, left_in, slow_decay

import bigsvd
from bigsvd.errors import OtherRunError


@pytest.fixture
def stopped(cut: Path) -> Path:
    """Where the result of a run that was cut in its second sweep is to be."""
    return cut.with_name("out.zarr")


def refused(out: Path, source: Any = None, **options: Any) -> str:
    """Words of the refusal; what stands there must be as it was."""
    before = bits(out.with_name("out.zarr.run"))
    with pytest.raises(OtherRunError) as caught:
        bigsvd.decompose(source or Kept(slow_decay()), out, **(OPTIONS | KRYLOV | options))
    assert bits(out.with_name("out.zarr.run")) == before
    assert "--start-over" in caught.value.remedy
    assert len(caught.value.evidence) >= 1
    return "\n".join(caught.value.evidence)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"rank": 7}, "option --rank: 6 when the run began, 7 now"),
        ({"tolerance": 1e-5}, "option --tolerance: 1e-06 when the run began, 1e-05 now"),
        ({"seed": 3}, "option --seed: 0 when the run began, 3 now"),
        ({"scale": "unit"}, "option --scale: none when the run began, unit now"),
        ({"center": "none"}, "option --center: features when the run began, none now"),
        ({"max_sweeps": 3}, "option --max-sweeps: 8 when the run began, 3 now"),
        ({"strict": True}, "option --strict: False when the run began, True now"),
        ({"precision": "double"}, "option --precision: auto when the run began, double now"),
        ({"route": "tsqr"}, "option --route: krylov when the run began, tsqr now"),
        ({"axis": "columns"}, "option --axis: rows when the run began, columns now"),
        ({"samples": "columns"}, "option --samples: rows when the run began, columns now"),
        ({"rank": None, "variance": 0.5, "max_rank": 6}, "option --variance: not given when the run began, 0.5 now"),
        ({"panel_lines": 80}, "the plan panels: 40 when the run began, 20 now"),
    ],
)
def test_another_option_is_named(options: dict[str, Any], words: str, stopped: Path) -> None:
    assert words in refused(stopped, **options).splitlines()


def test_another_memory_ceiling_that_changes_the_plan_is_named(stopped: Path) -> None:
    # Of what follows from the ceiling only the plan matters: with the same panels and widths the bits are the same.
    from bigsvd import api

    plans = {
        size: api.forecast(Kept(slow_decay()), **(KRYLOV | {"memory": size})).plan.widths for size in ("1GiB", "256MiB")
    }
    assert plans["1GiB"] == plans["256MiB"]
    done = bigsvd.decompose(Kept(slow_decay()), stopped, **(OPTIONS | KRYLOV | {"memory": "256MiB", "workers": 1}))
    assert done.attributes["resumed"] == 1


@pytest.mark.parametrize(
    ("source", "words"),
    [
        (lambda: Kept(slow_decay(), "touched"), "the input fingerprint: as it was when the run began, touched now"),
        (lambda: Kept(slow_decay(shape=(1640, 120))), "the input shape: [1600, 120] when the run began"),
        (lambda: Kept(slow_decay("f4")), "the input type: float64 when the run began, float32 now"),
    ],
)
def test_another_input_is_named(source: Callable[[], Kept], words: str, stopped: Path) -> None:
    assert words in refused(stopped, source())


def test_a_file_that_was_touched_is_another_input(tmp_path: Path, short_waves: None) -> None:
    path = tmp_path / "pool.npy"
    np.save(path, slow_decay())
    begin(path, tmp_path / "out.zarr", cut_at(2, 0.5), **KRYLOV)
    os.utime(path, ns=(0, path.stat().st_mtime_ns + 1000))
    assert "the input fingerprint: " in refused(tmp_path / "out.zarr", path)


@pytest.mark.parametrize("package", ["bigsvd", "numpy", "scipy"])
def test_another_version_is_named(package: str, stopped: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    version, true = importlib.metadata.version, importlib.metadata.version(package)
    monkeypatch.setattr(importlib.metadata, "version", lambda name: "99.1" if name == package else version(name))
    assert f"version of {package}: {true} when the run began, 99.1 now" in refused(stopped)


def test_other_matrix_kernels_are_named(stopped: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("bigsvd.journal.identity._kernels", lambda: "Abacus")
    assert "the processor matrix kernels: " in refused(stopped)
    assert refused(stopped).endswith("Abacus now")


def test_another_place_for_scratch_is_named(stopped: Path, tmp_path: Path) -> None:
    (tmp_path / "fast").mkdir()
    words = refused(stopped, scratch=tmp_path / "fast")
    assert f"place of scratch: {stopped}.run/scratch when the run began, {tmp_path / 'fast'}" in words


def test_all_differences_are_named_at_once(stopped: Path) -> None:
    words = refused(stopped, Kept(slow_decay(), "touched"), rank=7, seed=2).splitlines()
    assert len(words) >= 3


def test_start_over_discards_it(stopped: Path, tmp_path: Path) -> None:
    options = OPTIONS | KRYLOV | {"rank": 7}
    anew = bigsvd.decompose(Kept(slow_decay()), stopped, start_over=True, **options)
    assert anew.attributes["resumed"] == 0
    assert left_in(stopped.parent) == ["aside", "out.zarr", "whole.zarr"]
    plain = bigsvd.decompose(Kept(slow_decay()), tmp_path / "plain.zarr", **options)
    assert anew.attributes["bytes_read"] == plain.attributes["bytes_read"]
    assert bits(stopped) == bits(tmp_path / "plain.zarr")


def test_start_over_removes_the_scratch_it_had_elsewhere(tmp_path: Path, short_waves: None) -> None:
    out, fast = tmp_path / "out.zarr", tmp_path / "fast"
    fast.mkdir()
    begin(Kept(slow_decay()), out, cut_at(2, 0.5), scratch=fast, **KRYLOV)
    assert len(list(fast.iterdir())) == 1
    bigsvd.decompose(Kept(slow_decay()), out, start_over=True, **(OPTIONS | KRYLOV))
    assert list(fast.iterdir()) == []


def test_an_identity_of_something_else_does_not_name_scratch_to_be_removed(stopped: Path, tmp_path: Path) -> None:
    precious = tmp_path / "precious"
    precious.mkdir()
    identity = stopped.with_name("out.zarr.run") / "identity.json"
    identity.write_text(identity.read_text().replace(f"{stopped}.run/scratch", str(precious)))
    bigsvd.decompose(Kept(slow_decay()), stopped, start_over=True, **(OPTIONS | KRYLOV))
    assert precious.is_dir()


def test_without_a_journal_nothing_of_it_is_compared(stopped: Path, tmp_path: Path) -> None:
    # An array has no fingerprint, so nothing could show that it is the same; its own run has no folder.
    assert bigsvd.decompose(slow_decay(), tmp_path / "other.zarr", **(OPTIONS | KRYLOV)).attributes["resumed"] == 0
    assert stopped.with_name("out.zarr.run").is_dir()

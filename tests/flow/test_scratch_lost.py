"""Sums are used only beside the very scratch that was written with them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from promise_samples import stored_bits

import bigsvd
from bigsvd.sweep import Progress


class Cut(Exception):
    """Ends a run where a process would have died."""


def cut_in(sweep: int, share: float) -> Any:
    """A listener that ends the run in a sweep."""

    def listen(event: Progress) -> None:
        if event.sweep == sweep and event.bytes_done >= share * event.bytes_total:
            raise Cut

    return listen


def hilly(tmp_path: Path) -> Path:
    """Invented heights that take several sweeps."""
    random = np.random.default_rng(3)
    left = random.standard_normal((3000, 30)) * np.arange(1, 31) ** -0.5
    np.save(
        tmp_path / "hills.npy", left @ random.standard_normal((30, 200)) * 900 + random.standard_normal((3000, 200))
    )
    return tmp_path / "hills.npy"


def decompose(path: Path, out: Path, **options: Any) -> Any:
    return bigsvd.decompose(
        path, out, rank=8, route="krylov", axis="rows", panel_lines=100, memory="1GiB", save_every=0.0, tolerance=1e-9,
        **options,
    )  # fmt: skip


def test_sums_of_a_block_that_was_lost_are_not_used_beside_a_new_one(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import bigsvd.journal.journal as journal

    monkeypatch.setattr(journal, "WORTH_KEEPING", 0.0)
    path, out = hilly(tmp_path), tmp_path / "hills.zarr"
    whole = decompose(path, tmp_path / "whole.zarr")
    assert whole.attributes["sweeps"] >= 2
    with pytest.raises(Cut):
        decompose(path, out, progress=cut_in(2, 0.3))
    folder = tmp_path / "hills.zarr.run"
    assert list(folder.glob("sums-01-*"))
    (folder / "scratch" / "block-00").unlink()
    # This run makes the block anew, and dies before any of it is summed.
    with pytest.raises(Cut):
        decompose(path, out, progress=cut_in(1, 0.02))
    assert (folder / "scratch" / "block-00").exists()
    gone_on = decompose(path, out)
    assert stored_bits(gone_on) == stored_bits(whole)

"""Runs that were cut, made once and copied for each test."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from journal_samples import KRYLOV, OPTIONS, Kept, begin, cut_at, slow_decay

import bigsvd


def shorten(patch: pytest.MonkeyPatch) -> None:
    """Make waves of one segment for each leaf, kept as soon as they are summed: what minutes make of a large matrix."""
    patch.setattr("bigsvd.plan.geometry.WAVE_SECONDS", 1e-9)
    patch.setattr("bigsvd.journal.journal.WORTH_KEEPING", 0.0)
    patch.setattr("bigsvd.journal.journal.SHARE_OF_TIME", 1e9)


@pytest.fixture
def short_waves(monkeypatch: pytest.MonkeyPatch) -> None:
    """Waves of one segment for each leaf, kept as soon as they are summed."""
    shorten(monkeypatch)


@pytest.fixture(scope="module")
def frozen(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a whole result, and aside the folder of the same run cut in its second sweep."""
    folder = tmp_path_factory.mktemp("frozen")
    with pytest.MonkeyPatch.context() as patch:
        shorten(patch)
        bigsvd.decompose(Kept(slow_decay()), folder / "whole.zarr", **(OPTIONS | KRYLOV))
        begin(Kept(slow_decay()), folder / "out.zarr", cut_at(2, 0.6), **KRYLOV)
    (folder / "aside").mkdir()
    (folder / "out.zarr.run").rename(folder / "aside" / "run")
    return folder


@pytest.fixture
def cut(frozen: Path, short_waves: None) -> Path:
    """The folder of a run cut in its second sweep, beside a whole result; made anew for each test in one place."""
    for path in frozen.iterdir():
        if path.name not in ("aside", "whole.zarr"):
            shutil.rmtree(path) if path.is_dir() else path.unlink()
    shutil.copytree(frozen / "aside" / "run", frozen / "out.zarr.run")
    return frozen / "out.zarr.run"

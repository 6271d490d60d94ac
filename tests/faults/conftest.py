"""Nights, devices that are small, and waves that are short."""

from __future__ import annotations

import shutil
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from fault_samples import Night, run, write_hdf5


@pytest.fixture
def short_waves(monkeypatch: pytest.MonkeyPatch) -> None:
    """Waves of one segment for each leaf, kept as soon as they are summed: what minutes make of a large matrix."""
    monkeypatch.setattr("bigsvd.plan.geometry.WAVE_SECONDS", 1e-9)
    monkeypatch.setattr("bigsvd.journal.journal.WORTH_KEEPING", 0.0)
    monkeypatch.setattr("bigsvd.journal.journal.SHARE_OF_TIME", 1e9)


@pytest.fixture(scope="session")
def earlier(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a file and a result of two components; not to be changed."""
    folder = tmp_path_factory.mktemp("earlier")
    file = write_hdf5(folder / "heights.h5")
    ended = run("decompose", file, "--out", folder / "out.zarr", "--rank", 2, "--quiet")
    assert ended.exit_code == 0, ended.output
    return folder


@pytest.fixture
def night(tmp_path: Path, earlier: Path, short_waves: None) -> Night:
    """A file, and an earlier result of two components where the new one is to go."""
    shutil.copy(earlier / "heights.h5", tmp_path)
    shutil.copytree(earlier / "out.zarr", tmp_path / "out.zarr")
    return Night(tmp_path, tmp_path / "heights.h5", tmp_path / "out.zarr")


@pytest.fixture
def mount(tmp_path: Path) -> Iterator[Callable[[str, str], Path]]:
    """Mount a file system in memory, of a size such as ``3m``; needs the right to do so."""
    mounted: list[Path] = []

    def make(name: str, options: str) -> Path:
        place = tmp_path / name
        place.mkdir()
        if not sys.platform.startswith("linux"):
            pytest.skip("file systems in memory are mounted on Linux only")
        words = ["mount", "-t", "tmpfs", "-o", options, "tmpfs", str(place)]
        done = subprocess.run(words, capture_output=True, text=True, check=False)
        if done.returncode:
            pytest.skip(f"this user may not mount a small file system: {done.stderr.strip()}")
        mounted.append(place)
        return place

    yield make
    for place in mounted:
        subprocess.run(["umount", "-l", str(place)], check=True)

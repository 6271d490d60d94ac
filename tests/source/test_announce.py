"""What a source announces is fetched by the system, into its own cache, before it is read."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest
import zarr

import bigsvd
from bigsvd.source import positional

SHAPE = (400, 64)
Announced = list[tuple[str, int, int]]


@pytest.fixture
def announced(monkeypatch: pytest.MonkeyPatch) -> Announced:
    """File, offset and size of everything that is announced."""
    if not hasattr(os, "posix_fadvise"):
        pytest.skip("this system takes no advice")
    made: Announced = []

    def advise(descriptor: int, offset: int, size: int, advice: int) -> None:
        assert advice == os.POSIX_FADV_WILLNEED
        made.append((os.path.basename(os.readlink(f"/proc/self/fd/{descriptor}")), offset, size))

    monkeypatch.setattr(positional.os, "posix_fadvise", advise)
    return made


def matrix() -> np.ndarray:
    return np.random.default_rng(2).standard_normal(SHAPE).astype("f4")


def contiguous(folder: Path) -> Path:
    with h5py.File(folder / "m.h5", "w") as file:
        file["x"] = matrix()
    return folder / "m.h5"


def chunked(folder: Path) -> Path:
    with h5py.File(folder / "m.h5", "w") as file:
        file.create_dataset("x", data=matrix(), chunks=(50, 64), compression=1)
    return folder / "m.h5"


def npy(folder: Path) -> Path:
    np.save(folder / "m.npy", matrix())
    return folder / "m.npy"


def files(folder: Path) -> Path:
    array = zarr.create_array(folder / "m.zarr", shape=SHAPE, chunks=(50, 64), dtype="f4")
    array[:] = matrix()
    return folder / "m.zarr"


@pytest.mark.parametrize("write", [contiguous, chunked, npy, files])
def test_the_bytes_announced_are_those_that_are_read_next(
    write: Callable[[Path], Path], tmp_path: Path, announced: Announced
) -> None:
    source = bigsvd.open_matrix(write(tmp_path))
    source.announce((100, 200), (0, 64))
    source.close()
    sizes = [size for _, _, size in announced]
    if write in (contiguous, npy):
        assert sizes == [100 * 64 * 4]
    else:
        assert len(sizes) == 2
        assert 0 < sum(sizes) < 100 * 64 * 4 * 1.1


def test_parts_of_rows_are_not_announced(tmp_path: Path, announced: Announced) -> None:
    source = bigsvd.open_matrix(contiguous(tmp_path))
    source.announce((100, 200), (3, 9))
    source.close()
    assert not announced


def test_a_run_announces_all_but_the_first_panel_of_each_segment(tmp_path: Path, announced: Announced) -> None:
    path = npy(tmp_path)
    bigsvd.decompose(path, rank=2, route="krylov", axis="rows", panel_lines=20, max_sweeps=1, memory="1GiB")
    assert announced
    assert all(size <= 20 * 64 * 4 for _, _, size in announced)


def test_what_cannot_be_announced_is_no_fault(tmp_path: Path) -> None:
    source = bigsvd.open_matrix(files(tmp_path))
    source.announce((0, 400), (0, 64))
    os.remove(next((tmp_path / "m.zarr").glob("c/*/0")))
    source.announce((0, 400), (0, 64))
    source.close()

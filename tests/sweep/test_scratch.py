"""The tall products on disk."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest

from bigsvd.sweep import Scratch


@pytest.mark.parametrize("dtype", [np.float64, np.complex128])
def test_blocks_come_back_side_by_side_by_ranges_of_lines(tmp_path: Path, dtype: type) -> None:
    random = np.random.default_rng(1)
    blocks = [
        random.standard_normal((50, width)).astype(dtype) * (1 + 1j if dtype is np.complex128 else 1)
        for width in (3, 1, 5)
    ]
    scratch = Scratch(tmp_path, 50, np.dtype(dtype))
    for block in blocks:
        number = scratch.add_block(block.shape[1])
        for start in (30, 0, 10):
            stop = {30: 50, 0: 10, 10: 30}[start]
            scratch.write(number, start, block[start:stop])
    whole = np.hstack(blocks)
    assert scratch.stored == 9
    assert scratch.stored_bytes == whole.nbytes
    np.testing.assert_array_equal(scratch.read(0, 50), whole)
    np.testing.assert_array_equal(scratch.read(7, 31), whole[7:31])
    np.testing.assert_array_equal(scratch.read(7, 31, 2), whole[7:31, :4])
    assert scratch.read(7, 31, 0).shape == (24, 0)
    scratch.close()


def test_lines_that_do_not_lie_in_memory_order_are_written_right(tmp_path: Path) -> None:
    values = np.asfortranarray(np.arange(12.0).reshape(4, 3))
    scratch = Scratch(tmp_path, 4, np.dtype(float))
    scratch.write(scratch.add_block(3), 0, values)
    np.testing.assert_array_equal(scratch.read(0, 4), values)
    scratch.close()


def test_threads_write_and_read_at_the_same_time(tmp_path: Path) -> None:
    scratch = Scratch(tmp_path, 4000, np.dtype(float))
    number = scratch.add_block(6)

    def write(start: int) -> bool:
        block = np.full((100, 6), float(start))
        scratch.write(number, start, block)
        return bool((scratch.read(start, start + 100) == start).all())

    with ThreadPoolExecutor(4) as pool:
        assert all(pool.map(write, range(0, 4000, 100)))
    scratch.close()


def test_a_dropped_block_leaves_room_for_another_width(tmp_path: Path) -> None:
    scratch = Scratch(tmp_path, 10, np.dtype(float))
    scratch.write(scratch.add_block(2), 0, np.ones((10, 2)))
    scratch.write(scratch.add_block(3), 0, np.full((10, 3), 2.0))
    scratch.drop_last_block()
    assert scratch.stored == 2
    scratch.write(scratch.add_block(1), 0, np.full((10, 1), 3.0))
    np.testing.assert_array_equal(scratch.read(0, 10), [[1, 1, 3]] * 10)
    scratch.close()


def test_files_are_private_and_gone_after_closing(tmp_path: Path) -> None:
    scratch = Scratch(tmp_path, 10, np.dtype(float))
    scratch.add_block(2)
    assert scratch.folder.stat().st_mode & 0o077 == 0
    assert all(path.stat().st_mode & 0o077 == 0 for path in scratch.folder.iterdir())
    scratch.close()
    scratch.close()
    assert list(tmp_path.iterdir()) == []


def test_a_shortened_file_is_noticed(tmp_path: Path) -> None:
    scratch = Scratch(tmp_path, 10, np.dtype(float))
    scratch.add_block(2)
    (path,) = scratch.folder.iterdir()
    with path.open("r+b") as file:
        file.truncate(24)
    with pytest.raises(OSError, match="ended early"):
        scratch.read(0, 10)
    scratch.close()

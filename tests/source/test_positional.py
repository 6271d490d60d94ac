"""Rows are read by position to where they belong, whatever lies between them in the file and in the buffer."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from source_samples import matrix, same

from bigsvd.source import positional
from bigsvd.source.positional import Descriptor, read_rows

ROWS = 40
# Columns in the file, and those that are read: whole rows, parts of short and of long rows, some with long gaps.
PARTS = [(50, (0, 50)), (50, (7, 31)), (3000, (0, 3000)), (3000, (100, 2900)), (40_000, (5, 2500)), (40_000, (9, 30))]


def file_of(folder: Path, values: np.ndarray) -> Descriptor:
    """The entries behind some other bytes."""
    (folder / "raw").write_bytes(b"before!" + values.tobytes())
    return Descriptor(str(folder / "raw"))


@pytest.mark.parametrize("code", ["u1", "f4", ">f4", "f8", ">c8"])
@pytest.mark.parametrize(("width", "columns"), PARTS)
@pytest.mark.parametrize("buffer", ["whole", "part of rows", "by columns"])
@pytest.mark.parametrize("most", [7, 10**9], ids=["bytes come in pieces", "as asked"])
def test_a_rectangle_is_read_as_it_lies_in_the_file(
    tmp_path: Path, code: str, width: int, columns: tuple[int, int], buffer: str, most: int, monkeypatch: Any
) -> None:
    if most == 7:
        read = os.preadv

        def little(descriptor: int, buffers: Sequence[Any], position: int) -> int:
            """Read as many whole buffers as come to 5,000 bytes, and a part of the next: a system may do so."""
            sizes = np.cumsum([len(memoryview(part).cast("B")) for part in buffers])
            many = int(np.searchsorted(sizes, 5000))
            if many == len(buffers):
                return read(descriptor, buffers, position)
            part = memoryview(buffers[many]).cast("B")
            return read(descriptor, [*buffers[:many], part[: max(1, len(part) // 2)]], position)

        monkeypatch.setattr(positional.os, "preadv", little)
        monkeypatch.setattr(positional, "_MOST_ROWS", most)
    values = matrix(code, (ROWS, width))
    rows, shape = (3, 38), (35, columns[1] - columns[0])
    native = np.dtype(code).newbyteorder("=")
    out = {
        "whole": np.zeros(shape, native),
        "part of rows": np.zeros((shape[0], shape[1] + 11), native)[:, 4:-7],
        "by columns": np.zeros(shape[::-1], native).T,
    }[buffer]
    file = file_of(tmp_path, values)
    read_rows(file.number, 7, width, np.dtype(code), rows, columns, out)
    assert same(out, values[rows[0] : rows[1], columns[0] : columns[1]])


@pytest.mark.parametrize(("width", "columns"), PARTS)
def test_a_file_that_is_too_short_says_by_how_much(tmp_path: Path, width: int, columns: tuple[int, int]) -> None:
    values = matrix("f4", (ROWS, width))
    descriptor = file_of(tmp_path, values)
    end = 7 + ((ROWS - 1) * width + columns[0]) * 4 + 10
    os.truncate(tmp_path / "raw", end)
    out = np.zeros((ROWS, columns[1] - columns[0] + 1), "f4")[:, 1:]
    with pytest.raises(EOFError, match=f"the file ends at byte {end:,}, "):
        read_rows(descriptor.number, 7, width, np.dtype("f4"), (0, ROWS), columns, out)

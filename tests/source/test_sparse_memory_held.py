"""Reading a sparse matrix holds no more beside its panel than the spec says, of which the memory plan is made."""

from __future__ import annotations

import sys
from pathlib import Path

import h5py
import numpy as np
import pytest
import scipy.sparse
from test_decode_bytes import held_and_planned

pytestmark = pytest.mark.alone


def write(path: Path, shape: tuple[int, int], form: str, chunk: int, *, shuffled: bool) -> str:
    """A tenth of the places filled; unsorted, with every place twice, if asked for."""
    rng = np.random.default_rng(1)
    matrix = scipy.sparse.random_array(shape, density=0.1, rng=rng, format=form)
    data, indices = np.ceil(100 * matrix.data).astype("i2"), matrix.indices.astype("i8")
    pointers = matrix.indptr.astype("i8")
    if shuffled:
        data, indices, pointers = np.repeat(data, 2)[::-1], np.repeat(indices, 2), 2 * pointers
        indices[::2], indices[1::2] = indices[1::2].copy(), indices[::2].copy()
        data, indices = data.copy(), np.concatenate([part[::-1] for part in np.split(indices, pointers[1:-1])])
    with h5py.File(path, "w") as file:
        group = file.create_group("X")
        group.attrs.update({"encoding-type": f"{form}_matrix", "shape": shape})
        options = {"chunks": (min(chunk, data.size),), "compression": "gzip", "compression_opts": 1} if chunk else {}
        group.create_dataset("data", data=data, **options)
        group.create_dataset("indices", data=indices, **options)
        group["indptr"] = pointers
    return str(path)


@pytest.mark.skipif(sys.platform != "linux", reason="the peak is reset on Linux only")
@pytest.mark.parametrize("shuffled", [False, True], ids=["in order", "unsorted and doubled"])
@pytest.mark.parametrize("chunk", [0, 20_000, 1_000_000], ids=["contiguous", "small chunks", "large chunks"])
@pytest.mark.parametrize("form", ["csr", "csc"])
def test_reading_holds_no_more_than_the_spec_says(tmp_path: Path, form: str, chunk: int, *, shuffled: bool) -> None:
    small = write(tmp_path / "small.h5", (60, 50), form, min(chunk, 100), shuffled=shuffled)
    large = write(tmp_path / "large.h5", (6000, 5000), form, chunk, shuffled=shuffled)
    held, planned = held_and_planned(small, large)
    assert held <= planned
    # Nor is the plan far too wide: not the whole matrix, which has 300,000 entries a thousand rows.
    assert planned < 100 * 2**20

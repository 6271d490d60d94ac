"""Stacks that other programs wrote unfold to what h5py and zarr-python read, whatever the axis, or are refused."""

from __future__ import annotations

import warnings
from contextlib import suppress
from typing import Any

import h5py
import numpy as np
import pytest
import zarr
from test_real_files import FOLDER, MISSING, files

from bigsvd.errors import BigsvdError
from bigsvd.source import AxisChoice, Candidate, check_complete, open_source, survey

# Larger ones take long to read along every axis.
MOST_BYTES = 4e6


def whole(path: Any, inside: str) -> np.ndarray:
    """The plainest reading that the libraries of the format offer."""
    if path.is_file() and h5py.is_hdf5(path):
        import hdf5plugin  # noqa: F401

        with h5py.File(path, "r") as file:
            values = file[inside][...]
    else:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            array = zarr.open_array(str(path), path=inside, mode="r")
            values = np.asarray(array[...])
    if values.dtype.names:
        values = values[values.dtype.names[0]] + 1j * values[values.dtype.names[1]]
    return values


def unfolds(path: Any, found: Candidate) -> bool:
    """Compare every axis in turn as samples; False where the file itself cannot be read."""
    reference: np.ndarray | None = None
    for axis in range(len(found.shape)):
        source = open_source(path, found.path or None, choice=AxisChoice(axis))
        try:
            check_complete(source)
        except BigsvdError:
            return False
        if source.spec.decoded_bytes > MOST_BYTES:
            return True
        unfolding = source.spec.unfolding
        assert unfolding is not None
        values = np.empty(source.spec.shape, source.spec.dtype)
        try:
            source.read((0, source.spec.shape[0]), (0, source.spec.shape[1]), values)
        except BigsvdError:
            # What does not decode here must not decode elsewhere either.
            with pytest.raises(Exception, match=r"."):
                whole(path, found.path)
            return False
        if path.suffix == ".zip":
            # zarr-python does not look for the root of a store in a folder inside it.
            return True
        reference = whole(path, found.path) if reference is None else reference
        flat = np.moveaxis(reference, axis, 0).reshape(reference.shape[axis], -1)
        wanted = flat if unfolding.samples_are_rows else flat.T
        ranks = [side.file_order(0, side.size) for side in (unfolding.rows, unfolding.columns)]
        wanted = wanted[np.ix_(*ranks)].astype(values.dtype)
        assert np.array_equal(values, wanted, equal_nan=values.dtype.kind in "fc"), (path, found.path, axis)
        source.close()
    return True


@pytest.mark.parametrize("room", sorted({path.split("/")[0] for path in files()}) or ["none"])
def test_real_stacks_unfold_along_every_axis_or_are_refused_in_words(room: str) -> None:
    if not files():
        pytest.skip(MISSING)
    for path in files():
        if path.split("/")[0] != room:
            continue
        try:
            found = survey(FOLDER / "files" / path)
        except BigsvdError:
            continue
        for candidate in [one for one in found[:60] if one.usable and one.many_axes]:
            if not candidate.sample_axes:
                with pytest.raises(BigsvdError) as refused:
                    open_source(FOLDER / "files" / path, candidate.path or None)
                assert "--sample-axes" in refused.value.remedy
            with suppress(BigsvdError):
                unfolds(FOLDER / "files" / path, candidate)


def test_some_real_stacks_do_unfold() -> None:
    if not files():
        pytest.skip(MISSING)
    path = FOLDER / "files" / "hdf5-filters/silx-kit+hdf5plugin/test/blosc.h5"
    found = [one for one in survey(path) if one.path == "/dset"]
    assert found[0].shape == (100, 100, 100)
    assert unfolds(path, found[0])

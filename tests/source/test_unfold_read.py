"""One stack written in every layout: whatever is asked of it, the entries read are those of NumPy's own reshaping."""

from __future__ import annotations

import pickle
from collections.abc import Callable
from pathlib import Path
from typing import Any

import dask.array as da
import h5py
import numpy as np
import pytest
import zarr

from bigsvd.errors import DamagedSourceError, NoMatrixError, OptionError
from bigsvd.source import AxisChoice, Source, check_complete, open_source, survey

T, Y, X = 23, 17, 19
STACK = np.random.default_rng(4).integers(0, 60_000, (T, Y, X)).astype("u2")
FOUR = np.random.default_rng(5).standard_normal((4, 6, 7, 5))


def hdf5(folder: Path, values: np.ndarray, **options: Any) -> Path:
    with h5py.File(folder / "a.h5", "w") as file:
        file.create_dataset("s", data=values, **options)
    return folder / "a.h5"


def zarr_store(folder: Path, values: np.ndarray, **options: Any) -> Path:
    array = zarr.create_array(str(folder / "a.zarr"), shape=values.shape, dtype=values.dtype, **options)
    array[...] = values
    return folder / "a.zarr"


def npy(folder: Path, values: np.ndarray) -> Path:
    np.save(folder / "a.npy", values)
    return folder / "a.npy"


GZIP = {"compression": 1, "shuffle": True}
YXT, YTX = np.ascontiguousarray(STACK.transpose(1, 2, 0)), np.ascontiguousarray(STACK.transpose(1, 0, 2))
# What is written, what its values are, and which axis is the time.
LAYOUTS: dict[str, tuple[Callable[[Path], Any], np.ndarray, int]] = {
    "HDF5 contiguous": (lambda folder: hdf5(folder, STACK), STACK, 0),
    "HDF5 frames": (lambda folder: hdf5(folder, STACK, chunks=(1, Y, X)), STACK, 0),
    "HDF5 frames, gzip": (lambda folder: hdf5(folder, STACK, chunks=(1, Y, X), **GZIP), STACK, 0),
    "HDF5 tiles with uneven edges, gzip": (lambda folder: hdf5(folder, STACK, chunks=(10, 8, 8), **GZIP), STACK, 0),
    "HDF5 tiles, no filter": (lambda folder: hdf5(folder, STACK, chunks=(10, 8, 8)), STACK, 0),
    "HDF5 tiles, lzf": (lambda folder: hdf5(folder, STACK, chunks=(5, 17, 4), compression="lzf"), STACK, 0),
    "HDF5 big-endian tiles": (lambda f: hdf5(f, STACK.astype(">i4"), chunks=(10, 8, 8), **GZIP), STACK.astype("i4"), 0),
    "HDF5 by the library, tiles": (lambda f: hdf5(f, STACK, chunks=(10, 8, 8), scaleoffset=0), STACK, 0),
    "HDF5 time last": (lambda folder: hdf5(folder, YXT, chunks=(8, 8, 10), **GZIP), YXT, 2),
    "HDF5 time last, contiguous": (lambda folder: hdf5(folder, YXT), YXT, 2),
    "HDF5 time in the middle": (lambda folder: hdf5(folder, YTX, chunks=(4, 5, 6), **GZIP), YTX, 1),
    "HDF5 time in the middle, contiguous": (lambda folder: hdf5(folder, YTX), YTX, 1),
    "Zarr v3 tiles": (lambda folder: zarr_store(folder, STACK, chunks=(10, 8, 8)), STACK, 0),
    "Zarr v3 sharded": (lambda f: zarr_store(f, STACK, chunks=(5, 4, 8), shards=(10, 8, 16)), STACK, 0),
    "Zarr v2 tiles": (lambda folder: zarr_store(folder, STACK, chunks=(10, 8, 8), zarr_format=2), STACK, 0),
    "Zarr v2 F order": (lambda f: zarr_store(f, STACK, chunks=(10, 8, 8), zarr_format=2, order="F"), STACK, 0),
    "npy": (lambda folder: npy(folder, STACK), STACK, 0),
    "npy F order": (lambda folder: npy(folder, np.asfortranarray(STACK)), STACK, 0),
    "npy time in the middle": (lambda folder: npy(folder, YTX), YTX, 1),
    "memory": (lambda _: STACK, STACK, 0),
    "memory, strides": (lambda _: STACK.T, STACK.T, 2),
    "dask": (lambda _: da.from_array(STACK, chunks=(10, 8, 8)), STACK, 0),
    "dask, uneven": (lambda _: da.from_array(STACK, chunks=((3, 20), (8, 9), (5, 5, 9))), STACK, 0),
}
REGION = (slice(1, T - 1, 2), slice(2, Y - 1), slice(1, X - 2))


def wanted(values: np.ndarray, samples: tuple[int, ...], region: tuple[slice, ...], mask: np.ndarray | None) -> Any:
    """Samples × features in file order, by NumPy's own indexing and reshaping."""
    features = tuple(axis for axis in range(values.ndim) if axis not in samples)
    part = values[region].transpose(*samples, *features)
    flat = part.reshape(int(np.prod(part.shape[: len(samples)])), -1)
    if mask is None:
        return flat
    return flat[:, mask[tuple(region[axis] for axis in features)].reshape(-1)]


def require_same(source: Source, values: np.ndarray, rng: np.random.Generator) -> None:
    """Compare all of a source, and random rectangles of it read into a part of a larger buffer, with file order."""
    unfolding = source.spec.unfolding
    assert unfolding is not None
    rows, columns = source.spec.shape
    ranks = [np.argsort(np.argsort(side.file_order(0, side.size))) for side in (unfolding.rows, unfolding.columns)]
    swept = (values if unfolding.samples_are_rows else values.T)[np.ix_(*ranks)]
    assert swept.shape == (rows, columns)
    whole = np.empty((rows, columns), source.spec.dtype)
    source.read((0, rows), (0, columns), whole)
    assert np.array_equal(whole, swept)
    for _ in range(5):
        top, bottom = sorted(int(n) for n in rng.integers(0, rows + 1, 2))
        left, right = sorted(int(n) for n in rng.integers(0, columns + 1, 2))
        buffer = np.full((bottom - top + 1, right - left + 2), 7, source.spec.dtype)
        source.read((top, bottom), (left, right), buffer[:-1, 1:-1])
        assert np.array_equal(buffer[:-1, 1:-1], swept[top:bottom, left:right])
        assert (buffer[-1] == 7).all()
        assert (buffer[:, [0, -1]] == 7).all()


@pytest.mark.parametrize("name", LAYOUTS)
def test_a_stack_reads_the_same_in_every_layout(tmp_path: Path, name: str) -> None:
    write, values, time = LAYOUTS[name]
    where, rng = write(tmp_path), np.random.default_rng(7)
    shape = tuple(side for axis, side in enumerate(values.shape) if axis != time)
    mask = rng.random(shape) < 0.3
    mask[3:5, 3:5] = True
    region = tuple(REGION[(T, Y, X).index(side)] for side in values.shape)
    everything = (slice(None),) * 3
    for part, chosen in ((None, None), (None, mask), (region, None), (region, mask)):
        source = open_source(where, choice=AxisChoice(time, part, chosen))
        if "dask" not in name:
            source = pickle.loads(pickle.dumps(source))
        require_same(source, wanted(values, (time,), part or everything, chosen), rng)
        source.close()


@pytest.mark.parametrize("samples", [(0,), (1,), (3,), (0, 1), (1, 2), (2, 3), (0, 2), (0, 1, 2), (1, 2, 3)])
def test_several_axes_become_samples(tmp_path: Path, samples: tuple[int, ...]) -> None:
    rng, everything = np.random.default_rng(8), (slice(None),) * 4
    for where in (hdf5(tmp_path, FOUR, chunks=(2, 3, 4, 5), **GZIP), npy(tmp_path, FOUR), FOUR):
        source = open_source(where, choice=AxisChoice(samples))
        require_same(source, wanted(FOUR, samples, everything, None), rng)


def test_whole_chunks_outside_a_region_and_tiles_outside_a_mask_are_not_read(tmp_path: Path) -> None:
    path = zarr_store(tmp_path, STACK, chunks=(10, 8, 8))
    mask = np.zeros((Y, X), bool)
    mask[:8, 8:16] = True
    source: Any = open_source(path, choice=AxisChoice(0, "0:10", mask))
    # All but the one chunk that is wanted are gone, and reading does not notice.
    for chunk in path.glob("c/*/*/*"):
        if chunk.relative_to(path) != Path("c/0/0/1"):
            chunk.unlink()
    assert source.spec.shape == (10, 64)
    require_same(source, STACK[:10, :8, 8:16].reshape(10, 64), np.random.default_rng(1))
    with pytest.raises(DamagedSourceError, match="26 of 27 chunks are absent"):
        check_complete(source)


@pytest.mark.parametrize("make", [hdf5, zarr_store])
def test_absent_chunks_are_named_by_all_their_axes_or_filled(tmp_path: Path, make: Callable[..., Path]) -> None:
    path = make(tmp_path, STACK, chunks=(10, 8, 8))
    if make is zarr_store:
        (path / "c/1/2/0").unlink()
    else:
        with h5py.File(path, "w") as file:
            sparse = file.create_dataset("s", (T, Y, X), "u2", chunks=(10, 8, 8))
            for i, j, k in np.ndindex(3, 3, 3):
                if (i, j, k) != (1, 2, 0):
                    place = tuple(slice(8 * n, 8 * n + 8) for n in (j, k))
                    sparse[10 * i : 10 * i + 10, *place] = STACK[10 * i : 10 * i + 10, *place]
    place = r"chunk \(1, 2, 0\): axis 0 10 to 19, axis 1 16 to 16, axis 2 0 to 7 \(counted from 0\)"
    with pytest.raises(DamagedSourceError, match=f"(?s)1 of 27 chunks is absent.*{place}"):
        check_complete(open_source(path, choice=AxisChoice(0)))
    from bigsvd.source import Access

    source = open_source(path, access=Access("fill"), choice=AxisChoice(0))
    before = source.spec.fingerprint
    check_complete(source)
    assert source.spec.absent is not None
    assert source.spec.fingerprint != before
    filled = STACK.copy()
    filled[10:20, 16:, :8] = 0
    require_same(source, filled.reshape(T, -1), np.random.default_rng(2))


def test_a_damaged_chunk_is_named_by_all_its_axes(tmp_path: Path) -> None:
    path = hdf5(tmp_path, STACK, chunks=(10, 8, 8), compression="gzip", fletcher32=True)
    source = open_source(path, choice=AxisChoice(0))
    with h5py.File(path) as file:
        at = file["s"].id.get_chunk_info_by_coord((10, 8, 16)).byte_offset
    stamp = path.stat()
    with open(path, "r+b") as damaged:
        damaged.seek(at + 20)
        damaged.write(b"\0\0\0\0\0\0")
    import os

    os.utime(path, ns=(stamp.st_atime_ns, stamp.st_mtime_ns))
    out = np.empty(source.spec.shape, source.spec.dtype)
    with pytest.raises(DamagedSourceError, match=r"chunk \(1, 1, 2\): axis 0 10 to 19"):
        source.read((0, T), (0, Y * X), out)


def test_markers_say_which_axis_is_time_and_what_to_type_where_none_does(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["named"], file["bare"], file["table"] = STACK, STACK, np.ones((3, 4))
        for axis, name in enumerate(("time", "y", "x")):
            file["named"].dims[axis].label = name
    found = {one.path: one for one in survey(tmp_path / "a.h5")}
    assert (found["/named"].sample_axes, found["/named"].option) == ((0,), "time")
    assert (found["/bare"].usable, found["/bare"].sample_axes, found["/bare"].option) == (True, (), "0")
    # A matrix comes before stacks unless stacks are asked for; then two of them must be told apart.
    assert open_source(tmp_path / "a.h5").spec.name.endswith("/table")
    with pytest.raises(Exception, match="holds 2 matrices and none was named"):
        open_source(tmp_path / "a.h5", choice=AxisChoice(0))
    named = open_source(tmp_path / "a.h5", "/named")
    assert named.spec.shape == (T, Y * X)
    assert "names axis 0 'time'" in named.spec.hint_reason
    with pytest.raises(Exception, match="--sample-axes 0"):
        open_source(tmp_path / "a.h5", "/bare")


@pytest.mark.parametrize("version", [2, 3])
def test_names_of_zarr_dimensions_are_markers(tmp_path: Path, version: int) -> None:
    names = ("y", "x", "frame")
    extra: dict[str, Any] = {"dimension_names": names} if version == 3 else {"attributes": {"_ARRAY_DIMENSIONS": names}}
    path = zarr_store(tmp_path, YXT, chunks=(8, 8, 10), zarr_format=version, **extra)
    spec = open_source(path).spec
    assert (spec.shape, spec.samples_hint) == ((Y * X, T), "columns")
    assert spec.unfolding is not None
    assert spec.unfolding.words() == f"{T} samples (axis frame) × {Y * X} features (y {Y} × x {X})"


def test_what_was_asked_for_is_in_the_fingerprint(tmp_path: Path) -> None:
    path = hdf5(tmp_path, STACK, chunks=(10, 8, 8))
    mask = np.ones((Y, X), bool)
    other = mask.copy()
    other[0, 0] = False
    choices = [AxisChoice(0), AxisChoice(2), AxisChoice((0, 1)), AxisChoice(0, "0:20"), AxisChoice(0, "0:20:2")]
    choices += [AxisChoice(0, None, mask), AxisChoice(0, None, other)]
    marks = [open_source(path, choice=choice).spec.fingerprint for choice in choices]
    assert len(set(marks)) == len(choices)
    assert marks == [open_source(path, choice=choice).spec.fingerprint for choice in choices]


def test_a_mask_lies_beside_the_stack_or_in_a_file_of_its_own(tmp_path: Path) -> None:
    mask = np.hypot(*np.indices((Y, X)) - 8) < 6
    path = hdf5(tmp_path, STACK, chunks=(10, 8, 8))
    with h5py.File(path, "r+") as file:
        file["where/disc"] = mask.astype("u1")
    with h5py.File(tmp_path / "other.h5", "w") as file:
        file["disc"] = mask
    np.save(tmp_path / "disc.npy", mask)
    store = zarr_store(tmp_path, mask)
    values = STACK.reshape(T, -1)[:, mask.reshape(-1)]
    places = ["where/disc", str(tmp_path / "disc.npy"), f"{tmp_path}/other.h5:disc", f"{path}:/where/disc", mask, store]
    for place in places:
        source = open_source(path, "s", choice=AxisChoice(0, None, place))
        require_same(source, values, np.random.default_rng(3))
        assert f"mask: {mask.sum()} of {mask.size} features are taken" in source.spec.cautions
    with pytest.raises(NoMatrixError, match="holds no array under /nowhere"):
        open_source(path, "s", choice=AxisChoice(0, None, "nowhere"))
    with pytest.raises(OptionError, match="chooses no feature"):
        open_source(path, "s", choice=AxisChoice(0, None, np.zeros((Y, X))))


def test_a_matrix_stays_as_it_is_unless_its_axes_are_spoken_of(tmp_path: Path) -> None:
    table = np.arange(80.0).reshape(8, 10)
    assert open_source(table).spec.unfolding is None
    source = open_source(hdf5(tmp_path, table, chunks=(3, 4)), choice=AxisChoice(1, "2:7,::3"))
    require_same(source, table[2:7, ::3].T, np.random.default_rng(1))
    assert source.spec.samples_hint == "columns"

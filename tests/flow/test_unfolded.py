"""Stacks decomposed as they lie: the factors of NumPy on the reshaped array, reads counted, memory as planned."""

from __future__ import annotations

import json
import pickle
import subprocess
import sys
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import zarr

import bigsvd
from bigsvd.errors import NonFiniteError, OptionError, ResultExistsError
from bigsvd.source import AxisChoice, open_source

T, Y, X = 180, 46, 39
MASK = np.hypot(*(np.indices((Y, X)) - np.array([[[22]], [[18]]]))) < 15


def decaying_stack() -> np.ndarray:
    """Invented: eight components that halve, and noise a thousand times below the last."""
    rng = np.random.default_rng(11)
    left = np.linalg.qr(rng.standard_normal((T, 8)))[0] * (1000 * 0.5 ** np.arange(8))
    right = np.linalg.qr(rng.standard_normal((Y * X, 8)))[0]
    return np.asarray((left @ right.T + 0.001 * rng.standard_normal((T, Y * X)) + 3.0).reshape(T, Y, X))


STACK = decaying_stack()
YXT, YTX = np.ascontiguousarray(STACK.transpose(1, 2, 0)), np.ascontiguousarray(STACK.transpose(1, 0, 2))


def hdf5(path: Path, values: np.ndarray, names: str = "", **options: Any) -> Path:
    with h5py.File(path, "w") as file:
        data = file.create_dataset("s", data=values, **options)
        for axis, name in enumerate(names.split()):
            data.dims[axis].label = name
    return path


def zarr_store(path: Path, values: np.ndarray, **options: Any) -> Path:
    zarr.create_array(str(path), shape=values.shape, dtype=values.dtype, **options)[...] = values
    return path


def write(folder: Path, name: str) -> tuple[Any, dict[str, Any]]:
    """One layout of the stack, and what must be said of its axes."""
    tiles = {"chunks": (50, 16, 16), "compression": 1, "shuffle": True}
    if name.startswith("npy"):
        np.save(folder / "a.npy", STACK if name == "npy" else np.asfortranarray(STACK))
        return folder / "a.npy", {"sample_axes": 0}
    made = {
        "contiguous": lambda: (hdf5(folder / "a.h5", STACK, "time y x"), {}),
        "frames": lambda: (hdf5(folder / "a.h5", STACK, "time y x", chunks=(1, Y, X)), {}),
        "tiles": lambda: (hdf5(folder / "a.h5", STACK, "time y x", **tiles), {}),
        "time last": lambda: (hdf5(folder / "a.h5", YXT, "y x time", chunks=(16, 16, 50)), {}),
        "time in the middle": lambda: (hdf5(folder / "a.h5", YTX, chunks=(16, 50, 16)), {"sample_axes": 1}),
        "zarr v3": lambda: (
            zarr_store(folder / "a.zarr", STACK, chunks=(50, 16, 16), dimension_names=("frame", None, None)),
            {},
        ),
        "zarr v2, F order": lambda: (
            zarr_store(folder / "a.zarr", STACK, chunks=(50, 16, 16), zarr_format=2, order="F"),
            {"sample_axes": "0"},
        ),
        "sharded": lambda: (
            zarr_store(folder / "a.zarr", STACK, chunks=(25, 16, 16), shards=(50, 16, 48)),
            {"sample_axes": 0},
        ),
        "memory": lambda: (STACK, {"sample_axes": 0}),
    }
    return made[name]()


LAYOUTS = ["contiguous", "frames", "tiles", "time last", "time in the middle", "zarr v3", "zarr v2, F order"]
LAYOUTS += ["sharded", "npy", "npy F order", "memory"]


def require_factors(factors: bigsvd.Factors, samples_by_features: np.ndarray, *, images: tuple[int, ...]) -> None:
    """Compare with LAPACK on the reshaped array, single vectors being determined: values halve."""
    matrix = samples_by_features.astype(float)
    centred = matrix - matrix.mean(axis=0)
    u, s, vh = np.linalg.svd(centred, full_matrices=False)
    k = factors.rank
    assert factors.shape == matrix.shape
    np.testing.assert_allclose(factors.singular_values, s[:k], rtol=1e-6)
    sign = np.sign(np.sum(u[:, :k] * factors.left_vectors[:], axis=0))
    np.testing.assert_allclose(factors.left_vectors[:] * sign, u[:, :k], atol=1e-6)
    np.testing.assert_allclose(factors.right_vectors[:] * sign, vh[:k].T, atol=1e-6)
    np.testing.assert_allclose(factors.column_mean, matrix.mean(axis=0), rtol=1e-9)
    assert factors.images().shape == (k, *images)


@pytest.mark.parametrize("axis", ["rows", "columns"])
@pytest.mark.parametrize("name", LAYOUTS)
def test_every_layout_has_the_factors_of_the_reshaped_array(tmp_path: Path, name: str, axis: str) -> None:
    where, options = write(tmp_path, name)
    out = None if name == "memory" else tmp_path / "out.zarr"
    options |= {"rank": 6, "axis": axis, "route": "krylov", "memory": "512MiB", "panel_lines": 64}
    options |= {"tolerance": 1e-8}
    factors = bigsvd.decompose(where, out, **options)
    require_factors(factors, STACK.reshape(T, -1), images=(Y, X))
    np.testing.assert_allclose(factors.rebuild(slice(5, 8)), STACK[5:8].reshape(3, -1), atol=16)
    check = bigsvd.verify(factors, where, **{key: options[key] for key in options if key == "sample_axes"})
    assert check.agrees, check.checks


@pytest.mark.parametrize("axis", ["rows", "columns"])
@pytest.mark.parametrize("name", ["contiguous", "tiles", "time last", "sharded"])
def test_region_and_mask_leave_what_numpy_leaves(tmp_path: Path, name: str, axis: str) -> None:
    where, options = write(tmp_path, name)
    region = {"contiguous": "time=10:170:2,y=5:40", "time last": "time=10:170:2,y=5:40"}.get(name, "10:170:2,5:40")
    np.save(tmp_path / "disc.npy", MASK)
    reading = options | {"region": region, "mask": tmp_path / "disc.npy"}
    factors = bigsvd.decompose(
        where, tmp_path / "out.zarr", rank=6, axis=axis, route="krylov", tolerance=1e-8, **reading
    )
    inside = MASK[5:40]
    require_factors(factors, STACK[10:170:2, 5:40].reshape(80, -1)[:, inside.reshape(-1)], images=(35, X))
    images = factors.images()
    assert (np.isnan(images) == ~inside).all()
    np.testing.assert_array_equal(images[:, inside], factors.right_vectors[:].T)
    assert factors.attributes["source"]["unfolding"]["masked"]
    assert bigsvd.verify(tmp_path / "out.zarr", where, **reading).agrees
    # Without the options it is another matrix, and the check must not pass.
    with pytest.raises(OptionError, match=f"the matrix given has {T} × {Y * X:,}"):
        bigsvd.verify(tmp_path / "out.zarr", where, **options)


def test_several_sample_axes_fold_back_on_both_sides() -> None:
    values = np.random.default_rng(3).standard_normal((5, 12, 7, 6)) * np.arange(1, 7)
    factors = bigsvd.decompose(values, rank=3, sample_axes=(0, 1), region=[slice(None), slice(2, None)])
    part = values[:, 2:].reshape(50, 42)
    u, _, vh = np.linalg.svd(part - part.mean(axis=0), full_matrices=False)
    images, courses = factors.images([0, 2]), factors.images(2, side="samples")
    assert (images.shape, courses.shape) == ((2, 7, 6), (2, 5, 10))
    np.testing.assert_allclose(np.abs(images[0].reshape(-1)), np.abs(vh[0]), atol=1e-9)
    np.testing.assert_allclose(np.abs(courses[1].reshape(-1)), np.abs(u[:, 1]), atol=1e-9)
    with pytest.raises(OptionError, match="side='rows' is not a choice"):
        factors.images(side="rows")  # type: ignore[arg-type]
    with pytest.raises(OptionError, match="the file holds a matrix"):
        bigsvd.decompose(part, rank=2).images()


@pytest.mark.parametrize("chunks", [(100, 3, 8), (1, 8, 8), (1797, 4, 4)])
def test_scikit_learn_finds_the_same_components_in_its_own_images(tmp_path: Path, chunks: tuple[int, ...]) -> None:
    # Outside reference: sklearn.decomposition.PCA, full solver, on the handwritten digits that scikit-learn brings.
    from sklearn.datasets import load_digits
    from sklearn.decomposition import PCA

    digits = load_digits().images
    path = hdf5(tmp_path / "a.h5", digits, chunks=chunks, compression=1)
    factors = bigsvd.decompose(path, tmp_path / "out.zarr", rank=10, sample_axes=0, tolerance=1e-6)
    reference = PCA(10, svd_solver="full").fit(digits.reshape(len(digits), -1))
    np.testing.assert_allclose(factors.singular_values, reference.singular_values_, rtol=1e-9)
    images = factors.images()
    assert images.shape == (10, 8, 8)
    alike = np.abs(np.sum(images.reshape(10, -1) * reference.components_, axis=1))
    np.testing.assert_allclose(alike, 1, atol=1e-9)


def test_names_and_labels_are_in_the_result_as_xarray_shows_it(tmp_path: Path) -> None:
    import xarray

    frames = xarray.DataArray(
        STACK,
        dims=("time", "y", "x"),
        coords={"time": 0.04 * np.arange(T), "y": np.arange(Y) * 1.5},
        name="film",
    )
    frames.to_dataset().chunk({"time": 50, "y": 16, "x": 16}).to_zarr(
        tmp_path / "film.zarr", zarr_format=3, consolidated=False
    )
    out = tmp_path / "out.zarr"
    factors = bigsvd.decompose(tmp_path / "film.zarr", out, matrix="film", rank=3, region="time=20:100,x=3:", mask=MASK)
    shown = xarray.open_zarr(out)
    np.testing.assert_allclose(shown["time"], frames["time"][20:100])
    np.testing.assert_allclose(shown["y"], frames["y"])
    # No labels in the file: places there.
    np.testing.assert_array_equal(shown["x"], np.arange(3, X))
    assert shown["feature_mask"].dims == ("y", "x")
    np.testing.assert_array_equal(shown["feature_mask"], MASK[:, 3:])
    assert factors.axes is not None
    assert [axis.from_file for axis in (*factors.axes.samples, *factors.axes.features)] == [True, True, False]
    # What is said of axes is part of what --overwrite may replace, and of what is checked.
    with pytest.raises(ResultExistsError):
        bigsvd.decompose(tmp_path / "film.zarr", out, matrix="film", rank=2)
    assert bigsvd.decompose(tmp_path / "film.zarr", out, matrix="film", rank=2, overwrite=True).rank == 2
    again = bigsvd.open_factors(out).axes
    assert again is not None
    assert again.mask is None
    assert [axis.name for axis in again.features] == ["y", "x"]


def test_names_that_a_result_uses_itself_are_not_taken_for_axes(tmp_path: Path) -> None:
    path = hdf5(tmp_path / "a.h5", STACK[:40], "component left_vectors ../x")
    factors = bigsvd.decompose(path, tmp_path / "out.zarr", rank=2, sample_axes="component")
    assert factors.axes is not None
    axes = (*factors.axes.samples, *factors.axes.features)
    assert [axis.dimension for axis in axes] == ["axis_0", "axis_1", "axis_2"]
    assert [axis.name for axis in axes] == ["component", "left_vectors", "../x"]


# ---------------------------------------------------------------------------------------------------- reads and memory
class Counting:
    """An HDF5 source whose chunks are counted as they are decoded."""

    def __init__(self, path: Path) -> None:
        self.source: Any = open_source(path)
        self.decoded = 0
        parent = self.source.parent
        read_box = parent.read_box
        chunks = parent.axes.chunks

        def counted(box: Any, out: np.ndarray) -> None:
            sizes = [
                min(-(-stop // chunk) * chunk, side) - start // chunk * chunk
                for (start, stop), chunk, side in zip(box, chunks, parent.axes.shape, strict=True)
            ]
            self.decoded += int(np.prod(sizes)) * out.itemsize
            read_box(box, out)

        parent.read_box = counted


@pytest.mark.parametrize(("layout", "swept"), [("frames", "samples"), ("tiles", "features in tiles of 16 × 16")])
def test_a_sweep_decodes_a_stack_once_in_either_layout(tmp_path: Path, layout: str, swept: str) -> None:
    # Scaled down in all sides: 3,200 × 160 × 160 of 16 bits, 164 MB, more than half of the ceiling: it is not held.
    rng = np.random.default_rng(2)
    images = rng.standard_normal((5, 160 * 160)).astype("f4")
    chunks = (1, 160, 160) if layout == "frames" else (400, 16, 16)
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        data = file.create_dataset("s", (3200, 160, 160), "u2", chunks=chunks, compression=1, shuffle=True)
        for start in range(0, 3200, 400):
            courses = rng.standard_normal((400, 5)).astype("f4") * 100
            data[start : start + 400] = np.clip(courses @ images + 2000, 0, 65_000).reshape(400, 160, 160)
        data.dims[0].label = "time"
    counting = Counting(path)
    factors = bigsvd.decompose(counting.source, rank=4, route="krylov", memory="300MiB")
    attributes = factors.attributes
    assert f"swept along {swept}" in attributes["plan"]["reasons"][0][1]
    assert not attributes["plan"]["resident"]
    assert attributes["bytes_read"] == counting.decoded
    # The probe's panels, the pilot's 5 % and the slices' 1 % come on top of the sweeps.
    sweeps, panel = attributes["sweeps"], attributes["plan"]["panel_bytes"]
    assert counting.decoded <= (1.05 * sweeps + 0.06) * attributes["matrix_bytes"] + 4 * panel


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="the peak is measured by /proc")
@pytest.mark.parametrize("layout", ["frames", "tiles", "masked"])
def test_a_stack_larger_than_the_ceiling_stays_below_it(tmp_path: Path, layout: str) -> None:
    # 2,000 × 192 × 192 of 16 bits, 147 MB, in frames of 74 kB or tiles of 1 MB.
    chunks = {"frames": (1, 192, 192), "tiles": (500, 32, 32), "masked": (500, 32, 32)}[layout]
    rng = np.random.default_rng(1)
    images = rng.integers(0, 200, (5, 192, 192))
    with h5py.File(tmp_path / "a.h5", "w") as file:
        data = file.create_dataset("s", (2000, 192, 192), "u2", chunks=chunks)
        for start in range(0, 2000, 500):
            course = rng.integers(0, 50, (500, 5))
            data[start : start + 500] = np.einsum("ti,iyx->tyx", course, images)
        file["m"] = np.indices((192, 192)).sum(axis=0) % 3 > 0
    words = [sys.executable, "-m", "bigsvd", "decompose", str(tmp_path / "a.h5"), "--matrix", "/s", "--rank", "4"]
    words += ["--out", str(tmp_path / "out.zarr"), "--sample-axes", "0", "--memory", "320MiB", "--json"]
    words += ["--mask", "m"] * (layout == "masked")
    done = subprocess.run(words, capture_output=True, text=True, timeout=300, check=False)
    assert done.returncode in (0, 3), done.stderr
    attributes = bigsvd.open_factors(tmp_path / "out.zarr").attributes
    assert attributes["peak_resident_bytes"] <= attributes["planned_bytes"] <= attributes["memory_bytes"]


# ------------------------------------------------------------------------------------------------------- words, errors
def command(*words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "bigsvd", *words], capture_output=True, text=True, timeout=120, check=False
    )


def test_inspect_and_plan_say_which_axes_become_what(tmp_path: Path) -> None:
    path = hdf5(tmp_path / "a.h5", STACK.astype("u2"), "time y x", chunks=(50, 16, 16))
    listed = command("inspect", str(path)).stdout
    assert "/s: axes 0 time, 1 y, 2 x; samples are axis time" in listed
    assert "_factors.zarr --sample-axes time" in listed
    text = " ".join(command("plan", str(path), "--rank", "3", "--axis", "columns", "--route", "krylov").stdout.split())
    assert f"{T} samples (axis time) × {Y * X:,} features (y {Y} × x {X}), centred per feature" in text
    assert "swept along features in tiles of 16 × 16" in text
    facts = json.loads(command("plan", str(path), "--rank", "3", "--mask", "s", "--json").stdout or "{}")
    assert facts.get("error", {}).get("kind", "OptionError") == "OptionError"
    facts = json.loads(command("plan", str(path), "--rank", "3", "--region", "y=0:20", "--json").stdout)
    assert facts["source"]["unfolding"]["words"] == f"{T} samples (axis time) × {20 * X} features (y 20 × x {X})"
    assert any("y 0:20" in caution for caution in facts["source"]["cautions"])


def test_a_stack_without_markers_is_shown_with_the_line_to_type(tmp_path: Path) -> None:
    path = hdf5(tmp_path / "a.h5", STACK)
    listed = command("inspect", str(path)).stdout
    assert "/s: axes 0, 1, 2; usable with --sample-axes" in listed
    assert "--sample-axes 0" in listed
    refused = command("plan", str(path))
    assert refused.returncode == 2
    assert "is 3-D, and nothing says which of its axes are the samples" in refused.stderr
    assert "--sample-axes 0" in refused.stderr
    assert command("plan", str(path), "--sample-axes", "0", "--rank", "3").returncode == 0


def test_rows_and_columns_do_not_name_the_samples_of_a_stack(tmp_path: Path) -> None:
    path = hdf5(tmp_path / "a.h5", YXT, "y x time")
    with pytest.raises(OptionError, match="the samples of this array are axes of it"):
        bigsvd.forecast(path, samples="rows", rank=2)


def test_nan_is_named_by_its_place_in_the_stack() -> None:
    values = STACK.copy()
    values[17, 3, 20] = np.nan
    with pytest.raises(NonFiniteError, match="first at axis 0 17, axis 1 3, axis 2 20"):
        bigsvd.decompose(values, rank=2, sample_axes=0)


def test_another_region_is_another_run(tmp_path: Path) -> None:
    path = hdf5(tmp_path / "a.h5", STACK, "time y x", chunks=(50, 16, 16))
    first, second = (open_source(path, choice=AxisChoice(None, region)) for region in ("y=0:20", "y=0:21"))
    assert first.spec.fingerprint != second.spec.fingerprint
    assert len(pickle.dumps(first)) < 20_000, "it travels as its address"


def test_a_run_that_was_cut_goes_on_with_the_same_bits_in_tile_order(tmp_path: Path) -> None:
    path = hdf5(tmp_path / "a.h5", STACK, "time y x", chunks=(50, 16, 16))
    options: dict[str, Any] = {"rank": 6, "axis": "columns", "route": "krylov", "tolerance": 1e-9, "max_sweeps": 4}
    whole = bigsvd.decompose(path, tmp_path / "whole.zarr", **options)
    assert whole.attributes["sweeps"] > 1

    def stop(event: Any) -> None:
        if event.stage == "write":
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        bigsvd.decompose(path, tmp_path / "cut.zarr", save_every=0.0, progress=stop, **options)
    again = bigsvd.decompose(path, tmp_path / "cut.zarr", save_every=0.0, **options)
    assert again.attributes["resumed"] == 1
    np.testing.assert_array_equal(again.right_vectors[:], whole.right_vectors[:])
    np.testing.assert_array_equal(again.left_vectors[:], whole.left_vectors[:])
    assert sorted(found.name for found in tmp_path.iterdir() if "cut" in found.name) == ["cut.zarr", "cut.zarr.log"]

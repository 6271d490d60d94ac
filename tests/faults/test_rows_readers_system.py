"""Rows 3, 39, 50 and 54 of the list of faults: what a network, a limit, a type or a path does to a reader."""

from __future__ import annotations

import errno
import os
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from fault_samples import run
from reader_samples import OPTIONS, SHAPE, Scene, matrix, scenes, stage, write_hdf5, write_zarr

from bigsvd.source import persist

ROWS = {
    3: [
        "test_03_an_error_that_passes_is_not_even_noticed",
        "test_03_an_error_that_stays_names_the_chunk_and_the_attempts",
        "test_03_a_chunk_that_may_not_be_read_is_never_filled",
        "test_03_the_library_is_asked_again_too",
    ],
    39: ["test_39_integers_do_not_wrap", "test_39_integers_of_64_bits_are_cautioned"],
    50: ["test_50_few_descriptors_are_enough", "test_50_no_descriptor_left_is_named"],
    54: ["test_54_paths_of_every_kind_work", "test_54_links_in_a_circle_are_named"],
}
EXPLAINED = {
    3: "no network file system can be mounted here: the system's answer is put in its place (EIO, ESTALE, EACCES …)",
    50: "1e5 chunk files are listed without holding their names (a byte a chunk); 5,000 are made here",
}
READ = os.preadv


@pytest.fixture(scope="module")
def earlier() -> Iterator[Path]:
    yield from scenes()


@pytest.fixture
def scene(earlier: Path, tmp_path: Path) -> Scene:
    return stage(earlier, tmp_path)


@pytest.fixture
def pauses(monkeypatch: pytest.MonkeyPatch) -> list[float]:
    """Pauses that were asked for, none of which is made."""
    asked: list[float] = []
    monkeypatch.setattr(persist.time, "sleep", asked.append)
    return asked


def failing(monkeypatch: pytest.MonkeyPatch, times: int, number: int, after: int = 3) -> list[int]:
    """Let reading by position fail so many times, from some read on; returns what was read."""
    calls: list[int] = []

    def read(descriptor: int, buffers: Any, position: int) -> int:
        # Of the input only: scratch is read by position, too.
        if "/a." not in os.readlink(f"/proc/self/fd/{descriptor}"):
            return READ(descriptor, buffers, position)
        calls.append(descriptor)
        if after < len(calls) <= after + times:
            raise OSError(number, os.strerror(number))
        return READ(descriptor, buffers, position)

    monkeypatch.setattr(os, "preadv", read)
    return calls


FILES = {
    "hdf5": lambda folder: write_hdf5(folder / "a.h5", compression="gzip"),
    "hdf5 rows": lambda folder: write_hdf5(folder / "a.h5", chunks=None),
    "zarr": lambda folder: write_zarr(folder / "a.zarr"),
    "shards": lambda folder: write_zarr(folder / "a.zarr", shards=(20, 40)),
    "npy": lambda folder: (np.save(folder / "a.npy", matrix()), folder / "a.npy")[1],
}
PASSING = [errno.EIO, errno.ESTALE, errno.ETIMEDOUT, errno.EAGAIN, errno.ENETDOWN]


@pytest.mark.parametrize("kind", FILES)
@pytest.mark.parametrize("number", PASSING)
def test_03_an_error_that_passes_is_not_even_noticed(
    scene: Scene, monkeypatch: pytest.MonkeyPatch, pauses: list[float], kind: str, number: int
) -> None:
    file = FILES[kind](scene.folder)
    calls = failing(monkeypatch, 3, number, after=0 if kind in ("npy", "hdf5 rows") else 3)
    found = scene.done(file)
    assert len(calls) >= 4
    assert pauses == [0.1, 0.3, 0.9]
    exact = np.linalg.svd(matrix() - matrix().mean(axis=0), compute_uv=False)[:2]
    assert np.allclose(found["singular_values"], exact, rtol=1e-9)


@pytest.mark.parametrize("kind", FILES)
@pytest.mark.parametrize("number", PASSING)
@pytest.mark.parametrize("options", [(), ("--absent", "fill")])
def test_03_an_error_that_stays_names_the_chunk_and_the_attempts(
    scene: Scene,
    monkeypatch: pytest.MonkeyPatch,
    pauses: list[float],
    kind: str,
    number: int,
    options: tuple[str, ...],
) -> None:
    file = FILES[kind](scene.folder)
    failing(monkeypatch, 10**9, number, after=0)
    text = scene.refused(file, *options, status=1)
    assert "cannot be read: the system does not give its bytes" in text
    assert f"{os.strerror(number)}; tried 5 times in 4 s" in text
    assert "(0, 0): rows 0 to" in text or "rows 0 to 59" in text
    assert "then run the same command again" in text
    assert set(pauses) == set(persist.PAUSES)


@pytest.mark.parametrize("options", [(), ("--absent", "fill")])
@pytest.mark.parametrize("number", [errno.EACCES, errno.EIO])
def test_03_a_chunk_that_may_not_be_read_is_never_filled(
    scene: Scene, monkeypatch: pytest.MonkeyPatch, pauses: list[float], number: int, options: tuple[str, ...]
) -> None:
    file, opened = write_zarr(scene.folder / "a.zarr", fill_value=0), os.open

    def refuse(path: Any, *rest: Any, **more: Any) -> int:
        if str(path).endswith("c/2/1"):
            raise OSError(number, os.strerror(number), path)
        return opened(path, *rest, **more)

    monkeypatch.setattr(os, "open", refuse)
    text = scene.refused(file, *options, status=1)
    assert "chunk (2, 1): rows 20 to 29, columns 20 to 39 (counted from 0); key c/2/1" in text
    assert os.strerror(number) in text
    assert bool(pauses) == (number == errno.EIO)


@pytest.mark.parametrize("passes", [True, False])
def test_03_the_library_is_asked_again_too(
    scene: Scene, monkeypatch: pytest.MonkeyPatch, pauses: list[float], passes: bool
) -> None:
    pairs = np.zeros(SHAPE, [("r", "f4"), ("i", "f4")])
    pairs["r"], pairs["i"] = matrix(), 1
    file = write_hdf5(scene.folder / "a.h5", pairs.view("V8").view([("Real", "f4"), ("Imag", "f4")]))
    import bigsvd.source.hdf5 as module

    reader, calls = module.library_reader, []

    def flaky(dataset: Any) -> Any:
        fill = reader(dataset)

        def read(*rectangle: Any) -> None:
            calls.append(1)
            if len(calls) <= 2 or not passes:
                # As the library words it; h5py gives no number of its own then.
                raise OSError("Can't synchronously read data (file read failed: time = now, errno = 116, Stale)")
            fill(*rectangle)

        return read

    monkeypatch.setattr(module, "library_reader", flaky)
    if passes:
        assert scene.done(file)["source"]["dtype"] == "complex64"
        assert pauses == [0.1, 0.3]
        return
    text = scene.refused(file, status=1)
    assert f"{os.strerror(116)}; tried 5 times in 4 s" in text
    assert "rows 0 to 59" in text


@pytest.mark.parametrize("code", ["u1", "i1", "i2", "u2", "i4", "u4", "i8", "u8", "?"])
@pytest.mark.parametrize("route", ["direct", "gram", "krylov"])
def test_39_integers_do_not_wrap(scene: Scene, code: str, route: str) -> None:
    dtype = np.dtype(code)
    top = 1 if dtype.kind == "b" else min(np.iinfo(dtype).max, 2**52)
    values = (np.random.default_rng(5).random((300, 20)) * top + (dtype.kind != "b") * 0.4).astype(dtype)
    values[::7] = top
    np.save(scene.folder / "a.npy", values)
    found = scene.done(scene.folder / "a.npy", "--route", route, "--tolerance", "1e-6")
    exact = np.linalg.svd(values.astype("f8") - values.astype("f8").mean(axis=0), compute_uv=False)[:2]
    assert np.all(found["lower"] <= exact * (1 + 1e-12))
    assert np.all(exact <= np.array(found["upper"]) * (1 + 1e-12))
    assert np.allclose(found["singular_values"], exact, rtol=1e-5)


@pytest.mark.parametrize("code", ["i8", "u8"])
def test_39_integers_of_64_bits_are_cautioned(scene: Scene, code: str) -> None:
    values = np.full((40, 6), 2**53 + 1, code)
    values[::2] //= 3
    np.save(scene.folder / "a.npy", values)
    planned = " ".join(run("plan", scene.folder / "a.npy", "--rank", 2).stdout.split())
    assert "caution whole numbers beyond 2⁵³ in magnitude are rounded: everything is computed in double" in planned
    exact = np.linalg.norm(values.astype("f8") - values.astype("f8").mean(axis=0))
    assert np.isclose(scene.done(scene.folder / "a.npy")["singular_values"][0], exact, rtol=1e-12)


LIMITED = "import resource, sys; resource.setrlimit(resource.RLIMIT_NOFILE, (int(sys.argv[1]),) * 2);"


def limited(descriptors: int, *words: object) -> subprocess.CompletedProcess[str]:
    """Run the program with so few file descriptors."""
    code = LIMITED + "from bigsvd.cli import main; main(sys.argv[2:])"
    line = [sys.executable, "-c", code, str(descriptors), *map(str, words)]
    return subprocess.run(line, capture_output=True, text=True, check=False)


def test_50_few_descriptors_are_enough(scene: Scene) -> None:
    values = np.random.default_rng(1).normal(size=(500, 100))
    file = write_zarr(scene.folder / "a.zarr", values, chunks=(10, 1), compressors=None)
    assert sum(1 for _ in file.rglob("*") if _.is_file()) > 5000
    ended = limited(64, "decompose", file, "--out", scene.out, "--overwrite", *OPTIONS)
    assert ended.returncode in (0, 3), ended.stderr


def test_50_no_descriptor_left_is_named(scene: Scene, monkeypatch: pytest.MonkeyPatch, pauses: list[float]) -> None:
    file = write_zarr(scene.folder / "a.zarr")
    opened = os.open

    def none_left(path: Any, *rest: Any, **more: Any) -> int:
        if "/c/" in str(path):
            raise OSError(errno.EMFILE, os.strerror(errno.EMFILE), path)
        return opened(path, *rest, **more)

    monkeypatch.setattr(os, "open", none_left)
    text = scene.refused(file, "--absent", "fill", status=1)
    assert "Too many open files" in text
    assert "the number of open files" in text


def test_54_paths_of_every_kind_work(scene: Scene, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("HOME", str(scene.folder))
    long = scene.folder / "/".join(["n" * 200] * 5)
    long.mkdir(parents=True)
    (scene.folder / "to").symlink_to(long)
    names = ["night watch.h5", "Gezeiten 潮.h5", "-flag.h5", "it's $HOME;`x`.h5", "~.h5", "a\nb.h5"]
    for name in names:
        write_hdf5(scene.folder / name)
    write_hdf5(long / "deep.h5")
    places = [scene.folder / name for name in names]
    places += ["~/night watch.h5", long / "deep.h5", scene.folder / "to" / "deep.h5", f"{scene.folder}/to/../~.h5"]
    for place in places[:-1]:
        found = scene.done(place)
        assert found["source"]["shape"] == list(SHAPE)
    listed = run("inspect", scene.folder / "a\nb.h5").stdout
    assert "a\\x0ab.h5: 1 array" in listed
    # `..` is taken off the words, as shells do, and not followed through the link.
    assert scene.done(places[-1])["source"]["name"].startswith(str(scene.folder / "~.h5"))


def test_54_links_in_a_circle_are_named(scene: Scene) -> None:
    (scene.folder / "a.h5").symlink_to(scene.folder / "b.h5")
    (scene.folder / "b.h5").symlink_to(scene.folder / "a.h5")
    text = scene.refused(scene.folder / "a.h5")
    assert "a.h5" in text
    assert "Too many levels of symbolic links" in text
    assert "File name too long" in scene.refused(scene.folder / ("n" * 300 + ".h5"))

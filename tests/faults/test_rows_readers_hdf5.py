"""Rows 19, 20 and 23 to 34 of the list of faults: HDF5 files cut short, half written, linked away or of odd content."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import h5py
import numpy as np
import pytest
from fault_samples import run
from reader_samples import CHUNK, SHAPE, Scene, flip, matrix, scenes, stage, write_hdf5

ROWS = {
    5: ["test_05_a_chunk_of_hdf5_that_does_not_decode_is_named"],
    9: ["test_09_a_flipped_bit_under_a_checksum_of_hdf5_is_named"],
    19: ["test_19_a_file_cut_short_says_how_much_is_there"],
    20: ["test_20_what_is_no_hdf5_file_is_named_for_what_it_looks_like"],
    23: ["test_23_what_a_crashed_writer_left_out_stops_before_computing"],
    24: ["test_24_the_mark_of_a_crashed_writer_is_explained"],
    25: ["test_25_a_file_that_another_program_writes_is_explained"],
    26: ["test_26_a_file_system_without_locks_is_read_without"],
    27: ["test_27_a_missing_filter_is_named"],
    28: ["test_28_sources_of_a_virtual_dataset_that_fall_short_are_named"],
    29: ["test_29_broken_links_show_where_they_lead"],
    30: ["test_30_a_short_external_file_is_named"],
    31: ["test_31_groups_in_circles_end"],
    32: ["test_32_a_group_or_a_choice_lists_what_there_is"],
    33: ["test_33_shapes_that_are_no_matrix_are_refused", "test_33_one_row_and_one_column_work"],
    34: ["test_34_types_that_are_no_numbers_are_refused_by_name"],
}
EXPLAINED = {
    26: "a file system without locks cannot be mounted here: the answer of the library on one is put in its place",
    28: "the library hangs on a source of another shape; it is compared before anything is read, so that no timeout is"
    " needed",
}


@pytest.fixture(scope="module")
def earlier() -> Iterator[Path]:
    yield from scenes()


@pytest.fixture
def scene(earlier: Path, tmp_path: Path) -> Scene:
    return stage(earlier, tmp_path)


def offset_of(file: Path, number: int) -> tuple[int, int]:
    """First byte and size of a stored chunk."""
    with h5py.File(file) as opened:
        chunk = opened["frames"].id.get_chunk_info(number)
    return chunk.byte_offset, chunk.size


def test_05_a_chunk_of_hdf5_that_does_not_decode_is_named(scene: Scene) -> None:
    file = write_hdf5(scene.folder / "a.h5", np.round(matrix()), compression="lzf")
    place, size = offset_of(file, 5)
    data = bytearray(file.read_bytes())
    data[place : place + size] = b"\xff" * size
    file.write_bytes(data)
    text = scene.refused(file)
    assert "a.h5:/frames holds stored bytes that do not decode" in text
    assert "chunk (2, 1): rows 20 to 29, columns 20 to 39 (counted from 0)" in text
    assert f"{size:,} bytes stored at byte {place:,}, lzf; a chunk has 1,600 bytes decoded" in text


@pytest.mark.parametrize("options", [{"compression": "gzip"}, {"fletcher32": True}], ids=["gzip", "fletcher32"])
def test_09_a_flipped_bit_under_a_checksum_of_hdf5_is_named(scene: Scene, options: dict[str, object]) -> None:
    file = write_hdf5(scene.folder / "a.h5", **options)
    place, _ = offset_of(file, 5)
    flip(file, place + 300)
    text = scene.refused(file)
    assert "chunk (2, 1): rows 20 to 29" in text
    assert "Copy or download the file again" in text


@pytest.mark.parametrize("kept", [0.98, 0.5])
def test_19_a_file_cut_short_says_how_much_is_there(scene: Scene, kept: float) -> None:
    file = write_hdf5(scene.folder / "a.h5")
    whole = file.read_bytes()
    file.write_bytes(whole[: int(len(whole) * kept)])
    text = scene.refused(file)
    assert f"a.h5 is cut short: {kept:.1%} of it is there" in text
    assert f"{int(len(whole) * kept):,} bytes found, {len(whole):,} bytes when it was written" in text
    assert "Copy or download the file again." in text


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "it is empty (0 bytes): an interrupted copy or download"),
        (b"the tide was high\n", "it looks like text"),
        (b"<!DOCTYPE html><html>404</html>", "a download that answered with a page instead of the file"),
        (b"\0" * 5000, "nothing but zero bytes"),
    ],
)
def test_20_what_is_no_hdf5_file_is_named_for_what_it_looks_like(scene: Scene, content: bytes, words: str) -> None:
    (scene.folder / "a.h5").write_bytes(content)
    text = scene.refused(scene.folder / "a.h5")
    assert "is neither an HDF5 file, a Zarr store, an .npy nor an .npz file" in text
    assert words in text


CRASH = """
import os, sys, h5py, numpy as np
file = h5py.File(sys.argv[1], "w", libver=sys.argv[2])
frames = file.create_dataset("frames", (60, 40), "f8", chunks=(10, 20))
frames[:30] = np.ones((30, 40))
file.flush()
os.kill(os.getpid(), 9)
"""


def crash(file: Path, libver: str) -> None:
    ended = subprocess.run([sys.executable, "-c", CRASH, str(file), libver], check=False)
    assert ended.returncode == -signal.SIGKILL


def test_23_what_a_crashed_writer_left_out_stops_before_computing(scene: Scene) -> None:
    crash(scene.folder / "a.h5", "earliest")
    text = scene.refused(scene.folder / "a.h5")
    assert "a.h5:/frames is not complete: 6 of 12 chunks are absent" in text
    assert "first absent: chunk (3, 0): rows 30 to 39" in text


def test_24_the_mark_of_a_crashed_writer_is_explained(scene: Scene) -> None:
    crash(scene.folder / "a.h5", "latest")
    text = scene.refused(scene.folder / "a.h5")
    assert "its writer is still at work, or crashed and left it incomplete" in text
    assert "clearing the mark with h5clear does not bring back what was never written" in text


HOLD = """
import sys, h5py, numpy as np
file = h5py.File(sys.argv[1], "r+")
print("open", flush=True)
sys.stdin.read()
"""


def test_25_a_file_that_another_program_writes_is_explained(scene: Scene) -> None:
    file = write_hdf5(scene.folder / "a.h5")
    line = [sys.executable, "-c", HOLD, str(file)]
    with subprocess.Popen(line, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as writer:
        assert writer.stdout is not None
        writer.stdout.readline()
        began = time.monotonic()
        text = scene.refused(file)
        # It is not waited for.
        assert time.monotonic() - began < 3
        forced = subprocess.run(
            [sys.executable, "-m", "bigsvd", "inspect", str(file)],
            env=os.environ | {"HDF5_USE_FILE_LOCKING": "FALSE"}, capture_output=True, text=True, check=False,
        )  # fmt: skip
        writer.communicate()
    assert "is locked: another program has it open for writing" in text
    assert "Close it there, or work on a copy of the file." in text
    assert "HDF5_USE_FILE_LOCKING=FALSE" in text
    assert forced.returncode == 0, forced.stderr


@pytest.mark.parametrize("number", [37, 38, 95, 524, 30])
def test_26_a_file_system_without_locks_is_read_without(
    scene: Scene, monkeypatch: pytest.MonkeyPatch, number: int
) -> None:
    file, opened, asked = write_hdf5(scene.folder / "a.h5"), h5py.File, []

    def locked(path: object, mode: str, locking: object = None, **options: object) -> h5py.File:
        asked.append(locking)
        if locking is not False:
            raise OSError(f"Unable to synchronously open file (unable to lock file, errno = {number}, error message)")
        return opened(path, mode, locking=locking, **options)

    monkeypatch.setattr(h5py, "File", locked)
    found = scene.done(file)
    assert found["source"]["shape"] == list(SHAPE)
    assert asked[:2] == ["best-effort", False]


def test_27_a_missing_filter_is_named(scene: Scene, monkeypatch: pytest.MonkeyPatch) -> None:
    file = scene.folder / "a.h5"
    with h5py.File(file, "w") as opened:
        plist = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
        plist.set_chunk(CHUNK)
        # Optional, so that it can be written without; no library has this number.
        plist.set_filter(32999, h5py.h5z.FLAG_OPTIONAL, (1, 2))
        space = h5py.h5s.create_simple(SHAPE)
        h5py.h5d.create(opened.id, b"frames", h5py.h5t.NATIVE_DOUBLE, space, plist)
        opened["frames"][...] = matrix()
    text = scene.refused(file)
    assert "its filter is not installed: unnamed filter (filter 32999)" in text
    assert run("inspect", file).stdout.count("filter 32999") == 1


@pytest.mark.parametrize("fault", ["missing", "short", "absent"])
@pytest.mark.parametrize("options", [(), ("--absent", "fill")])
def test_28_sources_of_a_virtual_dataset_that_fall_short_are_named(
    scene: Scene, fault: str, options: tuple[str, ...]
) -> None:
    for name in ("one.h5", "two.h5"):
        write_hdf5(scene.folder / name, matrix()[:30])
    layout = h5py.VirtualLayout(SHAPE, "f8")
    for number, name in enumerate(("one.h5", "two.h5")):
        layout[30 * number : 30 * number + 30] = h5py.VirtualSource(name, "frames", (30, 40))
    with h5py.File(scene.folder / "a.h5", "w") as opened:
        opened.create_virtual_dataset("frames", layout)
    assert scene.done(scene.folder / "a.h5")["source"]["shape"] == list(SHAPE)
    (scene.folder / "two.h5").unlink()
    if fault == "short":
        write_hdf5(scene.folder / "two.h5", matrix()[:20])
    elif fault == "absent":
        with h5py.File(scene.folder / "two.h5", "w") as opened:
            opened.create_dataset("frames", (30, 40), "f8", chunks=CHUNK)[:10] = 1
    text = scene.refused(scene.folder / "a.h5", *options)
    assert "is virtual, and 1 of its 2 sources cannot be used" in text
    words = {
        "missing": "file not found",
        "short": "it holds 800 entries, the mapping takes 1,200",
        "absent": "4 of 6 chunks were never written",
    }
    assert f"two.h5:frames: {words[fault]}" in text


@pytest.mark.parametrize("kind", ["soft", "external"])
def test_29_broken_links_show_where_they_lead(scene: Scene, kind: str) -> None:
    file = write_hdf5(scene.folder / "a.h5")
    with h5py.File(file, "r+") as opened:
        opened["away"] = h5py.SoftLink("/gone") if kind == "soft" else h5py.ExternalLink("gone.h5", "/gone")
    target = "/gone" if kind == "soft" else "/gone in gone.h5"
    text = scene.refused(file, "--matrix", "away")
    assert "a.h5 holds nothing under /away" in text
    assert f"/away  a broken link to {target}" in text
    assert f"a broken link to {target}" in run("inspect", file).stdout


@pytest.mark.parametrize("options", [(), ("--absent", "fill")])
@pytest.mark.parametrize("kept", [None, 5000])
def test_30_a_short_external_file_is_named(scene: Scene, options: tuple[str, ...], kept: int | None) -> None:
    raw, file = scene.folder / "raw.bin", scene.folder / "a.h5"
    with h5py.File(file, "w") as opened:
        opened.create_dataset("frames", data=matrix(), external=[(str(raw), 0, h5py.h5f.UNLIMITED)])
    assert scene.done(file)["source"]["shape"] == list(SHAPE)
    data = raw.read_bytes()
    raw.unlink()
    if kept is not None:
        raw.write_bytes(data[:kept])
    text = scene.refused(file, *options)
    assert "1 of 1 fall short" in text
    assert f"{raw}: " + ("not found" if kept is None else "5,000 bytes, 19,200 are needed") in text


def test_31_groups_in_circles_end(scene: Scene) -> None:
    file = write_hdf5(scene.folder / "a.h5")
    with h5py.File(file, "r+") as opened:
        group = opened.create_group("night")
        group["up"] = opened["/"]
        group["again"] = group
        group["soft"] = h5py.SoftLink("/night/soft")
        deep = group
        for _ in range(200):
            deep = deep.create_group("below")
        deep["frames"] = matrix()
    listed = run("inspect", file)
    assert listed.exit_code == 0
    assert listed.stdout.count("/frames") >= 1
    assert "groups below 64 others are not looked into" in listed.stdout
    assert scene.done(file)["source"]["name"].endswith("a.h5:/frames")


def test_32_a_group_or_a_choice_lists_what_there_is(scene: Scene) -> None:
    file = scene.folder / "a.h5"
    with h5py.File(file, "w") as opened:
        opened["night/frames"], opened["night/dark"], opened["time"] = matrix(), matrix()[:20], np.arange(5)
    for options in ((), ("--matrix", "night")):
        text = scene.refused(file, *options)
        assert "holds 2 matrices and none was named" in text
        assert "/night/frames  60 × 40 float64" in text
        assert "Name one: --matrix /night/frames" in text


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (np.arange(5.0), "1-D, and a matrix has 2 axes"),
        (np.float64(3), "a single value"),
        (h5py.Empty("f8"), "it holds no values"),
        (np.zeros((0, 5)), "it is empty"),
        (np.zeros((5, 0)), "it is empty"),
        (np.zeros((3, 4, 5)), "3-D, and nothing says which of its axes are the samples"),
    ],
)
def test_33_shapes_that_are_no_matrix_are_refused(scene: Scene, values: object, words: str) -> None:
    with h5py.File(scene.folder / "a.h5", "w") as opened:
        opened["x"] = values
    for options in ((), ("--matrix", "x")):
        assert words in scene.refused(scene.folder / "a.h5", *options)


@pytest.mark.parametrize("shape", [(1, 40), (40, 1), (1, 1)])
def test_33_one_row_and_one_column_work(scene: Scene, shape: tuple[int, int]) -> None:
    values = np.arange(1.0, 41)[: shape[0] * shape[1]].reshape(shape)
    with h5py.File(scene.folder / "a.h5", "w") as opened:
        opened["x"] = values
    found = scene.done(scene.folder / "a.h5", "--center", "none")
    assert np.allclose(found["singular_values"], [np.linalg.norm(values)], rtol=1e-12)


@pytest.mark.parametrize(
    ("dtype", "words"),
    [
        (h5py.string_dtype(), "not numbers but text"),
        (np.dtype("S5"), "not numbers but text"),
        (h5py.vlen_dtype(np.dtype("f8")), "not numbers but lists of unequal length"),
        (h5py.ref_dtype, "not numbers but references to other objects"),
        (np.dtype([("depth", "f4"), ("time", "i8")]), "not numbers but records of depth, time"),
        (np.dtype("V7"), "not numbers but opaque bytes"),
    ],
)
def test_34_types_that_are_no_numbers_are_refused_by_name(scene: Scene, dtype: np.dtype, words: str) -> None:
    with h5py.File(scene.folder / "a.h5", "w") as opened:
        opened.create_dataset("x", (5, 4), dtype)
    assert words in scene.refused(scene.folder / "a.h5", "--matrix", "x")

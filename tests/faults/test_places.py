"""Where a result may go, one run at a time, and paths of every kind."""

from __future__ import annotations

import os
import shlex
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
import zarr
from fault_samples import OPTIONS, Night, as_words, bits, heights, result_bits, run, write_hdf5

import bigsvd
from bigsvd.factors import OutputLock, Place


# --------------------------------------------------------------------------------------------------- 46: what is there
def test_46_an_earlier_result_is_replaced_only_when_asked(night: Night) -> None:
    before = bits(night.out)
    ended = run("decompose", night.file, "--out", night.out, *as_words(night.options))
    assert ended.exit_code == 2
    assert f"{night.out} exists" in ended.stderr
    assert "--overwrite" in ended.stderr
    assert bits(night.out) == before
    night.done()
    assert bigsvd.open_factors(night.out).rank == 4


@pytest.mark.parametrize("kind", ["file", "folder", "foreign store", "link"])
def test_46_what_is_no_result_is_never_replaced(kind: str, night: Night) -> None:
    shutil.rmtree(night.out)
    if kind == "file":
        night.out.write_text("years of work")
    elif kind == "folder":
        night.out.mkdir()
        (night.out / "thesis").write_text("years of work")
    elif kind == "foreign store":
        zarr.create_group(night.out, zarr_format=3)
    else:
        (night.folder / "elsewhere").mkdir()
        night.out.symlink_to(night.folder / "elsewhere")
    before = {path: path.lstat().st_mtime_ns for path in night.folder.rglob("*")}
    ended = night.decompose()
    assert ended.exit_code == 2
    assert str(night.out) in ended.stderr
    assert "never replaced" in ended.stderr
    assert {path: path.lstat().st_mtime_ns for path in night.folder.rglob("*")} == before


@pytest.mark.parametrize("place", ["heights.h5", "./heights.h5", "link.h5"])
def test_46_an_output_that_is_the_input_is_refused(place: str, night: Night) -> None:
    (night.folder / "link.h5").symlink_to(night.file)
    content = night.file.read_bytes()
    ended = run("decompose", night.file, "--out", night.folder / place, "--overwrite", *as_words(night.options))
    assert ended.exit_code == 2
    assert "the output is the input" in ended.stderr or "never replaced" in ended.stderr
    assert night.file.read_bytes() == content


@pytest.mark.parametrize("inside", ["", "heights", "new.zarr", "heights/new.zarr"])
def test_46_an_output_in_or_over_the_input_store_is_refused(inside: str, night: Night, tmp_path: Path) -> None:
    store = tmp_path / "store.zarr"
    zarr.create_group(store).create_array("heights", data=heights(), chunks=(320, 160))
    before = bits(store)
    words = ("--matrix", "heights", "--overwrite", *as_words(night.options))
    ended = run("decompose", store, "--out", store / inside, *words)
    assert ended.exit_code == 2, ended.output
    assert "input" in ended.stderr or "never replaced" in ended.stderr
    assert bits(store) == before


# ---------------------------------------------------------------------------------------------- 49: one run, one result
def test_49_a_second_run_of_the_same_output_is_refused_and_named(night: Night) -> None:
    place = Place.at(night.out)
    lock = OutputLock(place.lock, place.out)
    lock.acquire()
    try:
        text = night.refused(2)
    finally:
        lock.release()
    assert f"another run is writing {night.out}" in text
    assert f"process {os.getpid()} on " in text
    assert str(place.lock) in text
    night.done()


def test_49_of_two_runs_begun_together_one_makes_the_result_and_one_is_refused(night: Night) -> None:
    other = Night(night.folder, night.file, night.folder / "alone.zarr", night.options)
    wanted = other.done(save_every=5)
    words = ["decompose", night.file, "--out", night.out, "--overwrite", "--quiet", *as_words(night.options)]
    line = [sys.executable, "-m", "bigsvd", *map(str, words)]
    runs = [subprocess.Popen(line, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) for _ in range(2)]
    told = [each.communicate(timeout=120)[1] for each in runs]
    codes = sorted(each.returncode for each in runs)
    # Both end well where one began after the other had ended.
    assert codes in ([0, 2], [0, 0]), told
    if codes == [0, 2]:
        assert any("another run is writing" in words for words in told)
    # Waves of these processes are whole sweeps, so only the values, not the bits, are those of the test's own run.
    assert result_bits(night.out).keys() == wanted.keys()
    assert bigsvd.open_factors(night.out).certificate.tolerance_met
    assert not night.journal.exists()


# ------------------------------------------------------------------------------------------------------------ 54: paths
@pytest.mark.parametrize(
    "name",
    [
        "a night at sea", "Gezeiten–Tümpel 潮だまり", "it's; $(touch x) & 'quoted'", "-starts-with-a-dash",
        "x" * 200, "new\nline", "trailing ", "%s %d {0}",
    ],
)  # fmt: skip
def test_54_names_of_every_kind_work(name: str, night: Night) -> None:
    folder = night.folder / name
    folder.mkdir()
    file = shutil.copy(night.file, folder / f"{name[:40]}.h5")
    odd = Night(folder, Path(file), folder / f"{name[:40]}.zarr", night.options)
    odd.done()
    assert bigsvd.open_factors(odd.out).rank == 4
    text = run("inspect", odd.file)
    assert text.exit_code == 0
    if name.isprintable():
        line = next(line for line in text.stdout.splitlines() if line.strip().startswith("bigsvd decompose"))
        assert str(odd.file) in shlex.split(line)
    assert not (night.folder / "x").exists()


def test_54_a_name_that_is_no_text_works(night: Night) -> None:
    folder = Path(os.fsdecode(os.fsencode(night.folder) + b"/night\xff"))
    try:
        folder.mkdir()
    except OSError:
        pytest.skip("this file system takes no such names")
    file = shutil.copy(night.file, folder / "heights.h5")
    Night(folder, Path(file), folder / "out.zarr", night.options).done()


def test_54_home_dots_and_links_are_followed(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("HOME", str(night.folder))
    (night.folder / "a" / "b").mkdir(parents=True)
    (night.folder / "way").symlink_to(night.folder / "a")
    words = as_words(OPTIONS)
    for number, out in enumerate(("~/one.zarr", f"{night.folder}/a/../two.zarr", f"{night.folder}/way/b/three.zarr")):
        ended = run("decompose", "~/heights.h5", "--out", out, "--quiet", *words)
        assert ended.exit_code == 0, ended.output
        place = (night.folder / "one.zarr", night.folder / "two.zarr", night.folder / "a/b/three.zarr")[number]
        assert bigsvd.open_factors(place).rank == 4


def test_54_a_loop_of_links_is_refused_in_words(night: Night) -> None:
    (night.folder / "here").symlink_to(night.folder / "there")
    (night.folder / "there").symlink_to(night.folder / "here")
    night.file = night.folder / "here" / "heights.h5"
    assert "here" in night.refused(2)
    ended = run("decompose", write_hdf5(night.folder / "x.h5"), "--out", night.folder / "here" / "o.zarr", "--rank", 2)
    assert ended.exit_code == 2, ended.output
    assert "here" in ended.stderr


def test_54_a_path_too_long_is_refused_in_words(night: Night) -> None:
    ended = run("decompose", night.file, "--out", night.folder / ("x" * 300), "--rank", 2)
    assert ended.exit_code == 2
    assert "too long" in ended.stderr
    night.file = night.folder / "/".join(["y" * 200] * 30)
    assert "Error: " in night.refused(2)

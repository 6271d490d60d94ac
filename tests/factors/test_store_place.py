"""Where a result may go; what a crash at any moment leaves; one writer at a time."""

import errno
import fcntl
import json
import os
import resource
import shutil
import signal
import socket
import stat
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import zarr
from factor_samples import Sample, small_chunks

from bigsvd.errors import DamagedResultError, OptionError, ResultError, ResultExistsError
from bigsvd.factors import check_output, open_factors, place, writer
from bigsvd.factors.files import FolderFiles
from bigsvd.factors.lock import OutputLock
from bigsvd.factors.place import Place

HERE = Path(__file__).parent


def listing(folder):
    """Every path below a folder with what it holds."""
    return {
        path.relative_to(folder).as_posix(): os.readlink(path)
        if path.is_symlink()
        else path.read_bytes()
        if path.is_file()
        else None
        for path in sorted(folder.rglob("*"))
    }


def refused(tmp_path, out, error=ResultError, *, overwrite=False, source_path=None, **more):
    """The message of a refusal, which must have changed nothing."""
    before = listing(tmp_path)
    with pytest.raises(error) as caught:
        check_output(out, overwrite=overwrite, source_path=source_path, **more)
    assert listing(tmp_path) == before
    return str(caught.value)


@pytest.fixture
def out(tmp_path):
    return tmp_path / "out.zarr"


@pytest.fixture
def old(out):
    """An earlier result, seed 3."""
    Sample().write(out)
    return out


def seed_of(path):
    return open_factors(path).attributes["seed"]


# --- before the work


def test_a_free_place_is_accepted_and_nothing_changed(tmp_path, out):
    check_output(out, overwrite=False, source_path=tmp_path / "in.h5")
    check_output(out, overwrite=True, source_path=None)
    assert listing(tmp_path) == {}


def test_an_earlier_result_needs_overwrite(tmp_path, old):
    assert "Add --overwrite" in refused(tmp_path, old, ResultExistsError)
    check_output(old, overwrite=True, source_path=None)


@pytest.mark.parametrize("overwrite", [False, True])
@pytest.mark.parametrize("kind", ["file", "folder", "empty folder", "zarr", "link", "dangling link"])
def test_a_stranger_is_never_replaced(tmp_path, out, kind, overwrite):
    if kind == "file":
        out.write_text("mine")
    elif kind.endswith("folder"):
        (out / "sub").mkdir(parents=True) if kind == "folder" else out.mkdir()
    elif kind == "zarr":
        zarr.create_array(out, shape=(4,), dtype="f8")[...] = 1
    else:
        target = tmp_path / "target.zarr"
        if kind == "link":
            Sample().write(target)
        out.symlink_to(target)
    message = refused(tmp_path, out, ResultExistsError, overwrite=overwrite)
    assert "Choose another --out." in message
    before = listing(tmp_path)
    with pytest.raises(ResultExistsError):
        Sample().write(out, overwrite=overwrite)
    assert listing(tmp_path) == before


def test_a_result_with_a_strangers_file_in_it_is_not_replaced(tmp_path, old):
    (old / "notes.txt").write_text("mine")
    assert "notes.txt" in refused(tmp_path, old, ResultExistsError, overwrite=True)
    (old / "notes.txt").rename(old / ".DS_Store")
    check_output(old, overwrite=True, source_path=None)


def test_a_damaged_or_unfinished_result_may_be_replaced(tmp_path, old):
    (old / "left_vectors/c.0.0").unlink()
    check_output(old, overwrite=True, source_path=None)
    Sample(seed=8).write(old, overwrite=True)
    assert seed_of(old) == 8


def test_the_output_may_not_be_the_input_nor_inside_nor_around_it(tmp_path):
    zarr.create_group(tmp_path / "in.zarr").create_array("a/b", shape=(4, 4), dtype="f8")
    source = tmp_path / "in.zarr"
    assert "is the input" in refused(tmp_path, source, source_path=source, overwrite=True)
    assert "lies inside the input" in refused(tmp_path, source / "out.zarr", source_path=source)
    assert "lies inside the input" in refused(tmp_path, source / "a" / "o.zarr", source_path=source / "a" / "b")
    assert "lies inside the input" in refused(tmp_path, source / "out.zarr", source_path=source / "a" / "b")
    (tmp_path / "deep").mkdir()
    (tmp_path / "deep/in.h5").write_text("data")
    assert "holds the input" in refused(tmp_path, tmp_path / "deep", source_path=tmp_path / "deep/in.h5")
    (tmp_path / "x.zarr.partial").mkdir()
    assert "uses x.zarr.partial" in refused(tmp_path, tmp_path / "x.zarr", source_path=tmp_path / "x.zarr.partial")
    os.link(tmp_path / "deep/in.h5", tmp_path / "hard.h5")
    assert "is the input" in refused(tmp_path, tmp_path / "hard.h5", source_path=tmp_path / "deep/in.h5")
    (tmp_path / "way").symlink_to(source)
    assert "lies inside the input" in refused(tmp_path, tmp_path / "way/out.zarr", source_path=source)
    check_output(tmp_path / "deep/out.zarr", overwrite=False, source_path=tmp_path / "deep/in.h5")


def test_a_result_is_not_replaced_by_factors_of_itself(tmp_path, old):
    assert "is the input" in refused(tmp_path, old, source_path=old / "left_vectors", overwrite=True)


def test_a_missing_or_unwritable_folder_is_refused(tmp_path, monkeypatch):
    assert "does not exist" in refused(tmp_path, tmp_path / "no/out.zarr")
    (tmp_path / "file").write_text("")
    assert "is not a folder" in refused(tmp_path, tmp_path / "file/out.zarr")
    monkeypatch.setattr(os, "access", lambda path, mode: False)
    assert "is not writable" in refused(tmp_path, tmp_path / "out.zarr")


@pytest.mark.parametrize("name", ["out.zarr.partial", "out.zarr.replaced", "out.lock", ".."])
def test_names_of_unfinished_work_are_refused(tmp_path, name):
    assert "a result" in refused(tmp_path, tmp_path / name)


def test_a_name_too_long_for_its_companions_is_refused(tmp_path):
    assert "8 bytes too long" in refused(tmp_path, tmp_path / ("x" * 254))
    check_output(tmp_path / ("x" * 246), overwrite=False, source_path=None)


def test_too_full_a_device_is_refused_with_both_sizes(tmp_path, out):
    assert "the result takes up to 1024 TiB, but " in refused(tmp_path, out, result_bytes=2**50)


@pytest.mark.parametrize("kind", ["link", "file", "strangers", "other zarr"])
def test_a_partial_that_is_not_ours_is_refused(tmp_path, out, kind):
    partial = tmp_path / "out.zarr.partial"
    if kind == "link":
        (tmp_path / "target").mkdir()
        partial.symlink_to(tmp_path / "target")
    elif kind == "file":
        partial.write_text("mine")
    elif kind == "other zarr":
        zarr.create_group(partial, zarr_format=3)
    else:
        (partial / "thesis").mkdir(parents=True)
    assert "out.zarr.partial is in the way" in refused(tmp_path, out)
    before = listing(tmp_path)
    with pytest.raises(ResultError, match="in the way"):
        Sample().write(out)
    assert listing(tmp_path) == before


def test_a_partial_or_result_of_another_user_is_refused(tmp_path, old, monkeypatch):
    (tmp_path / "new.zarr.partial").mkdir()
    monkeypatch.setattr(os, "geteuid", lambda: os.getuid() + 1)
    assert "belongs to another user" in refused(tmp_path, tmp_path / "new.zarr")
    assert "belongs to another user" in refused(tmp_path, old, overwrite=True)


# --- while writing


def test_the_partial_is_private_and_the_result_follows_the_umask(out):
    before = os.umask(0o027)
    try:
        with Sample().writer(out) as open_writer:
            assert stat.S_IMODE(out.with_name("out.zarr.partial").stat().st_mode) == 0o700
            Sample().fill(open_writer)
            open_writer.finish(**Sample().parts)
    finally:
        os.umask(before)
    assert stat.S_IMODE(out.stat().st_mode) == 0o750
    assert stat.S_IMODE((out / "left_vectors/c.0.0").stat().st_mode) == 0o640


def test_every_file_and_folder_is_flushed_before_the_rename(out, monkeypatch):
    flushed, renamed, rename = set(), [], os.rename
    monkeypatch.setattr(os, "fsync", lambda handle: flushed.add(os.fstat(handle).st_ino))
    monkeypatch.setattr(os, "rename", lambda *names: (renamed.append(len(flushed)), rename(*names)))
    Sample().write(out)
    everything = {path.stat().st_ino for path in (out, out.parent, *out.rglob("*"))}
    assert flushed == everything
    assert renamed == [len(everything) - 1]


def test_leaving_without_finish_leaves_nothing_and_the_earlier_result(tmp_path, old):
    before = listing(tmp_path)
    with Sample(seed=8).writer(old, overwrite=True) as open_writer:
        Sample(seed=8).fill(open_writer)
    assert listing(tmp_path) == before
    with pytest.raises(OptionError), Sample(seed=8).writer(old, overwrite=True) as open_writer:
        open_writer.write_vectors("left", 3, Sample().left[:5])
    assert listing(tmp_path) == before


def test_a_stale_partial_is_removed_first(tmp_path, old):
    old.rename(tmp_path / "out.zarr.partial")
    (tmp_path / "out.zarr.partial/zarr.json").write_text("")
    Sample(seed=8).write(old)
    assert [path.name for path in tmp_path.iterdir()] == ["out.zarr"]
    assert seed_of(old) == 8


def test_what_zarr_had_half_written_when_its_process_was_killed_is_no_hindrance(tmp_path, out):
    """Found by scripts/kill-storm: one kill in some hundreds falls between the writing and the renaming of metadata."""
    partial = tmp_path / "out.zarr.partial"
    (partial / "left_vectors").mkdir(parents=True)
    (partial / "zarr.e453be16f3ec44aa8268d0093bfaefa3.partial").write_text('{"shap')
    (partial / "left_vectors" / "zarr.0f53be16f3ec44aa8268d0093bfaefa3.partial").write_text("")
    Sample().write(out)
    assert [path.name for path in tmp_path.iterdir()] == ["out.zarr"]


def test_a_second_writer_is_refused_and_told_who_writes(tmp_path, out):
    with Sample().writer(out) as first:
        Sample().fill(first)
        message = refused(tmp_path, out)
        assert "another run is writing" in message
        assert f"process {os.getpid()} on " in message
        with pytest.raises(ResultError, match="another run is writing"):
            Sample(seed=8).write(out)
        first.finish(**Sample().parts)
    assert seed_of(out) == 3
    assert [path.name for path in tmp_path.iterdir()] == ["out.zarr"]


@pytest.mark.parametrize(("record", "free"), [("alive", False), ("dead", True), ("elsewhere", False), ("", True)])
def test_where_locks_do_not_work_the_record_decides(tmp_path, out, monkeypatch, record, free):
    def unsupported(handle, how):
        raise OSError(errno.ENOLCK, "No locks available")

    ended = subprocess.Popen([sys.executable, "-c", ""])
    ended.wait()
    pid = {"dead": ended.pid}.get(record, os.getpid())
    host = "another-host" if record == "elsewhere" else socket.gethostname()
    text = json.dumps({"pid": pid, "host": host, "since": "2001-01-01T00:00:00+00:00"}) if record else ""
    (tmp_path / "out.zarr.lock").write_text(text)
    monkeypatch.setattr(fcntl, "flock", unsupported)
    if free:
        Sample().write(out)
        assert [path.name for path in tmp_path.iterdir()] == ["out.zarr"]
    else:
        text = refused(tmp_path, out)
        assert f"process {pid} on {host}" in text
        assert "keeps no locks" in text
        assert f'rm "{tmp_path / "out.zarr.lock"}"' in text
        with pytest.raises(ResultError, match="another run is writing"):
            Sample().write(out)


def test_a_lock_file_that_is_a_link_is_refused(tmp_path, out):
    (tmp_path / "elsewhere").write_text("mine")
    (tmp_path / "out.zarr.lock").symlink_to(tmp_path / "elsewhere")
    refused(tmp_path, out)
    with pytest.raises(ResultError, match="lock file"):
        Sample().write(out)
    assert (tmp_path / "elsewhere").read_text() == "mine"


def test_a_device_that_refuses_leaves_the_earlier_result(tmp_path, old):
    before = listing(tmp_path)
    sample = Sample(rows=4_000, columns=12, seed=8)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (50_000, hard))
    try:
        with pytest.raises(ResultError, match=r"could not be written \(left vectors\): File too large") as caught:
            sample.write(old, overwrite=True)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert "are free now" in str(caught.value)
    assert listing(tmp_path) == before


def test_a_full_disk_at_the_last_part_leaves_the_earlier_result(tmp_path, old, monkeypatch):
    before = listing(tmp_path)

    def full(self, name, data):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(FolderFiles, "replace", full)
    with pytest.raises(ResultError, match=r"could not be written \(last part\): No space left"):
        Sample(seed=8).write(old, overwrite=True)
    assert listing(tmp_path) == before


@pytest.mark.parametrize("name", ["left_vectors/c.1.0", "right_vectors/c.0.0", "spectrum/lower/c.0", "zarr.json"])
def test_a_device_that_gives_other_bytes_back_is_caught(tmp_path, old, monkeypatch, name):
    small_chunks(monkeypatch, 16)
    before, settle = listing(tmp_path), FolderFiles.settle

    def rot(self, asked=None):
        settle(self, asked)
        if name == "zarr.json" != asked:
            return
        data = bytearray((self.path / name).read_bytes())
        data[-6] ^= 16
        (self.path / name).write_bytes(data)

    monkeypatch.setattr(FolderFiles, "settle", rot)
    with pytest.raises(DamagedResultError, match=f"^{name.removesuffix('/c.0')}: what was read back is not what was"):
        Sample(seed=8).write(old, overwrite=True)
    assert listing(tmp_path) == before


def test_what_appears_meanwhile_is_kept_and_so_is_the_complete_result(tmp_path, out):
    def write():
        with Sample().writer(out) as open_writer:
            Sample().fill(open_writer)
            out.write_text("mine")
            open_writer.finish(**Sample().parts)

    with pytest.raises(ResultExistsError, match="appeared while the result was computed") as caught:
        write()
    assert out.read_text() == "mine"
    command = caught.value.remedy.split(": ", 1)[1]
    subprocess.run(command, shell=True, check=True)
    assert seed_of(tmp_path / "out.zarr-2") == 3


# --- replacing


def test_overwriting_replaces_the_whole_store(tmp_path, old):
    factors = Sample(rows=40, columns=9, rank=3, seed=8).write(old, overwrite=True)
    assert factors.shape == open_factors(old).shape == (40, 9)
    assert [path.name for path in tmp_path.iterdir()] == ["out.zarr"]


def test_a_failing_second_rename_takes_the_earlier_result_back(tmp_path, old, monkeypatch):
    before, rename = listing(tmp_path), os.rename

    def fails(source, target):
        if str(source).endswith(".partial"):
            raise OSError(errno.EIO, "Input/output error")
        rename(source, target)

    monkeypatch.setattr(place.os, "rename", fails)
    with pytest.raises(ResultError, match="Input/output error"):
        Sample(seed=8).write(old, overwrite=True)
    monkeypatch.undo()
    assert listing(tmp_path) == before


KILL = """
import os, signal, sys
sys.path.insert(0, sys.argv[1])
from pathlib import Path
from factor_samples import Sample
from bigsvd.factors import place, writer
moment, out = sys.argv[2], Path(sys.argv[3])
def die(*_, **__):
    os.kill(os.getpid(), signal.SIGKILL)
rename = os.rename
def between(source, target):
    die() if str(source).endswith(".partial") else rename(source, target)
if moment == "between the renames":
    os.rename = between
elif moment == "before the old one is removed":
    remove = place.shutil.rmtree
    place.shutil.rmtree = lambda path, **more: die() if str(path).endswith(".replaced") else remove(path, **more)
elif moment == "before the exchange":
    writer.install = die
elif moment == "while streaming":
    Sample.parts = property(die)
Sample(seed=8).write(out, overwrite=True)
"""


@pytest.mark.parametrize(
    ("moment", "seed"),
    [
        ("while streaming", 3),
        ("before the exchange", 3),
        ("between the renames", 8),
        ("before the old one is removed", 8),
    ],
)
def test_a_killed_writer_leaves_the_earlier_or_the_new_result_whole(tmp_path, old, moment, seed):
    run = subprocess.run([sys.executable, "-c", KILL, str(HERE), moment, str(old)], capture_output=True, check=False)
    assert run.returncode == -signal.SIGKILL, run.stderr.decode()
    assert len(list(tmp_path.iterdir())) > 1
    if moment == "between the renames":
        assert not old.exists()
        assert "left by a process that died" in refused(tmp_path, old, ResultExistsError)
    again = shutil.copytree(tmp_path, tmp_path.with_name(tmp_path.name + "-copy"))
    assert seed_of(old) == seed
    np.testing.assert_array_equal(open_factors(old).left_vectors[...], Sample(seed=seed).left)
    assert not (tmp_path / "out.zarr.replaced").exists()
    # The same moment, met by the next run instead of by a reader.
    Sample(seed=5).write(again / "out.zarr", overwrite=True)
    assert seed_of(again / "out.zarr") == 5
    assert [path.name for path in again.iterdir()] == ["out.zarr"]


def test_the_earlier_result_comes_back_where_the_new_one_is_not_whole(tmp_path, old):
    old.rename(tmp_path / "out.zarr.replaced")
    with Sample(seed=8).writer(tmp_path / "x.zarr") as open_writer:
        Sample(seed=8).fill(open_writer)
        shutil.copytree(tmp_path / "x.zarr.partial", tmp_path / "out.zarr.partial")
    assert seed_of(old) == 3
    assert not (tmp_path / "out.zarr.replaced").exists()


def test_a_crash_is_told_where_the_folder_cannot_be_written(tmp_path, old, monkeypatch):
    old.rename(tmp_path / "out.zarr.replaced")
    before = listing(tmp_path)
    monkeypatch.setattr(os, "access", lambda path, mode: False)
    with pytest.raises(ResultError, match="a run died while it replaced the earlier result"):
        open_factors(old)
    assert listing(tmp_path) == before


def test_a_strangers_replaced_is_neither_used_nor_removed(tmp_path, old):
    (tmp_path / "out.zarr.replaced").mkdir()
    (tmp_path / "out.zarr.replaced/thesis").write_text("mine")
    assert seed_of(old) == 3
    assert "is in the way" in refused(tmp_path, old, ResultExistsError, overwrite=True)
    shutil.rmtree(old)
    assert "is not a bigsvd result" in refused(tmp_path, old, ResultExistsError)
    assert (tmp_path / "out.zarr.replaced/thesis").read_text() == "mine"


def test_two_results_of_which_the_newer_is_damaged_are_left_to_the_user(tmp_path, old):
    shutil.copytree(old, tmp_path / "out.zarr.replaced")
    (old / "left_vectors/c.0.0").unlink()
    assert "Keep the one you trust as out.zarr" in refused(tmp_path, old, ResultExistsError, overwrite=True)
    with pytest.raises(DamagedResultError):
        open_factors(old)
    assert (tmp_path / "out.zarr.replaced").is_dir()


def test_a_result_opens_while_its_writer_removes_the_earlier_one(tmp_path, old):
    shutil.copytree(old, tmp_path / "out.zarr.replaced")
    lock = OutputLock(Place.at(old).lock, old)
    lock.acquire()
    assert seed_of(old) == 3
    old.rename(tmp_path / "out.zarr.partial")
    with pytest.raises(ResultError, match="another run is writing"):
        open_factors(old)
    lock.release()
    assert seed_of(old) == 3
    assert [path.name for path in tmp_path.iterdir()] == ["out.zarr"]


def test_a_lock_file_removed_while_it_is_taken_is_made_again(out, monkeypatch):
    """The holder before us removes its file after we opened it: a lock on that file would be a lock on nothing."""
    lock, flock, calls = OutputLock(Place.at(out).lock, out), fcntl.flock, []

    def late(handle, how):
        calls.append(handle)
        if len(calls) == 1:
            lock.path.unlink()
        flock(handle, how)

    monkeypatch.setattr(fcntl, "flock", late)
    lock.acquire()
    assert len(calls) == 2
    with pytest.raises(ResultError, match="another run is writing"):
        OutputLock(lock.path, out).acquire()
    lock.release()


def test_home_and_dots_in_a_path_are_understood(tmp_path, monkeypatch):
    monkeypatch.setenv("HOME", str(tmp_path))
    (tmp_path / "a").mkdir()
    assert Place.at(Path("~/a/../out.zarr")).out == tmp_path / "out.zarr"
    Sample().write(Path("~/a/../out.zarr"))
    assert seed_of("~/out.zarr") == 3


def test_check_output_is_what_the_writer_itself_asks(out, monkeypatch):
    asked = []
    monkeypatch.setattr(writer, "check_output", lambda path, **more: asked.append(more))
    Sample().write(out)
    assert asked[0]["result_bytes"] > 0

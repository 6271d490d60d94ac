"""The file under the run: cut short, replaced, appended to, left by a writer that crashed, or locked."""

from __future__ import annotations

import fcntl
import os
import re
import shutil
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest
from fault_samples import CHUNK, Night, fetches, heights, meanwhile, run, whole_bits, write_hdf5

from bigsvd.journal import read_standing


def disturbed(night: Night, action: Callable[[], None], monkeypatch: pytest.MonkeyPatch) -> str:
    """Run while something happens to the file: it must stop with what it kept, and say so; returns the words."""
    with monkeypatch.context() as patch:
        happened = meanwhile(patch, action, after=fetches(night, 2, 0.3))
        text = night.refused(1)
    assert happened
    return text


@pytest.fixture
def streamed(night: Night, monkeypatch: pytest.MonkeyPatch) -> Night:
    """A night whose file is read in every sweep, as one larger than memory is."""
    from bigsvd.sweep import panels

    begin = panels.PanelReader.__init__

    def never_held(self: panels.PanelReader, *words: object, keep: bool = False) -> None:
        begin(self, *words, keep=False)  # type: ignore[arg-type]

    monkeypatch.setattr(panels.PanelReader, "__init__", never_held)
    return night


def test_21_a_file_cut_short_while_it_is_read_stops_the_run(streamed: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    size = streamed.file.stat().st_size
    text = disturbed(streamed, lambda: os.truncate(streamed.file, size // 2), monkeypatch)
    assert f"{streamed.file} changed while it was being read" in text
    assert f"bytes: {size:,}, now {size // 2:,}" in text
    assert read_standing(streamed.journal).sweep >= 1
    # The same command meets a file that is damaged, and leaves what was kept.
    before = sorted(path.name for path in streamed.journal.iterdir())
    assert "cut short" in streamed.refused(2)
    assert sorted(path.name for path in streamed.journal.iterdir()) == before


@pytest.mark.parametrize("how", ["replaced", "appended to", "rewritten in place", "removed"])
def test_22_a_file_that_changes_while_it_is_read_stops_the_run(
    how: str, streamed: Night, monkeypatch: pytest.MonkeyPatch
) -> None:
    file, other = streamed.file, streamed.folder / "other.h5"
    write_hdf5(other, heights() + 1)

    def change() -> None:
        if how == "replaced":
            os.replace(other, file)
        elif how == "appended to":
            with open(file, "ab") as end:
                end.write(b"tide")
        elif how == "removed":
            file.unlink()
        else:
            with open(file, "r+b") as middle:
                middle.seek(file.stat().st_size // 2)
                middle.write(b"tide")

    text = disturbed(streamed, change, monkeypatch)
    assert str(file) in text
    assert "changed while it was being read" in text or "cannot be found now" in text
    assert "To go on" not in text
    standing = read_standing(streamed.journal)
    assert standing.sweep >= 1
    if how != "removed":
        refused = streamed.refused(2)
        assert "the input fingerprint: " in refused
        assert "--start-over" in refused
        assert read_standing(streamed.journal).saved == standing.saved


def test_22_a_file_put_back_as_it_was_is_gone_on_with(streamed: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    aside = streamed.folder / "aside.h5"
    wanted = whole_bits(streamed)
    disturbed(streamed, lambda: os.rename(streamed.file, aside), monkeypatch)
    os.rename(aside, streamed.file)
    assert streamed.done() == wanted


def test_22_a_change_that_no_time_or_size_shows_is_found_in_the_next_sweep(
    streamed: Night, monkeypatch: pytest.MonkeyPatch
) -> None:
    """As on a mounted file system whose attributes are old: only the words that were read tell."""
    from bigsvd.source import stamp

    monkeypatch.setattr(stamp.FileStamp, "require_unchanged", lambda self: None)
    file = streamed.file
    with h5py.File(file) as opened:
        place = opened["heights"].id.get_chunk_info(70).byte_offset
    row = 70 * CHUNK
    when = file.stat()

    def change() -> None:
        with open(file, "r+b") as middle:
            middle.seek(place)
            middle.write(np.float64(3.25).tobytes())
        os.utime(file, ns=(when.st_atime_ns, when.st_mtime_ns))

    text = disturbed(streamed, change, monkeypatch)
    assert "heights changed under the run: sweep 2 read other values than sweep 1" in text
    first, last = re.search(r"1 of 50 panels differ, the first at rows ([0-9,]+)–([0-9,]+),", text).groups()
    assert int(first.replace(",", "")) <= row <= int(last.replace(",", ""))
    assert read_standing(streamed.journal).sweep >= 1


CRASH = """
import os, signal, sys
import h5py, numpy as np
file = h5py.File(sys.argv[1], "w", libver=sys.argv[2])
heights = file.create_dataset("heights", (1000, 60), "f8", chunks=(50, 60))
heights[:500] = np.random.default_rng(1).standard_normal((500, 60))
file.flush()
os.kill(os.getpid(), signal.SIGKILL)
"""


@pytest.mark.parametrize(("row", "version", "words"), [(23, "earliest", "is not complete"), (24, "latest", "h5clear")])
def test_23_and_24_what_a_crashed_writer_left_is_not_taken_for_the_whole(
    row: int, version: str, words: str, night: Night
) -> None:
    crashed = subprocess.run([sys.executable, "-c", CRASH, str(night.file), version], check=False)
    assert crashed.returncode == -signal.SIGKILL
    text = night.refused(2)
    assert words in text
    assert str(night.file) in text
    if row == 23:
        assert "10 of 20 chunks are absent" in text
        assert "first absent: " in text


def test_25_a_file_that_its_writer_holds_is_refused_and_explained(night: Night) -> None:
    with open(night.file, "rb") as writer:
        fcntl.flock(writer, fcntl.LOCK_EX)
        text = night.refused(2)
    assert f"{night.file} is locked: another program has it open for writing" in text
    assert "Close it there, or work on a copy" in text
    night.done()


def test_26_a_file_system_without_locks_is_read_without(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    """Best effort is the library's word for it: where the system answers that it has no locks, none is taken."""
    asked: list[object] = []
    opened = h5py.File.__init__

    def watched(self: h5py.File, *words: object, **options: object) -> None:
        # A dataset's own file comes by its number.
        if words and isinstance(words[0], str):
            asked.append(options.get("locking"))
        opened(self, *words, **options)

    monkeypatch.setattr(h5py.File, "__init__", watched)
    night.done()
    assert asked
    assert set(asked) == {"best-effort"}


def test_26_a_read_only_file_system_is_read(night: Night, mount: Callable[[str, str], Path]) -> None:
    place = mount("archive", "size=16m")
    shutil.copy(night.file, place)
    subprocess.run(["mount", "-o", "remount,ro", str(place)], check=True)
    ended = run("decompose", place / "heights.h5", "--out", night.folder / "new.zarr", "--rank", 3, "--quiet")
    assert ended.exit_code == 0, ended.output

"""The file under the run: cut short, replaced, appended to, changed without a trace, or on a read-only device."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
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


def test_26_a_read_only_file_system_is_read(night: Night, mount: Callable[[str, str], Path]) -> None:
    place = mount("archive", "size=16m")
    shutil.copy(night.file, place)
    subprocess.run(["mount", "-o", "remount,ro", str(place)], check=True)
    ended = run("decompose", place / "heights.h5", "--out", night.folder / "new.zarr", "--rank", 3, "--quiet")
    assert ended.exit_code == 0, ended.output

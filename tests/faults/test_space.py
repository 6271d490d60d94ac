"""Devices that are full, too small, read-only or not ours: asked before reading, said with place and bytes later."""

from __future__ import annotations

import errno
import os
import re
import resource
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from fault_samples import Night, fetches, meanwhile, whole_bits

from bigsvd.journal import read_standing
from bigsvd.sweep import Scratch
from bigsvd.units import parse_bytes

Mount = Callable[[str, str], Path]


def fill(place: Path) -> None:
    """Use up every byte of a small device."""
    with open(place / "filler", "wb", buffering=0) as file:
        try:
            while True:
                file.write(bytes(4096))
        except OSError as error:
            if error.errno != errno.ENOSPC:
                raise


# ------------------------------------------------------------------------------------------------- before it reads
@pytest.mark.parametrize("where", ["scratch", "out"])
def test_43_a_device_too_small_is_refused_before_reading(where: str, night: Night, mount: Mount) -> None:
    small = mount("small", "size=1m")
    if where == "scratch":
        text = night.refused(2, scratch=small)
        assert f"scratch: {_size(text, 'scratch')} in {small}" in text
        assert "give --scratch a folder on a larger device" in text
    else:
        other = Night(night.folder, night.file, small / "out.zarr")
        text = other.refused(2)
        for part in ("scratch", "journal", "result"):
            assert re.search(rf"\n    {part}: [0-9.]+ [KM]iB in {small}\n", text), text
        assert list(small.iterdir()) == []
    wanted, free = re.search(r"needs about (.*?) of disk, and (.*?) are free", text).groups()
    missing = re.search(r"missing: (.*)", text)[1]
    assert parse_bytes(wanted) - parse_bytes(free) == pytest.approx(parse_bytes(missing), rel=0.02)
    assert not night.journal.exists()


def _size(text: str, part: str) -> str:
    found = re.search(rf"{part}: ([0-9.]+ [KM]iB) in", text)
    assert found, text
    return found[1]


def test_43_what_a_stopped_run_wrote_already_is_not_asked_for_again(
    night: Night, mount: Mount, monkeypatch: pytest.MonkeyPatch
) -> None:
    from bigsvd.drive import keeping

    wanted = whole_bits(night)
    asked: list[int] = []
    require = keeping.require_room
    monkeypatch.setattr(
        keeping, "require_room", lambda needs: (asked.append(sum(need.missing for need in needs)), require(needs))
    )
    with monkeypatch.context() as patch:
        happened = meanwhile(patch, lambda: (_ for _ in ()).throw(KeyboardInterrupt), after=fetches(night, 3, 0.5))
        night.refused(130)
    assert happened
    assert night.done() == wanted
    assert asked[1] < asked[0] - 500_000


# -------------------------------------------------------------------------------------------------- while it is at work
@pytest.mark.parametrize("what", ["scratch", "journal", "result"])
def test_43_a_device_that_fills_up_later_stops_the_run_which_goes_on_when_there_is_room(
    what: str, night: Night, mount: Mount, monkeypatch: pytest.MonkeyPatch
) -> None:
    small = mount("small", "size=24m")
    options: dict[str, Any] = {}
    if what == "scratch":
        options["scratch"] = small
    else:
        # The scratch lies elsewhere, so that only the journal, or only the result, meets the full device.
        night = Night(small, night.file, shutil.copytree(night.out, small / "out.zarr"))
        (night.file.parent / "fast").mkdir()
        options["scratch"] = night.file.parent / "fast"
    wanted = whole_bits(night)
    with monkeypatch.context() as patch:
        if what == "result":
            from bigsvd.factors import FactorsWriter

            enter = FactorsWriter.__enter__
            patch.setattr(FactorsWriter, "__enter__", lambda self: (enter(self), fill(small))[0])
        else:
            assert meanwhile(patch, lambda: fill(small), after=fetches(night, 2, 0.4)) == []
        text = night.refused(1, **options)
    place = {"scratch": f"{small}/.out.zarr.", "journal": f"{night.journal}/sums-0", "result": str(night.out)}[what]
    assert place in text, text
    assert "No space left on device" in text
    if what == "result":
        assert re.search(r"it takes up to .*iB; .* are free now", text), text
    else:
        assert re.search(r"still to be written there \(.*\): about .*iB; free: .*; missing: .*iB", text), text
    standing = read_standing(night.journal)
    assert (standing.sweep >= 1, standing.damaged) == (True, ())
    assert "To go on, type:\n  bigsvd decompose " in text
    # Without room it is refused at once.
    assert "of disk, and " in night.refused(2, **options)
    (small / "filler").unlink()
    assert night.done(**options) == wanted
    names = {path.name for path in small.iterdir()}
    assert names <= {"out.zarr", "out.zarr.log"}
    if what != "scratch":
        assert list((night.file.parent / "fast").iterdir()) == []


@pytest.mark.parametrize("what", ["scratch", "journal", "result"])
def test_43_a_limit_on_the_size_of_files_stops_the_run_which_goes_on_without_it(
    what: str, night: Night, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The same where nothing may be mounted; the system answers EFBIG instead of ENOSPC."""
    from bigsvd.factors import FactorsWriter
    from bigsvd.journal import journal

    wanted = whole_bits(night)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)

    def limit(*_: object) -> None:
        resource.setrlimit(resource.RLIMIT_FSIZE, (20_000, hard))

    with monkeypatch.context() as patch:
        if what == "result":
            enter = FactorsWriter.__enter__
            patch.setattr(FactorsWriter, "__enter__", lambda self: (enter(self), limit())[0])
        elif what == "journal":
            write, calls = journal.write_record, []

            def limited(*words: Any) -> Any:
                calls.append(words)
                if len(calls) < 6:
                    return write(*words)
                limit()
                try:
                    return write(*words)
                finally:
                    resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))

            patch.setattr(journal, "write_record", limited)
        else:
            meanwhile(patch, limit, after=fetches(night, 2, 0.4))
        try:
            text = night.refused(1)
        finally:
            resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert "File too large" in text
    assert str(night.out if what == "result" else night.journal) in text
    if what != "result":
        assert "allowed: " in text
        assert "ulimit -f" in text
    assert read_standing(night.journal).sweep >= 1
    assert night.done() == wanted


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EDQUOT])
@pytest.mark.parametrize("call", ["ftruncate", "pwrite", "fdatasync"])
def test_43_every_call_that_may_find_no_room_is_said_with_its_place(
    call: str, number: int, night: Night, monkeypatch: pytest.MonkeyPatch
) -> None:
    true, calls = getattr(os, call), []

    def refuse(handle: int, *words: Any) -> Any:
        if "block-01" in os.readlink(f"/proc/self/fd/{handle}"):
            calls.append(handle)
            raise OSError(number, os.strerror(number))
        return true(handle, *words)

    wanted = whole_bits(night)
    with monkeypatch.context() as patch:
        patch.setattr(os, call, refuse)
        text = night.refused(1)
    assert calls
    assert os.strerror(number) in text
    assert str(night.out) in text
    assert read_standing(night.journal).sweep == 1
    assert night.done() == wanted


# --------------------------------------------------------------------------------------------- not writable, not ours
def test_46_a_read_only_folder_is_refused_before_reading(night: Night, mount: Mount) -> None:
    locked = mount("locked", "size=1m,ro")
    text = Night(night.folder, night.file, locked / "out.zarr").refused(2)
    assert "the folder of --out is not writable" in text
    assert str(locked) in text
    text = night.refused(2, scratch=locked)
    assert "not writable" in text
    assert str(locked) in text


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write everywhere")
def test_46_a_folder_without_permission_is_refused_before_reading(night: Night, tmp_path: Path) -> None:
    (tmp_path / "theirs").mkdir(mode=0o555)
    assert "is not writable" in Night(night.folder, night.file, tmp_path / "theirs" / "out.zarr").refused(2)


def test_46_a_folder_that_says_it_may_not_be_written_is_refused(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    access = os.access
    monkeypatch.setattr(os, "access", lambda path, mode: Path(path) != night.folder and access(path, mode))
    text = night.refused(2)
    assert "the folder of --out is not writable" in text


def test_43_a_device_that_becomes_read_only_stops_the_run(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    wanted, write = whole_bits(night), Scratch.write

    def refuse(self: Scratch, block: int, start: int, values: Any) -> None:
        if block == 1:
            raise OSError(errno.EROFS, os.strerror(errno.EROFS), str(self.folder))
        write(self, block, start, values)

    with monkeypatch.context() as patch:
        patch.setattr(Scratch, "write", refuse)
        text = night.refused(1)
    assert f"{os.strerror(errno.EROFS)} ({night.journal}/scratch)" in text
    assert "To go on, type:" in text
    assert night.done() == wanted

"""Room on devices: added up where several things go to one, what is there counted, other errors let through."""

from __future__ import annotations

import errno
import os
import shutil
from collections import namedtuple
from pathlib import Path

import pytest

from bigsvd.drive import space
from bigsvd.drive.space import Need, full_device_named, held_bytes, require_room
from bigsvd.errors import DiskFullError, OptionError, ResultError

MIB = 1 << 20
Usage = namedtuple("Usage", "total used free")


@pytest.fixture
def free(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """Bytes that every device has free, to be changed."""
    size = [10 * MIB]
    monkeypatch.setattr(shutil, "disk_usage", lambda path: Usage(100 * MIB, 0, size[0]))
    return size


def test_parts_on_one_device_are_added_up(tmp_path: Path, free: list[int]) -> None:
    needs = [Need("scratch", tmp_path, 6 * MIB), Need("journal", tmp_path, 5 * MIB)]
    with pytest.raises(DiskFullError) as caught:
        require_room(needs)
    assert caught.value.problem == "the run needs about 11 MiB of disk, and 10 MiB are free"
    assert caught.value.evidence == (
        f"scratch: 6 MiB in {tmp_path}", f"journal: 5 MiB in {tmp_path}", "missing: 1 MiB"
    )  # fmt: skip
    assert "--out or --scratch" in caught.value.remedy
    free[0] = 11 * MIB
    require_room(needs)


def test_parts_on_several_devices_are_not(tmp_path: Path, free: list[int], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(space, "_device", lambda folder: len(str(folder)))
    (tmp_path / "a").mkdir()
    require_room([Need("scratch", tmp_path, 6 * MIB), Need("result", tmp_path / "a", 6 * MIB)])
    with pytest.raises(DiskFullError, match="--scratch a folder on a larger device"):
        require_room([Need("scratch", tmp_path, 11 * MIB), Need("result", tmp_path / "a", 6 * MIB)])


def test_what_is_there_already_counts_and_holes_do_not(tmp_path: Path, free: list[int]) -> None:
    place = tmp_path / "scratch"
    place.mkdir()
    (place / "block-00").write_bytes(bytes(4 * MIB))
    with open(place / "block-01", "wb") as file:
        file.truncate(50 * MIB)
    (place / "deeper").mkdir()
    (place / "deeper" / "block").write_bytes(bytes(MIB))
    os.symlink("/dev/zero", place / "link")
    held = held_bytes(place)
    assert 4 * MIB <= held < 4.5 * MIB
    assert Need("scratch", tmp_path, 13 * MIB, place).missing == 13 * MIB - held
    require_room([Need("scratch", tmp_path, 13 * MIB, place)])
    assert held_bytes(tmp_path / "gone") == 0


def test_a_folder_that_is_missing_or_a_file_is_refused(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    for name, words in (("gone", "does not exist"), ("file", "is not a folder")):
        with pytest.raises(OptionError, match=f"the folder for scratch {words}") as caught:
            require_room([Need("scratch", tmp_path / name, 1)])
        assert str(tmp_path / name) in str(caught.value)


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EDQUOT])
def test_a_full_device_is_said_with_place_and_missing_bytes(number: int, tmp_path: Path, free: list[int]) -> None:
    free[0] = MIB
    with (
        pytest.raises(DiskFullError) as caught,
        full_device_named([Need("scratch", tmp_path, 3 * MIB), Need("journal", tmp_path, 2 * MIB)]),
    ):
        raise OSError(number, os.strerror(number), str(tmp_path / "block-00"))
    text = str(caught.value)
    assert os.strerror(number) in text
    assert f"place: {tmp_path / 'block-00'}" in text
    assert "(scratch, journal): about 5 MiB; free: 1 MiB; missing: 4 MiB" in text
    assert isinstance(caught.value.__cause__, OSError)


def test_more_than_was_foreseen_is_called_so(tmp_path: Path, free: list[int]) -> None:
    with (
        pytest.raises(DiskFullError, match="missing: more than was foreseen"),
        full_device_named([Need("scratch", tmp_path, MIB)]),
    ):
        raise OSError(errno.EDQUOT, "Disk quota exceeded")


def test_a_limit_of_files_names_the_limit(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(space, "_file_limit", lambda: 2 * MIB)
    with (
        pytest.raises(DiskFullError, match="larger than this process may write") as caught,
        full_device_named([Need("scratch", tmp_path, MIB)]),
    ):
        raise OSError(errno.EFBIG, "File too large")
    assert "allowed: 2 MiB a file (ulimit -f)" in str(caught.value)


@pytest.mark.parametrize(
    "error", [OSError(errno.EIO, "Input/output error"), ResultError("full"), ValueError("x"), KeyboardInterrupt()]
)
def test_other_errors_pass_as_they_are(error: BaseException, tmp_path: Path) -> None:
    with pytest.raises(type(error)) as caught, full_device_named([Need("scratch", tmp_path, MIB)]):
        raise error
    assert caught.value is error

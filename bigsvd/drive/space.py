"""Room on the devices: asked for before anything is read, and said when it runs out later."""

from __future__ import annotations

import errno
import os
import shutil
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from bigsvd.errors import BigsvdError, DiskFullError, OptionError
from bigsvd.units import show_bytes

# A device that is full, a quota that is used up, a limit on the size of a file.
FULL = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG)


@dataclass(frozen=True)
class Need:
    """Bytes that a run will write.

    Attributes
    ----------
    what : str
        What they are: ``scratch``, ``journal`` or ``result``.
    folder : Path
        Where the user said they go.
    size : int
        Bytes in all.
    place : Path or None
        The folder of their files; what is there already counts.
    """

    what: str
    folder: Path
    size: int
    place: Path | None = None

    @property
    def missing(self) -> int:
        """Bytes still to be written."""
        return max(0, self.size - (0 if self.place is None else held_bytes(self.place)))


def require_room(needs: Sequence[Need]) -> None:
    """Refuse before reading when a folder cannot be written to, or its device has not the room.

    Parameters
    ----------
    needs : sequence of Need

    Raises
    ------
    OptionError
        If a folder is missing or not writable.
    DiskFullError
        If a device has less room than all that goes there needs; names each part.
    """
    for need in needs:
        if not os.access(need.folder, os.W_OK | os.X_OK) or not need.folder.is_dir():
            found = "is not a folder" if need.folder.exists() else "does not exist"
            why = "is not writable" if need.folder.is_dir() else found
            raise OptionError(
                f"the folder for {need.what} {why}",
                evidence=[f"folder: {need.folder}"],
                remedy=f"Give {_option(need)} a folder that you may write to.",
            )
    for there in _by_device(needs):
        free, wanted = shutil.disk_usage(there[0].folder).free, sum(need.missing for need in there)
        if free < wanted:
            raise DiskFullError(
                f"the run needs about {show_bytes(wanted)} of disk, and {show_bytes(free)} are free",
                evidence=[
                    *(f"{need.what}: {show_bytes(need.missing)} in {need.folder}" for need in there),
                    f"missing: {show_bytes(wanted - free)}",
                ],
                remedy=f"Make room, or give {' or '.join(sorted({_option(need) for need in there}))} a folder"
                " on a larger device.",
            )


@contextmanager
def full_device_named(needs: Sequence[Need]) -> Iterator[None]:
    """Say which device is full and how much is missing, when the system refuses to write while the block runs."""
    try:
        yield
    except OSError as error:
        if isinstance(error, BigsvdError) or error.errno not in FULL:
            raise
        raise _named(error, needs) from error


def held_bytes(folder: Path) -> int:
    """Bytes on the device that the files of a folder take, not those of folders in it; holes take none."""
    if not folder.is_dir():
        return 0
    with os.scandir(folder) as entries:
        return sum(each.stat(follow_symlinks=False).st_blocks * 512 for each in entries if each.is_file())


def _named(error: OSError, needs: Sequence[Need]) -> DiskFullError:
    """The refusal of the system, with its place and the bytes that are missing."""
    place = Path(error.filename) if isinstance(error.filename, str) else needs[0].folder
    reason = error.strerror or os.strerror(error.errno or 0)
    if error.errno == errno.EFBIG:
        return DiskFullError(
            f"a file of the run became larger than this process may write: {reason}",
            evidence=[f"place: {place}", f"allowed: {show_bytes(_file_limit())} a file (ulimit -f)"],
            remedy="Raise the limit (ulimit -f unlimited), then give the same command again: it goes on.",
        )
    folder = place if place.is_dir() else place.parent
    there = next((group for group in _by_device(needs) if _device(group[0].folder) == _device(folder)), list(needs))
    free, wanted = shutil.disk_usage(folder).free, sum(need.missing for need in there)
    what = ", ".join(need.what for need in there)
    # Beyond what was expected, as after many sweeps or with a quota, at least as much as was written last.
    missing = show_bytes(wanted - free) if wanted > free else "more than was foreseen"
    return DiskFullError(
        f"the device of {folder} took no more: {reason}",
        evidence=[
            f"place: {place}",
            f"still to be written there ({what}): about {show_bytes(wanted)}; free: {show_bytes(free)};"
            f" missing: {missing}",
        ],
        remedy="Make room there, then give the same command again: it goes on.",
    )


def _by_device(needs: Sequence[Need]) -> list[list[Need]]:
    """Needs of the same device together."""
    groups: dict[int, list[Need]] = {}
    for need in needs:
        groups.setdefault(_device(need.folder), []).append(need)
    return list(groups.values())


def _device(folder: Path) -> int:
    """Number of the device of a folder."""
    return os.stat(folder).st_dev


def _option(need: Need) -> str:
    """The option that says where something goes."""
    return "--scratch" if need.what == "scratch" else "--out"


def _file_limit() -> int:
    """Most bytes of a file that this process may write."""
    import resource

    soft, _ = resource.getrlimit(resource.RLIMIT_FSIZE)
    return max(0, soft)

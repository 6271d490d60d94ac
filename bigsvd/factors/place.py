"""Where a result goes: what may stand there, and how a finished store takes its place, complete or not at all.

    OUT             the result
    OUT.partial     the store being written; renamed to OUT when it is complete and verified
    OUT.replaced    the earlier result between the two renames of --overwrite
    OUT.lock        held while a run is at work
    OUT.run         the run while it is not finished: its journal and scratch
    OUT.log         what happened when

A process that dies between the two renames leaves no OUT, a complete OUT.partial and OUT.replaced: `repair` finishes
the exchange, or takes the earlier result back where the new one is not whole.
"""

from __future__ import annotations

import json
import os
import re
import shutil
import stat
from dataclasses import dataclass
from pathlib import Path

from bigsvd.errors import ResultError, ResultExistsError
from bigsvd.factors.files import FolderFiles, sync_folder
from bigsvd.factors.layout import MEMBERS
from bigsvd.factors.lock import OutputLock
from bigsvd.factors.manifest import compare_files, read_record
from bigsvd.factors.stored_axes import names_in
from bigsvd.units import show_bytes

_SUFFIXES = (".partial", ".replaced", ".lock", ".run", ".log")
# Left by file managers and network file systems; nobody's work.
_LITTER = (".DS_Store", "._", ".nfs")
# Where zarr-python writes metadata before they get their name; a process that is killed in between leaves it.
_HALF_WRITTEN = re.compile(r"zarr\.[0-9a-f]{32}\.partial")


@dataclass(frozen=True)
class Place:
    """The names of one result, as absolute paths without links in the parent.

    Attributes
    ----------
    out, partial, replaced, lock, run, log : Path
    """

    out: Path
    partial: Path
    replaced: Path
    lock: Path
    run: Path
    log: Path

    @classmethod
    def at(cls, out: Path) -> Place:
        """Name the place of `out`; ``~`` is the home folder."""
        path = Path(out).expanduser()
        if path.name in ("", ".."):
            raise ResultError(
                f"{str(out)!r} is no name for a result", remedy="Name the folder to be made: --out factors.zarr"
            )
        try:
            path = path.parent.resolve() / path.name
        except (OSError, RuntimeError) as error:
            # Python tells a loop of links in an error of its own.
            raise ResultError(
                f"the folder of --out cannot be found: {error}", remedy="Choose an --out in a folder that exists."
            ) from error
        return cls(path, *(path.with_name(path.name + suffix) for suffix in _SUFFIXES))


def check_output(
    out: Path, *, overwrite: bool, source_path: Path | None, result_bytes: int = 0, held: bool = False
) -> None:
    """Refuse an output that could not be written or would harm something; changes nothing.

    Parameters
    ----------
    out : Path
        Where the result should go.
    overwrite : bool
        Whether a bigsvd result that stands there may be replaced.
    source_path : Path or None
        The file or folder of the input; None for arrays in memory.
    result_bytes : int
        Size of the result, if known: refused when the device has less room.
    held : bool
        Whether this process holds the lock itself.

    Raises
    ------
    ResultExistsError
        If something stands at `out` and may not be replaced. Only a bigsvd result, whole or damaged, is ever replaced.
    ResultError
        If `out` is the input, lies inside it or around it; if its folder is missing, not writable or too full; if
        another run is writing it; if OUT.partial is a link, somebody else's, or not a store of ours.

    Examples
    --------
    >>> check_output(Path("missing-folder/factors.zarr"), overwrite=False, source_path=None)
    Traceback (most recent call last):
        ...
    bigsvd.errors.ResultError: the folder of --out does not exist
    ...
    """
    place = Place.at(out)
    _check_parent(place, result_bytes)
    if source_path is not None:
        _check_source(place, Path(source_path))
    check_standing(place, overwrite=overwrite)
    _check_partial(place)
    if not held:
        OutputLock(place.lock, place.out).refuse_if_held()


def claim(place: Place, *, overwrite: bool, result_bytes: int) -> None:
    """Make OUT.partial, empty and ours alone; the caller holds the lock.

    Raises
    ------
    ResultError
        As `check_output`.
    """
    repair(place)
    _check_parent(place, result_bytes)
    check_standing(place, overwrite=overwrite)
    _check_partial(place)
    if place.partial.is_dir():
        shutil.rmtree(place.partial)
    os.mkdir(place.partial, mode=0o700)


def install(place: Place, *, overwrite: bool) -> None:
    """Put the complete OUT.partial in place; an earlier result disappears only after that.

    Raises
    ------
    ResultExistsError
        If something appeared at OUT since the start that may not be replaced.
    """
    check_standing(place, overwrite=overwrite)
    # A folder made by the store has the mode that the umask gives; asking for the umask would set it for all threads.
    os.chmod(place.partial, stat.S_IMODE((place.partial / "spectrum").stat().st_mode))
    if os.path.lexists(place.out):
        os.rename(place.out, place.replaced)
        try:
            os.rename(place.partial, place.out)
        except BaseException:
            os.rename(place.replaced, place.out)
            raise
        sync_folder(place.out.parent)
        # What cannot be removed now is removed at the next opening.
        shutil.rmtree(place.replaced, ignore_errors=True)
    else:
        os.rename(place.partial, place.out)
        sync_folder(place.out.parent)


def repair(place: Place) -> None:
    """Finish an exchange that a dying process left between its two renames; the caller holds the lock."""
    if not is_result(place.replaced) or _strangers(place.replaced):
        return
    if not os.path.lexists(place.out):
        os.rename(place.partial if is_whole(place.partial) else place.replaced, place.out)
        sync_folder(place.out.parent)
    if os.path.lexists(place.replaced) and is_whole(place.out):
        shutil.rmtree(place.replaced)


def is_result(path: Path) -> bool:
    """Whether a folder is a store of ours, complete or not."""
    return not path.is_symlink() and _claims(path) is True


def check_standing(place: Place, *, overwrite: bool) -> None:
    """Refuse what stands at OUT, unless it is a bigsvd result that may be replaced."""
    standing = place.out if os.path.lexists(place.out) else place.replaced
    if not os.path.lexists(standing):
        return
    other = "Choose another --out."
    if standing.is_symlink():
        target = f"It is a link to {os.readlink(standing)}"
        raise ResultExistsError(f"{standing} exists and is never replaced", evidence=[target], remedy=other)
    if not is_result(standing):
        what = "a folder" if standing.is_dir() else f"a file of {show_bytes(standing.stat().st_size)}"
        raise ResultExistsError(
            f"{standing} exists and is not a bigsvd result", evidence=[f"It is {what}; never replaced"], remedy=other
        )
    if not overwrite:
        died = ", the earlier one, left by a process that died while it was replaced" * (standing == place.replaced)
        raise ResultExistsError(
            f"{standing} exists",
            evidence=[f"It is a bigsvd result{died}"],
            remedy="Add --overwrite, or choose another --out.",
        )
    _check_owner(standing)
    if strangers := _strangers(standing):
        raise ResultExistsError(
            f"{standing} holds more than a bigsvd result, which replacing it would delete",
            evidence=[f"Not of the result: {', '.join(strangers[:5])}"],
            remedy=f"Move these out of {standing}, or choose another --out.",
        )
    if standing == place.replaced or not os.path.lexists(place.replaced):
        return
    if not is_result(place.replaced) or not is_whole(place.out):
        raise ResultExistsError(
            f"{place.replaced} is in the way, where the earlier result goes while it is replaced",
            evidence=["It is not a bigsvd result, or the newer one beside it is not whole"],
            remedy=f"Keep the one you trust as {place.out.name} and move the other away.",
        )


def _check_parent(place: Place, result_bytes: int) -> None:
    """Refuse a folder that is missing, not writable or too full, and names that no file can have."""
    parent = place.out.parent
    if not parent.is_dir():
        what = "is not a folder" if parent.exists() else "does not exist"
        raise ResultError(
            f"the folder of --out {what}", evidence=[f"folder: {parent}"], remedy=f'Make it first: mkdir -p "{parent}"'
        )
    if not os.access(parent, os.W_OK | os.X_OK):
        raise ResultError(
            "the folder of --out is not writable", evidence=[f"folder: {parent}"], remedy="Choose another --out."
        )
    if place.out.name.endswith(_SUFFIXES):
        raise ResultError(
            f"a result cannot be called {place.out.name}: {', '.join(_SUFFIXES)} mark unfinished work",
            remedy=f"Call it --out {place.out.with_suffix('')}",
        )
    longest, limit = len(os.fsencode(place.replaced.name)), os.pathconf(parent, "PC_NAME_MAX")
    if longest > limit:
        raise ResultError(
            f"the name of --out is {longest - limit} bytes too long: with .replaced it may have {limit} bytes",
            evidence=[f"name: {place.out.name}"],
            remedy="Choose a shorter name for --out.",
        )
    free = shutil.disk_usage(parent).free
    if free < result_bytes:
        raise ResultError(
            f"the result takes up to {show_bytes(result_bytes)}, but {show_bytes(free)} are free",
            evidence=[f"folder: {parent}"],
            remedy="Make room, choose an --out on another disk, or lower --rank.",
        )


def _check_source(place: Place, source: Path) -> None:
    """Refuse an output that is the input, lies inside it or around it."""
    source = source.expanduser().resolve()
    # A matrix inside a Zarr store is named by its own folder; the store around it is the input all the same.
    while any((source.parent / name).exists() for name in ("zarr.json", ".zgroup")):
        source = source.parent
    relation = ""
    for path in (place.out.resolve(), place.partial, place.replaced, place.lock, place.run, place.log):
        if path == source or (path.exists() and source.exists() and os.path.samefile(path, source)):
            relation = "is" if path == place.out.resolve() else f"uses {path.name}, which is"
        elif source in path.parents:
            relation = "lies inside"
        elif path in source.parents:
            relation = "would replace a folder that holds"
        if relation:
            raise ResultError(
                f"the output {relation} the input",
                evidence=[f"output: {place.out}", f"input: {source}"],
                remedy=f"Choose an --out outside the input: --out {source.parent / 'factors.zarr'}",
            )


def _check_partial(place: Place) -> None:
    """Refuse an OUT.partial that is not the leftover of a run of ours."""
    partial = place.partial
    if not os.path.lexists(partial):
        return
    if partial.is_symlink() or not partial.is_dir():
        what = f"a link to {os.readlink(partial)}" if partial.is_symlink() else "a file"
        raise ResultError(
            f"{partial} is in the way, where the result is written before it is complete",
            evidence=[f"It is {what}"],
            remedy="Remove it, or choose another --out.",
        )
    _check_owner(partial)
    strangers = [name for name in _strangers(partial) if not _HALF_WRITTEN.fullmatch(name)]
    if strangers := strangers or (["zarr.json"] if _claims(partial) is False else []):
        raise ResultError(
            f"{partial} is in the way and holds more than the leftover of a run",
            evidence=[f"Not of a result: {', '.join(strangers[:5])}"],
            remedy="Move it away, or choose another --out.",
        )


def _check_owner(path: Path) -> None:
    """Refuse what belongs to another user."""
    owner = path.lstat().st_uid
    if owner != os.geteuid():
        raise ResultError(
            f"{path} belongs to another user",
            evidence=[f"its owner is user {owner}, this process runs as user {os.geteuid()}"],
            remedy="Choose another --out.",
        )


def _strangers(folder: Path) -> list[str]:
    """Entries of a store's folder that no format of ours has."""
    # Labels of the axes of an unfolded array bear the names of these axes.
    members = MEMBERS.union(names_in(_root_record(folder)))
    return sorted(name for name in os.listdir(folder) if name not in members and not name.startswith(_LITTER))


def _root_record(folder: Path) -> object:
    """What the root metadata say under our name; None where they cannot be read."""
    try:
        with open(folder / "zarr.json", "rb") as file:
            return json.load(file)["attributes"]["bigsvd"]
    except (OSError, ValueError, KeyError, TypeError, RecursionError):
        return None


def _claims(folder: Path) -> bool | None:
    """Whether the root metadata says "bigsvd result"; None where it cannot be read."""
    try:
        with open(folder / "zarr.json", "rb") as file:
            attributes = json.load(file)["attributes"]
    except (OSError, ValueError, KeyError, TypeError):
        return None
    return isinstance(attributes, dict) and isinstance(attributes.get("bigsvd"), dict)


def is_whole(path: Path) -> bool:
    """Whether a folder holds a complete store, every file of its size."""
    try:
        compare_files(FolderFiles(path), read_record(path), contents=False)
    except ResultError:
        return False
    return True

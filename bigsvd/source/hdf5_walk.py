"""Every dataset in an HDF5 file, found by walking its groups by hand: links may be broken or go in circles."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import islice
from typing import Any

from bigsvd.errors import OutsideError, SourceError
from bigsvd.source.candidate import Candidate
from bigsvd.source.hdf5_dataset import describe
from bigsvd.source.hdf5_layout import hdf5_axes
from bigsvd.source.hdf5_links import outside_files, require_path_inside
from bigsvd.source.home import Home
from bigsvd.source.rectangle import grid_shape
from bigsvd.source.sparse_describe import describe_sparse, with_surroundings
from bigsvd.source.sparse_hdf5 import Hdf5Group
from bigsvd.source.sparse_layout import SPARSE_MEMBERS
from bigsvd.units import show_count

MOST_OBJECTS = 20_000
# A path of so many groups takes the library as many steps for each object below.
DEEPEST = 64
_INTERNAL = ("#refs#", "#subsystem#")


def walk_hdf5(
    file: Any, home: Home, start: str = "/", most_objects: int = MOST_OBJECTS, sparse_format: str | None = None
) -> list[Candidate]:
    """List all datasets below a group, each object once; what hard links reach comes before what soft links name.

    Parameters
    ----------
    file : h5py.File
    home : Home
        Links out of it are listed, and followed if it says so.
    start : str
        Group to begin at.
    most_objects : int
        Where the walk stops; deeper than `DEEPEST` groups it does not go.
    sparse_format : {"csr", "csc"}, optional
        As in `Access`.
    """
    import h5py

    found: list[Candidate] = []
    visited = {_identity(file[start])}
    waiting = [start.rstrip("/")]
    aliases: list[tuple[str, str]] = []
    looked = 0
    while waiting or aliases:
        if waiting:
            group, queue = waiting.pop(0), []
            if group.count("/") > DEEPEST:
                found.append(Candidate(group, reason=f"groups below {DEEPEST} others are not looked into"))
                continue
            members = _sparse_members(file, group, home, sparse_format, found)
            # Listed one by one: a group may hold more names than memory.
            for name in islice(file[group or "/"], most_objects - looked + 1):
                looked += 1
                if name in members:
                    continue
                path = f"{group}/{name}"
                try:
                    link = file[group or "/"].get(name, getlink=True)
                except (TypeError, KeyError, OSError, RuntimeError, ValueError) as error:
                    found.append(Candidate(path, reason=f"a link that h5py does not know ({error})"))
                    continue
                if isinstance(link, h5py.HardLink):
                    queue.append((path, ""))
                else:
                    aliases.append((path, _target(link)))
        else:
            queue = [aliases.pop(0)]
        for path, target in queue:
            if path.strip("/") not in _INTERNAL:
                _visit(file, home, path, target, visited, waiting, found)
        if looked > most_objects:
            found.append(Candidate("…", reason=f"more than {show_count(most_objects)} objects; the rest is not listed"))
            break
    return found


def _visit(
    file: Any, home: Home, path: str, target: str, visited: set[Any], waiting: list[str], found: list[Candidate]
) -> None:
    """Open one object by its path: list a dataset, keep a group for later, name what cannot be opened."""
    import h5py

    try:
        if target:
            require_path_inside(file, path, home)
        thing = file[path]
        identity = _identity(thing)
    except OutsideError as error:
        reason = f"a link to {target}, outside the folder of this file: add --follow-links to look into it"
        found.append(Candidate(path, reason=reason, outside=error.files))
        return
    except SourceError as error:
        found.append(Candidate(path, reason=error.problem))
        return
    except (KeyError, OSError, RuntimeError, ValueError) as error:
        reason = f"a broken link to {target}" if target else f"it cannot be opened ({error})"
        found.append(Candidate(path, reason=reason))
        return
    if identity in visited:
        return
    visited.add(identity)
    if isinstance(thing, h5py.Dataset):
        try:
            said = describe(thing, path, follow=home.follow)
            outside = outside_files(file, path, home)
            if said.usable and outside and not home.follow:
                said = replace(
                    said, usable=False, reason=f"it lies partly in {outside[0]}: add --follow-links to read it"
                )
            found.append(replace(said, outside=outside, absent_chunks=_absent(thing, said)))
        except (OSError, RuntimeError, KeyError, ValueError, TypeError) as error:
            found.append(Candidate(path, reason=f"it cannot be described ({error})"))
    elif isinstance(thing, h5py.Group):
        waiting.append(path)


def _sparse_members(
    file: Any, group: str, home: Home, sparse_format: str | None, found: list[Candidate]
) -> tuple[str, ...]:
    """List the sparse matrix that a group holds, if it does; return the names of what belongs to it."""
    path = group or "/"
    try:
        parts = Hdf5Group(file, path, home)
        described = describe_sparse(parts, sparse_format)
        if described is None:
            return ()
        said, layout = described
        outside = parts.outside(layout)
    except OutsideError as error:
        reason = f"a sparse group that lies partly in {error.files[0]}: add --follow-links to read it"
        found.append(Candidate(path, reason=reason, outside=error.files, sparse=True))
        return SPARSE_MEMBERS
    except (OSError, RuntimeError, KeyError, ValueError, TypeError):
        # What is wrong with its members is said of each of them.
        return ()
    if said.usable and outside and not home.follow:
        said = replace(said, usable=False, reason=f"it lies partly in {outside[0]}: add --follow-links to read it")
    said = with_surroundings(said, hdf5_axes(file, path, said.shape, home))
    found.append(replace(said, outside=outside))
    return layout.members if layout is not None else SPARSE_MEMBERS


def _absent(dataset: Any, said: Candidate) -> int | None:
    """How many chunks of a matrix were never written; None where that is no question of chunks."""
    if not said.usable or dataset.is_virtual or dataset.external:
        return None
    if dataset.chunks is None:
        return int(dataset.id.get_storage_size() == 0)
    grid = math.prod(grid_shape(dataset.shape, dataset.chunks))
    # Chunks that a dataset kept beyond its edge are counted by the library too.
    return max(0, grid - dataset.id.get_num_chunks())


def _identity(thing: Any) -> tuple[int, Any]:
    import h5py

    info = h5py.h5o.get_info(thing.id)
    return info.fileno, info.addr


def _target(link: Any) -> str:
    """Where a soft or external link points."""
    inside = str(link.path)
    return f"{inside} in {link.filename}" if hasattr(link, "filename") else inside

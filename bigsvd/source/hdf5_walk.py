"""Every dataset in an HDF5 file, found by walking its groups by hand: links may be broken or go in circles."""

from __future__ import annotations

from typing import Any

from bigsvd.source.candidate import SPARSE, SPARSE_TYPES, Candidate
from bigsvd.source.hdf5_dataset import describe
from bigsvd.units import show_count

MOST_OBJECTS = 20_000
_SPARSE_CHILDREN = ({"data", "indices", "indptr"}, {"data", "ir", "jc"}, {"row", "col", "data"})
_INTERNAL = ("#refs#", "#subsystem#")


def walk_hdf5(file: Any, start: str = "/", most_objects: int = MOST_OBJECTS) -> list[Candidate]:
    """List all datasets below a group, each object once; what hard links reach comes before what soft links name."""
    import h5py

    found: list[Candidate] = []
    visited = {_identity(file[start])}
    waiting = [start.rstrip("/")]
    aliases: list[tuple[str, str]] = []
    while waiting or aliases:
        if len(visited) > most_objects:
            found.append(Candidate("…", reason=f"more than {show_count(most_objects)} objects; the rest is not listed"))
            break
        if waiting:
            group, queue = waiting.pop(0), []
            for name in file[group or "/"]:
                path = f"{group}/{name}"
                link = file[group or "/"].get(name, getlink=True)
                if isinstance(link, h5py.HardLink):
                    queue.append((path, ""))
                else:
                    aliases.append((path, _target(link)))
        else:
            queue = [aliases.pop(0)]
        for path, target in queue:
            if path.strip("/") not in _INTERNAL:
                _visit(file, path, target, visited, waiting, found)
    return found


def _visit(file: Any, path: str, target: str, visited: set[Any], waiting: list[str], found: list[Candidate]) -> None:
    """Open one object by its path: list a dataset, keep a group for later, name what cannot be opened."""
    import h5py

    try:
        thing = file[path]
        identity = _identity(thing)
    except (KeyError, OSError, RuntimeError) as error:
        reason = f"a broken link to {target}" if target else f"it cannot be opened ({error})"
        found.append(Candidate(path, reason=reason))
        return
    if identity in visited:
        return
    visited.add(identity)
    if isinstance(thing, h5py.Dataset):
        try:
            found.append(describe(thing, path))
        except (OSError, RuntimeError, KeyError, ValueError, TypeError) as error:
            found.append(Candidate(path, reason=f"it cannot be described ({error})"))
    elif isinstance(thing, h5py.Group):
        if is_sparse(thing):
            found.append(Candidate(path, reason=SPARSE))
        else:
            waiting.append(path)


def _identity(thing: Any) -> tuple[int, Any]:
    import h5py

    info = h5py.h5o.get_info(thing.id)
    return info.fileno, info.addr


def _target(link: Any) -> str:
    """Where a soft or external link points."""
    inside = str(link.path)
    return f"{inside} in {link.filename}" if hasattr(link, "filename") else inside


def is_sparse(group: Any) -> bool:
    """Whether a group holds the parts of a sparse matrix."""
    try:
        if "MATLAB_sparse" in group.attrs or "h5sparse_format" in group.attrs:
            return True
        if str(group.attrs.get("encoding-type", "")) in SPARSE_TYPES:
            return True
        children = set(group)
        # A matrix beside its row and column labels is two-dimensional; the entries of a sparse one are a list.
        return any(parts <= children for parts in _SPARSE_CHILDREN) and len(group["data"].shape) == 1
    except (OSError, TypeError, ValueError, RuntimeError, KeyError, AttributeError):
        return False

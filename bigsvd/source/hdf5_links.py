"""Where the links of an HDF5 file lead, found out before the library follows them."""

from __future__ import annotations

import os
from contextlib import ExitStack
from typing import Any

from bigsvd.errors import DamagedSourceError, OutsideError, SourceError
from bigsvd.source.hdf5_file import open_hdf5
from bigsvd.source.home import MOST_LINKS, Home, locate


def require_path_inside(file: Any, inside: str, home: Home) -> None:
    """Refuse a path that leads through an external link to a file outside the folder.

    Parameters
    ----------
    file : h5py.File
    inside : str
        Path of an object; broken links are left to whoever opens it.
    home : Home
        Of the file.

    Raises
    ------
    OutsideError
        If a link leads out of the folder and links are not followed.
    DamagedSourceError
        If links lead on and on.
    """
    if home.follow:
        return
    waiting, links = _parts(inside), 0
    group = file["/"]
    with ExitStack() as opened:
        while waiting:
            import h5py

            name = waiting.pop(0)
            try:
                link = group.get(name, getlink=True)
            except (KeyError, TypeError, OSError, RuntimeError, ValueError):
                return
            links += not isinstance(link, h5py.HardLink)
            if links > MOST_LINKS:
                raise DamagedSourceError(
                    f"{file.filename}:{inside} leads through more than {MOST_LINKS} links",
                    remedy="Name the matrix by its own path; bigsvd inspect lists it.",
                )
            if isinstance(link, h5py.SoftLink):
                waiting = [*_parts(link.path), *waiting]
                group = group.file["/"] if link.path.startswith("/") else group
            elif isinstance(link, h5py.ExternalLink):
                target = locate(link.filename, os.path.dirname(group.file.filename))
                home.require(f"{file.filename}:{inside}", [target], "an external link")
                try:
                    group = opened.enter_context(open_hdf5(target))["/"]
                except SourceError:
                    return
                waiting = [*_parts(link.path), *waiting]
            elif link is None:
                return
            else:
                group = group[name]
            if not isinstance(group, h5py.Group):
                return


def _parts(path: str) -> list[str]:
    return [part for part in path.split("/") if part not in ("", ".")]


def other_files(dataset: Any) -> list[str]:
    """Paths of the other files that hold entries of a dataset: external raw files and virtual sources."""
    folder = os.path.dirname(os.path.abspath(dataset.file.filename))
    names = [os.fsdecode(name) for name, _, _ in dataset.external or ()]
    if dataset.is_virtual:
        names += [source.file_name for source in dataset.virtual_sources() if source.file_name != "."]
    return sorted({locate(name, folder) for name in names})


def outside_files(file: Any, inside: str, home: Home) -> tuple[str, ...]:
    """Files outside the folder that hold the entries of a dataset or on the way to it; nothing there is opened."""
    try:
        require_path_inside(file, inside, Home(home.path, follow=False))
    except OutsideError as error:
        return error.files
    except SourceError:
        return ()
    return tuple(home.outside(other_files(file[inside])))


def require_inside(file: Any, inside: str, home: Home) -> None:
    """Refuse a dataset that lies partly in files outside the folder, unless links are followed."""
    require_path_inside(file, inside, home)
    dataset = file[inside]
    how = "virtual sources" if dataset.is_virtual else "external storage"
    home.require(f"{home.path}:{inside}", other_files(dataset), how)

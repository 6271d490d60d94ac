"""From what the user names to a source: detect the container, choose the matrix, open it."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import numpy as np

from bigsvd.errors import NoMatrixError, UnsupportedMatrixError
from bigsvd.source.access import STRICT, Access
from bigsvd.source.axis_choice import NO_CHOICE, AxisChoice
from bigsvd.source.candidate import SPARSE_TYPES, Candidate, choose, listing
from bigsvd.source.container import container
from bigsvd.source.home import Home
from bigsvd.source.spec import ArraySource, Source
from bigsvd.source.unfolded import unfold


def open_source(
    where: Any, matrix: str | None = None, access: Access = STRICT, choice: AxisChoice = NO_CHOICE
) -> Source:
    """Open a matrix for reading in rectangles.

    Parameters
    ----------
    where : path, ndarray, h5py.Dataset, zarr.Array or dask array
        A file or directory is recognised by its content. Datasets and Zarr arrays are opened again by their address.
    matrix : str, optional
        Path of the array inside the file; needed where the file holds several.
    access : Access
        Whether chunks that were never written are filled, and links followed out of the file's own folder.
    choice : AxisChoice
        Which axes of an array of more than two become samples, and which part of it is taken.

    Returns
    -------
    Source

    Raises
    ------
    OptionError
        If axes, region or mask are not those of the array.
    NoMatrixError
        If there is no such file, or nothing under that path.
    SeveralMatricesError
        If the file holds several matrices and none is named; lists them.
    UnsupportedMatrixError
        If what is there is no array of numbers of two or more axes, or cannot be decoded here, or
        nothing says which of more than two axes are the samples.
    DamagedSourceError
        If the file or its metadata cannot be read.
    """
    if isinstance(where, (str, os.PathLike)):
        path = _absolute(where)
        # Below a folder without metadata an array may still lie where it is said to lie.
        kind = "zarr" if matrix is not None and path.is_dir() else container(path)
        return unfold(_OPENERS[kind](str(path), matrix, access, bool(choice)), choice)
    if matrix is not None:
        raise UnsupportedMatrixError(
            f"matrix={matrix!r} names an array inside a file, but what was given is {type(where).__name__}",
            remedy="Leave out matrix=, or give the path of the file.",
        )
    return unfold(_from_object(where, access), choice)


def survey(where: str | os.PathLike[str], access: Access = STRICT) -> list[Candidate]:
    """List every array in a file, whether it can be decomposed or not.

    Parameters
    ----------
    where : path
        File or directory.
    access : Access
        Whether links are followed out of the file's own folder.

    Returns
    -------
    list of Candidate
        In the order of the walk; bounded to 20,000 objects, and says so.

    Raises
    ------
    SourceError
        If the path holds nothing that can be read.
    """
    path = _absolute(where)
    return _SURVEYORS[container(path)](str(path), access)


def _absolute(where: str | os.PathLike[str]) -> Path:
    return Path(os.path.abspath(os.path.expanduser(os.fspath(where))))


def _from_object(thing: Any, access: Access) -> ArraySource:
    """Tell a type by where its class comes from, so that no library is loaded to ask."""
    origin = type(thing).__module__.split(".")[0]
    if isinstance(thing, np.ndarray):
        from bigsvd.source.memory import MemorySource

        return MemorySource(thing)
    if origin == "dask" and hasattr(thing, "__dask_graph__") and hasattr(thing, "chunks"):
        from bigsvd.source.dask_array import DaskSource

        return DaskSource(thing)
    if origin == "h5py" and type(thing).__name__ == "Dataset":
        if not thing:
            raise NoMatrixError(
                "the h5py dataset belongs to a file that is closed", remedy="Give the path of the file."
            )
        return _open_hdf5(os.path.abspath(thing.file.filename), thing.name, access)
    if origin == "zarr" and hasattr(thing, "chunks"):
        root = getattr(thing.store, "root", None) or getattr(thing.store, "path", None)
        if isinstance(root, (str, os.PathLike)) and os.path.exists(root):
            return _open_zarr(os.path.abspath(root), thing.path or None, access)
        raise UnsupportedMatrixError(
            f"a Zarr array in a {type(thing.store).__name__} cannot be opened again by its address",
            remedy="Give a store in a local directory or zip file, or the entries themselves: array[:].",
        )
    sparse = origin == "scipy" and hasattr(thing, "nnz")
    raise UnsupportedMatrixError(
        f"a matrix cannot be read from {type(thing).__module__}.{type(thing).__name__}"
        + ("; sparse matrices are not read yet" if sparse else ""),
        remedy="Give a path, a NumPy array, an h5py dataset, a Zarr array or a dask array.",
    )


def _open_hdf5(path: str, matrix: str | None, access: Access, many: bool = False) -> ArraySource:
    from bigsvd.source.hdf5 import Hdf5Source
    from bigsvd.source.hdf5_file import library_errors_named, open_hdf5
    from bigsvd.source.hdf5_walk import is_sparse, walk_hdf5

    home = Home(path, follow=access.follow_links)
    with library_errors_named(path), open_hdf5(path) as file:
        import h5py

        if matrix is None:
            inside = choose(walk_hdf5(file, home), path, unfold=many).path
        else:
            inside = "/" + matrix.strip("/")
            thing = _object_at(file, inside, home)
            if isinstance(thing, h5py.Group):
                if is_sparse(thing):
                    raise UnsupportedMatrixError(
                        f"{path}:{inside} is a sparse group; sparse groups are not read yet",
                        evidence=[f"it holds: {', '.join(list(thing)[:8])}"],
                        remedy="Name a dense matrix, or store this one dense.",
                    )
                inside = choose(walk_hdf5(file, home, inside), f"{path}:{inside}", unfold=many).path
            elif not isinstance(thing, h5py.Dataset):
                raise NoMatrixError(f"{path}:{inside} is a type definition, not an array", remedy="Name an array.")
    return Hdf5Source(path, inside, access)


def _object_at(file: Any, inside: str, home: Home) -> Any:
    from bigsvd.source.hdf5_links import require_path_inside
    from bigsvd.source.hdf5_walk import walk_hdf5

    require_path_inside(file, inside, home)
    try:
        return file[inside]
    except (KeyError, OSError, RuntimeError, ValueError) as error:
        raise NoMatrixError(
            f"{home.path} holds nothing under {inside}",
            evidence=listing(found for found in walk_hdf5(file, home) if found.usable or found.path == inside),
            remedy="Name one of its matrices with --matrix.",
        ) from error


def _survey_hdf5(path: str, access: Access) -> list[Candidate]:
    from bigsvd.source.hdf5_file import library_errors_named, open_hdf5
    from bigsvd.source.hdf5_walk import walk_hdf5

    with library_errors_named(path), open_hdf5(path) as file:
        return walk_hdf5(file, Home(path, follow=access.follow_links))


def _open_zarr(path: str, matrix: str | None, access: Access, many: bool = False) -> ArraySource:
    from bigsvd.source.zarr_array import ZarrSource
    from bigsvd.source.zarr_metadata import read_metadata
    from bigsvd.source.zarr_store import open_keys
    from bigsvd.source.zarr_walk import group_attributes, walk_zarr

    keys = open_keys(path, follow=access.follow_links)
    start = (matrix or "").strip("/")
    if read_metadata(keys, start) is not None:
        return ZarrSource(path, start, access)
    if start and next(iter(keys.children(start)), None) is None:
        raise NoMatrixError(
            f"{path} holds nothing under {start}",
            evidence=listing(found for found in walk_zarr(keys) if found.usable),
            remedy="Name one of its matrices with --matrix.",
        )
    if start and group_attributes(keys, start).get("encoding-type") in SPARSE_TYPES:
        raise UnsupportedMatrixError(
            f"{path}:{start} is a sparse group; sparse groups are not read yet",
            remedy="Name a dense matrix, or store this one dense.",
        )
    where = f"{path}:{start}" if start else path
    return ZarrSource(path, choose(walk_zarr(keys, start), where, unfold=many).path, access)


def _survey_zarr(path: str, access: Access) -> list[Candidate]:
    from bigsvd.source.zarr_store import open_keys
    from bigsvd.source.zarr_walk import walk_zarr

    return walk_zarr(open_keys(path, follow=access.follow_links))


def _open_npy(path: str, matrix: str | None, access: Access, many: bool = False) -> ArraySource:
    from bigsvd.source.npy import NpySource

    if matrix is not None:
        raise NoMatrixError(
            f"{path} is an .npy file, which holds one array without a name; asked for {matrix}",
            remedy="Leave out --matrix.",
        )
    return NpySource(path)


def _survey_npy(path: str, access: Access) -> list[Candidate]:
    from bigsvd.source.npy import describe_npy

    return [describe_npy(path)]


_OPENERS = {"hdf5": _open_hdf5, "zarr": _open_zarr, "zip": _open_zarr, "npy": _open_npy}
_SURVEYORS = {"hdf5": _survey_hdf5, "zarr": _survey_zarr, "zip": _survey_zarr, "npy": _survey_npy}

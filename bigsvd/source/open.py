"""From what the user names to a source: detect the container, choose the matrix, open it."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import numpy as np

from bigsvd.errors import NoMatrixError, UnsupportedMatrixError
from bigsvd.source.candidate import Candidate, choose, listing
from bigsvd.source.container import container
from bigsvd.source.spec import Source


def open_source(where: Any, matrix: str | None = None) -> Source:
    """Open a matrix for reading in rectangles.

    Parameters
    ----------
    where : path, ndarray, h5py.Dataset, zarr.Array or dask array
        A file or directory is recognised by its content. Datasets and Zarr arrays are opened again by their address.
    matrix : str, optional
        Path of the array inside the file; needed where the file holds several.

    Returns
    -------
    Source

    Raises
    ------
    NoMatrixError
        If there is no such file, or nothing under that path.
    SeveralMatricesError
        If the file holds several matrices and none is named; lists them.
    UnsupportedMatrixError
        If what is there is no two-dimensional array of numbers, or cannot be decoded here.
    DamagedSourceError
        If the file or its metadata cannot be read.
    """
    if isinstance(where, (str, os.PathLike)):
        path = _absolute(where)
        return _OPENERS[container(path)](str(path), matrix)
    if matrix is not None:
        raise UnsupportedMatrixError(
            f"matrix={matrix!r} names an array inside a file, but what was given is {type(where).__name__}",
            remedy="Leave out matrix=, or give the path of the file.",
        )
    return _from_object(where)


def survey(where: str | os.PathLike[str]) -> list[Candidate]:
    """List every array in a file, whether it can be decomposed or not.

    Parameters
    ----------
    where : path
        File or directory.

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
    return _SURVEYORS[container(path)](str(path))


def _absolute(where: str | os.PathLike[str]) -> Path:
    return Path(os.path.abspath(os.path.expanduser(os.fspath(where))))


def _from_object(thing: Any) -> Source:
    if isinstance(thing, np.ndarray):
        from bigsvd.source.memory import MemorySource

        return MemorySource(thing)
    raise UnsupportedMatrixError(
        f"a matrix cannot be read from {type(thing).__module__}.{type(thing).__name__}",
        remedy="Give a path, a NumPy array, an h5py dataset, a Zarr array or a dask array.",
    )


def _open_hdf5(path: str, matrix: str | None) -> Source:
    from bigsvd.source.hdf5 import Hdf5Source
    from bigsvd.source.hdf5_file import open_hdf5
    from bigsvd.source.hdf5_walk import is_sparse, walk_hdf5

    with open_hdf5(path) as file:
        import h5py

        if matrix is None:
            inside = choose(walk_hdf5(file), path).path
        else:
            inside = "/" + matrix.strip("/")
            thing = _object_at(file, inside, path)
            if isinstance(thing, h5py.Group):
                if is_sparse(thing):
                    raise UnsupportedMatrixError(
                        f"{path}:{inside} is a sparse group; sparse groups are not read yet",
                        evidence=[f"it holds: {', '.join(list(thing)[:8])}"],
                        remedy="Name a dense matrix, or store this one dense.",
                    )
                inside = choose(walk_hdf5(file, inside), f"{path}:{inside}").path
            elif not isinstance(thing, h5py.Dataset):
                raise NoMatrixError(f"{path}:{inside} is a type definition, not an array", remedy="Name an array.")
    return Hdf5Source(path, inside)


def _object_at(file: Any, inside: str, path: str) -> Any:
    from bigsvd.source.hdf5_walk import walk_hdf5

    try:
        return file[inside]
    except (KeyError, OSError, RuntimeError, ValueError) as error:
        raise NoMatrixError(
            f"{path} holds nothing under {inside}",
            evidence=listing(found for found in walk_hdf5(file) if found.usable or found.path == inside),
            remedy="Name one of its matrices with --matrix.",
        ) from error


def _survey_hdf5(path: str) -> list[Candidate]:
    from bigsvd.source.hdf5_file import open_hdf5
    from bigsvd.source.hdf5_walk import walk_hdf5

    with open_hdf5(path) as file:
        return walk_hdf5(file)


_OPENERS = {"hdf5": _open_hdf5}
_SURVEYORS = {"hdf5": _survey_hdf5}

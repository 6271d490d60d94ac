"""From what the user names to a source: detect the container, choose the matrix, open it."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import numpy as np

from bigsvd.errors import NoMatrixError, OptionError, UnsupportedMatrixError
from bigsvd.source.access import STRICT, Access
from bigsvd.source.axis_choice import NO_CHOICE, AxisChoice
from bigsvd.source.candidate import Candidate, choose, listing
from bigsvd.source.container import container
from bigsvd.source.home import Home
from bigsvd.source.names import Names
from bigsvd.source.spec import ArraySource, Source
from bigsvd.source.unfolded import unfold


def open_source(
    where: Any, matrix: str | None = None, access: Access = STRICT, choice: AxisChoice = NO_CHOICE
) -> Source:
    """Open a matrix for reading in rectangles.

    Parameters
    ----------
    where : path, ndarray, h5py.Dataset, zarr.Array, dask array or sparse matrix of SciPy
        A file or directory is recognised by its content. Datasets and Zarr arrays are opened again by their address.
    matrix : str, optional
        Path of the array inside the file; needed where the file holds several.
    access : Access
        Whether chunks that were never written are filled, and links followed out of the file's own folder; how a
        sparse group that does not say it is compressed.
    choice : AxisChoice
        Which axes of an array of more than two become samples, and which part of it is taken.

    Returns
    -------
    Source

    Raises
    ------
    OptionError
        If axes, region or mask are not those of the array, or the matrix is sparse; if it is said how a sparse group is
        compressed, and the matrix is none.
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
    source = _opened(where, matrix, access, many=bool(choice))
    if access.sparse_format is not None and source.spec.compressed_axis is None:
        source.close()
        raise OptionError(
            f"--sparse-format {access.sparse_format} was given, but {source.spec.name} is not sparse",
            remedy="Leave out --sparse-format.",
        )
    if not isinstance(source, ArraySource):
        if choice:
            source.close()
            raise OptionError(
                f"--sample-axes, --region or --mask was given, but {source.spec.name} is sparse",
                remedy="Leave them out.",
            )
        return source
    return unfold(source, choice)


def _opened(where: Any, matrix: str | None, access: Access, *, many: bool) -> Source:
    if isinstance(where, (str, os.PathLike)):
        path = _absolute(where)
        # Below a folder without metadata an array may still lie where it is said to lie.
        kind = "zarr" if matrix is not None and path.is_dir() else container(path)
        return _OPENERS[kind](str(path), matrix, access, many)
    if matrix is not None:
        raise UnsupportedMatrixError(
            f"matrix={matrix!r} names an array inside a file, but what was given is {type(where).__name__}",
            remedy="Leave out matrix=, or give the path of the file.",
        )
    return _from_object(where, access)


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


def find_names(where: str | os.PathLike[str], inside: str, access: Access = STRICT) -> Names:
    """Say where a list of names in a file is; it is not read.

    Parameters
    ----------
    where : path
        HDF5 file or Zarr store.
    inside : str
        Path of a list of text or numbers, a categorical column, or a table of the AnnData layout.
    access : Access

    Returns
    -------
    Names

    Raises
    ------
    NoMatrixError
        If nothing is there.
    SourceError
        If it is no list of names.
    """
    path = _absolute(where)
    kind = container(path)
    if kind == "npy":
        raise NoMatrixError(f"{path} is an .npy file, and holds nothing under {inside}", remedy="Name the file alone.")
    if kind == "hdf5":
        from bigsvd.source.hdf5_file import library_errors_named, open_hdf5
        from bigsvd.source.hdf5_names import hdf5_names

        with library_errors_named(str(path)), open_hdf5(str(path)) as file:
            return hdf5_names(file, "/" + inside.strip("/"), Home(str(path), follow=access.follow_links))
    from bigsvd.source.zarr_names import zarr_names
    from bigsvd.source.zarr_store import open_keys

    return zarr_names(open_keys(str(path), follow=access.follow_links), inside, follow=access.follow_links)


def _absolute(where: str | os.PathLike[str]) -> Path:
    return Path(os.path.abspath(os.path.expanduser(os.fspath(where))))


def _from_object(thing: Any, access: Access) -> Source:
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
    if origin == "scipy" and hasattr(thing, "nnz") and hasattr(thing, "tocsr"):
        from bigsvd.source.sparse_memory import sparse_in_memory

        if access.sparse_format not in (None, thing.format):
            raise OptionError(
                f"the sparse matrix is {thing.format}, but --sparse-format is {access.sparse_format}",
                remedy="Leave out --sparse-format.",
            )
        return sparse_in_memory(thing)
    raise UnsupportedMatrixError(
        f"a matrix cannot be read from {type(thing).__module__}.{type(thing).__name__}",
        remedy="Give a path, a NumPy array, an h5py dataset, a Zarr array, a dask array or a sparse matrix of SciPy.",
    )


def _open_hdf5(path: str, matrix: str | None, access: Access, many: bool = False) -> Source:
    from bigsvd.source.hdf5 import Hdf5Source
    from bigsvd.source.hdf5_file import library_errors_named, open_hdf5
    from bigsvd.source.hdf5_walk import walk_hdf5
    from bigsvd.source.sparse_hdf5 import is_sparse, open_sparse_hdf5

    home = Home(path, follow=access.follow_links)
    with library_errors_named(path), open_hdf5(path) as file:
        import h5py

        start = "/" if matrix is None else "/" + matrix.strip("/")
        thing = _object_at(file, start, home)
        sparse = False
        if isinstance(thing, h5py.Dataset):
            inside = start
        elif not isinstance(thing, h5py.Group):
            raise NoMatrixError(f"{path}:{start} is a type definition, not an array", remedy="Name an array.")
        elif matrix is not None and is_sparse(file, start, home, access.sparse_format):
            inside, sparse = start, True
        else:
            found = walk_hdf5(file, home, start, sparse_format=access.sparse_format)
            choice = choose(found, path if matrix is None else f"{path}:{start}", unfold=many)
            inside, sparse = choice.path, choice.sparse
    return open_sparse_hdf5(path, inside, access) if sparse else Hdf5Source(path, inside, access)


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
        return walk_hdf5(file, Home(path, follow=access.follow_links), sparse_format=access.sparse_format)


def _open_zarr(path: str, matrix: str | None, access: Access, many: bool = False) -> Source:
    from bigsvd.source.sparse_zarr import open_sparse_zarr
    from bigsvd.source.zarr_array import ZarrSource
    from bigsvd.source.zarr_metadata import read_metadata
    from bigsvd.source.zarr_store import open_keys
    from bigsvd.source.zarr_walk import walk_zarr

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
    sparse = open_sparse_zarr(path, start, access) if start else None
    if sparse is not None:
        return sparse
    where = f"{path}:{start}" if start else path
    choice = choose(walk_zarr(keys, start, sparse_format=access.sparse_format), where, unfold=many)
    found = open_sparse_zarr(path, choice.path, access) if choice.sparse else None
    return found or ZarrSource(path, choice.path, access)


def _survey_zarr(path: str, access: Access) -> list[Candidate]:
    from bigsvd.source.zarr_store import open_keys
    from bigsvd.source.zarr_walk import walk_zarr

    return walk_zarr(open_keys(path, follow=access.follow_links), sparse_format=access.sparse_format)


def _open_npy(path: str, matrix: str | None, access: Access, many: bool = False) -> Source:
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


def _open_npz(path: str, matrix: str | None, access: Access, many: bool = False) -> Source:
    from bigsvd.source.sparse_npz import open_sparse_npz

    if matrix is not None:
        raise NoMatrixError(
            f"{path} is an .npz file, of which the one sparse matrix is read; asked for {matrix}",
            remedy="Leave out --matrix.",
        )
    return open_sparse_npz(path, access)


def _survey_npz(path: str, access: Access) -> list[Candidate]:
    from bigsvd.source.sparse_npz import survey_npz

    return survey_npz(path, access)


_OPENERS = {"hdf5": _open_hdf5, "zarr": _open_zarr, "zip": _open_zarr, "npy": _open_npy, "npz": _open_npz}
_SURVEYORS = {"hdf5": _survey_hdf5, "zarr": _survey_zarr, "zip": _survey_zarr, "npy": _survey_npy, "npz": _survey_npz}

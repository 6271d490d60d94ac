"""What files keep beside an array: a mask of its features, and the coordinates of its axes."""

from __future__ import annotations

import contextlib
import os
from pathlib import Path
from typing import Any

import numpy as np

from bigsvd.errors import NoMatrixError, SourceError
from bigsvd.source.access import STRICT, Access
from bigsvd.source.home import Home
from bigsvd.source.spec import ArraySource

MOST_COORDINATES = 1_000_000


def load_mask(given: Any, parent: ArraySource) -> tuple[np.ndarray, str]:
    """Read a mask.

    Parameters
    ----------
    given : ndarray or str
        The mask; or ``FILE.npy``, ``FILE:PATH``, or the path of an array in the file of the matrix.
    parent : ArraySource

    Returns
    -------
    mask : ndarray
    where : str
        What to call it.

    Raises
    ------
    NoMatrixError
        If there is none.
    """
    if not isinstance(given, (str, os.PathLike)):
        return np.asarray(given), "the mask"
    word = os.fspath(given)
    file, colon, inside = word.rpartition(":")
    path = os.path.abspath(os.path.expanduser(file if colon else word))
    if colon and os.path.exists(path):
        return _load(path, inside, STRICT), f"the mask {word}"
    if not colon and os.path.exists(path):
        return _load(path, "", STRICT), f"the mask {word}"
    own = getattr(parent, "path", None)
    if isinstance(own, str) and not colon and not own.endswith(".npy"):
        return _load(own, word, getattr(parent, "access", STRICT)), f"the mask {own}:{word}"
    raise NoMatrixError(
        f"there is no mask {word}", remedy="Give FILE.npy, FILE:PATH, or the path of an array beside the matrix."
    )


def load_coordinates(parent: ArraySource, region: tuple[range, ...]) -> tuple[np.ndarray | None, ...]:
    """One-dimensional labels of every axis, of the part that is taken; None where the file has none that fit.

    Where they stand, the layout of the file says. Numbers alone are read; text is kept as names of rows or columns.
    Labels are no part of the matrix: those that cannot be read are left out.
    """
    found: list[np.ndarray | None] = []
    for axis, places in enumerate(region):
        names, values = parent.axes.labels(axis), None
        if names is not None and names.count <= MOST_COORDINATES:
            with contextlib.suppress(SourceError, OSError, KeyError, ValueError, TypeError, RuntimeError):
                values = names.values()
        fits = values is not None and values.shape == (parent.axes.shape[axis],)
        found.append(values[places.start : places.stop : places.step] if fits and values is not None else None)
    return tuple(found)


def _load(path: str, inside: str, access: Access) -> np.ndarray:
    """Read a small array whole."""
    from bigsvd.source.container import container

    kind = "zarr" if inside and os.path.isdir(path) else container(Path(path))
    if kind == "npy":
        return np.asarray(np.load(path, allow_pickle=False))
    if kind == "hdf5":
        return _load_hdf5(path, "/" + inside.strip("/"), access)
    return _load_zarr(path, inside.strip("/"), access)


def _load_hdf5(path: str, inside: str, access: Access) -> np.ndarray:
    from bigsvd.source.hdf5_file import library_errors_named, open_hdf5
    from bigsvd.source.hdf5_links import require_path_inside

    with library_errors_named(f"{path}:{inside}"), open_hdf5(path) as file:
        require_path_inside(file, inside, Home(path, follow=access.follow_links))
        found = file.get(inside)
        if found is None or not hasattr(found, "shape"):
            raise NoMatrixError(f"{path} holds no array under {inside}", remedy=f"See: bigsvd inspect {path}")
        return np.asarray(found[...])


def _load_zarr(path: str, inside: str, access: Access) -> np.ndarray:
    from bigsvd.source.zarr_metadata import read_metadata
    from bigsvd.source.zarr_read import open_zarr
    from bigsvd.source.zarr_store import open_keys

    keys = open_keys(path, follow=access.follow_links)
    metadata = read_metadata(keys, inside)
    if metadata is None:
        raise NoMatrixError(f"{path} holds no array under {inside}", remedy=f"See: bigsvd inspect {path}")
    return np.asarray(open_zarr(keys, inside, metadata.zarr_format)[...])

"""What files keep beside an array: a mask of its features, and the coordinates of its axes."""

from __future__ import annotations

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

    They are what HDF5 attaches as dimension scale, or what lies in a Zarr store beside the array under the name of the
    axis, as xarray has it. Labels are no part of the matrix: those that cannot be read are left out.
    """
    axes = parent.axes
    found: list[np.ndarray | None] = []
    for axis, places in enumerate(region):
        try:
            values = _scale(parent, axis) if axes.shape[axis] <= MOST_COORDINATES else None
        except (SourceError, OSError, KeyError, ValueError, TypeError, RuntimeError, AttributeError):
            values = None
        fits = values is not None and values.shape == (axes.shape[axis],) and values.dtype.kind in "biuf"
        found.append(values[places.start : places.stop : places.step] if fits and values is not None else None)
    return tuple(found)


def _scale(parent: ArraySource, axis: int) -> np.ndarray | None:
    """Labels of one axis in the file of an array."""
    path, access = getattr(parent, "path", None), getattr(parent, "access", STRICT)
    if hasattr(parent, "dataset"):
        from bigsvd.source.hdf5_file import open_hdf5

        with open_hdf5(str(path)) as file:
            scales = file[parent.dataset].dims[axis]
            # A dimension without values of its own is held by an empty scale (netCDF-4 convention, from memory).
            named = len(scales) and not bytes(scales[0].attrs.get("NAME", b"")).startswith(b"This is a netCDF dim")
            return np.asarray(scales[0][...]) if named and scales[0].ndim == 1 else None
    if hasattr(parent, "inside") and parent.axes.names and parent.axes.names[axis]:
        group = parent.inside.rpartition("/")[0]
        name = parent.axes.names[axis]
        if "/" in name or name == parent.inside.rpartition("/")[2]:
            return None
        return _load(str(path), f"{group}/{name}".lstrip("/"), access)
    return None


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

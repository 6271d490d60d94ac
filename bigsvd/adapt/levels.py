"""One resolution out of an image that is kept in several."""

from __future__ import annotations

import os
from typing import Any

from bigsvd.errors import NoMatrixError, OptionError, SeveralMatricesError
from bigsvd.source import Access, survey
from bigsvd.units import show_count, show_shape


def choose_level(where: Any, matrix: str | None, level: int | None, access: Access) -> str | None:
    """Path of the array that holds a level of an image.

    Parameters
    ----------
    where : path
    matrix : str or None
        Group of the image, where the store holds several.
    level : int or None
        0 is the full resolution; None leaves `matrix` as it is, and the full resolution is taken.
    access : Access

    Returns
    -------
    str or None

    Raises
    ------
    OptionError
        If the level is no number of a level.
    NoMatrixError
        If there is no image of several resolutions, or not that level of it.
    SeveralMatricesError
        If several images have that level.
    """
    if level is None:
        return matrix
    if not isinstance(where, (str, os.PathLike)):
        raise OptionError(
            f"level={level} was given with {type(where).__name__}, which is one array",
            remedy="Give the path of the store, or leave level out.",
        )
    if level < 0:
        raise OptionError(f"--level {level} is not a level", remedy="Give 0 for the full resolution, 1 for the next.")
    inside = (matrix or "").strip("/")
    found = [
        one
        for one in survey(where, access)
        if one.level is not None and (not inside or one.path.startswith(f"{inside}/"))
    ]
    chosen = [one for one in found if one.level == level]
    lines = [f"level {one.level}: {one.path}  {show_shape(one.shape)}" for one in found[:12]]
    at = f"{where}:{inside}" if inside else f"{where}"
    if not found:
        raise NoMatrixError(
            f"--level {level}: {at} is no image of several resolutions",
            evidence=["a group with the attribute multiscales, as OME-Zarr has it, is looked for"],
            remedy="Leave out --level; name an array with --matrix.",
        )
    if not chosen:
        raise NoMatrixError(
            f"{at} has no level {level}",
            evidence=lines,
            remedy=f"Give --level 0 to {max(one.level or 0 for one in found)}.",
        )
    if len(chosen) > 1:
        first = chosen[0].path.rpartition("/")[0]
        raise SeveralMatricesError(
            f"{at} holds {show_count(len(chosen))} images with a level {level}",
            evidence=lines,
            remedy=f"Name one: --matrix {first} --level {level}",
        )
    return chosen[0].path

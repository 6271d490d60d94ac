"""Which axes become samples, which part of an array is taken, and which of its features: as asked, and checked."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from bigsvd.errors import OptionError, UnsupportedMatrixError
from bigsvd.source.array_axes import ArrayAxes
from bigsvd.source.unfolding import Side, Unfolding
from bigsvd.units import show_count, show_shape

Axes = str | int | Sequence[str | int]
Region = str | Mapping[str | int, slice | int] | Sequence[slice | int]
# Runs of entries shorter than this are read with what lies between them (as in `positional`).
_RUN_BYTES = 4096


@dataclass(frozen=True)
class AxisChoice:
    """What the user says of the axes of an array.

    Attributes
    ----------
    sample_axes : str, int or sequence of them, optional
        Numbers or names of the axes that become the samples, with commas between them in one text.
    region : str, mapping or sequence, optional
        Part of every axis: ``"time=0:5000:2,y=100:200"`` by name, ``"0:5000:2,100:200,:"`` by position, or slices.
    mask : str or ndarray, optional
        Which features are taken: an array of the shape of their axes, of bool or of 0 and 1, or where it lies.
    """

    sample_axes: Axes | None = None
    region: Region | None = None
    mask: Any = None

    def __bool__(self) -> bool:
        return self.sample_axes is not None or self.region is not None or self.mask is not None


NO_CHOICE = AxisChoice()


def sample_axes_of(axes: ArrayAxes, asked: Axes | None, name: str) -> tuple[int, ...]:
    """Numbers of the axes that hold the samples.

    Raises
    ------
    OptionError
        If there is no such axis, or none is left for the features.
    UnsupportedMatrixError
        If there are more than two axes, none was named, and no marker says which hold the samples.
    """
    if asked is None:
        if len(axes.shape) == 2:
            return axes.samples or (0,)
        if axes.samples:
            return axes.samples
        raise UnsupportedMatrixError(
            f"{name} is {len(axes.shape)}-D, and nothing says which of its axes are the samples",
            evidence=[f"axes: {show_axes(axes)}"],
            remedy=f"Name them, the others become the features: --sample-axes {axes.name(0).removeprefix('axis ')}"
            f" (in Python: sample_axes={json.dumps(axes.names[0]) if axes.names and axes.names[0] else 0})",
        )
    parts = asked.split(",") if isinstance(asked, str) else [asked] if isinstance(asked, int) else list(asked)
    found = [axis_number(axes, part, "--sample-axes", name) for part in parts]
    if len(set(found)) != len(found) or not found:
        raise OptionError(f"--sample-axes {asked!r} names an axis twice, or none", remedy="Name each of them once.")
    if len(found) == len(axes.shape):
        raise OptionError(
            f"--sample-axes {asked!r} takes all {len(found)} axes of {name}, and none is left for the features",
            evidence=[f"axes: {show_axes(axes)}"],
            remedy="Leave out at least one.",
        )
    return tuple(sorted(found))


def axis_number(axes: ArrayAxes, asked: str | int, option: str, name: str) -> int:
    """Number of an axis that is given by number or by name."""
    word = str(asked).strip()
    if not isinstance(asked, bool):
        if word in axes.names and word:
            return axes.names.index(word)
        if re.fullmatch(r"-?\d+", word) and -len(axes.shape) <= int(word) < len(axes.shape):
            return int(word) % len(axes.shape)
    raise OptionError(
        f"{option} names the axis {word!r}, which {name} does not have",
        evidence=[f"axes: {show_axes(axes)}"],
        remedy=f"Give a number from 0 to {len(axes.shape) - 1}" + (", or one of the names." if axes.names else "."),
    )


def show_axes(axes: ArrayAxes) -> str:
    """Number, name and length of every axis in words: ``0 time 20,000, 1 y 512``."""
    names = axes.names or ("",) * len(axes.shape)
    return ", ".join(
        " ".join(part for part in (str(number), name, show_count(side)) if part)
        for number, (name, side) in enumerate(zip(names, axes.shape, strict=True))
    )


def region_of(axes: ArrayAxes, asked: Region | None, name: str) -> tuple[range, ...]:
    """Places that are taken along every axis.

    Raises
    ------
    OptionError
        If it is not understood, names no axis of the array, reaches beyond it, or holds nothing.
    """
    taken = [range(side) for side in axes.shape]
    if asked is None:
        return tuple(taken)
    for axis, part in _parts(axes, asked, name):
        taken[axis] = _places(axes, axis, part, asked)
    return tuple(taken)


def _parts(axes: ArrayAxes, asked: Region, name: str) -> list[tuple[int, str | slice | int]]:
    """Axis and part of it, as they were given."""
    named: list[tuple[str | int, Any]]
    if isinstance(asked, Mapping):
        named = list(asked.items())
    elif isinstance(asked, str) and "=" in asked:
        named = []
        for word in asked.split(","):
            axis, equals, part = word.partition("=")
            if not equals:
                raise OptionError(
                    f"--region {asked} mixes parts with and without a name: {word!r}",
                    remedy="Name every axis, as in time=0:5000,y=100:200, or none.",
                )
            named.append((axis, part))
    else:
        parts = asked.split(",") if isinstance(asked, str) else list(asked)
        if len(parts) > len(axes.shape):
            raise OptionError(
                f"--region has {len(parts)} parts, and {name} has {len(axes.shape)} axes",
                evidence=[f"axes: {show_axes(axes)}"],
                remedy="Give a part for each axis, : for all of it, or name the axes: time=0:5000",
            )
        named = list(enumerate(parts))
    return [(axis_number(axes, axis, "--region", name), part) for axis, part in named]


def _places(axes: ArrayAxes, axis: int, part: str | slice | int, asked: Region) -> range:
    """Places along one axis."""
    side = axes.shape[axis]
    found = _as_slice(part)
    if found is None or (found.step is not None and found.step < 1):
        raise OptionError(
            f"--region {asked}: {part!r} is no part of an axis",
            remedy="Write start:stop or start:stop:step with a step above 0, : for all, or one number.",
        )
    ends = [end for end in (found.start, found.stop) if end is not None]
    places = range(*found.indices(side))
    if any(not -side <= end <= side for end in ends) or not places:
        raise OptionError(
            f"--region {asked}: {part!r} of {axes.name(axis)} "
            + ("holds nothing" if not places else "reaches beyond it"),
            evidence=[f"{axes.name(axis)} has {show_count(side)} entries, 0 to {show_count(side - 1)}"],
            remedy=f"Stay within 0:{side}.",
        )
    return places


def _as_slice(part: str | slice | int) -> slice | None:
    """A part of an axis as a slice; None where it is none."""
    if isinstance(part, slice):
        return part
    if isinstance(part, int | np.integer):
        return slice(int(part), int(part) + 1 or None)
    match = re.fullmatch(r"\s*(-?\d+)?\s*(?:(:)\s*(-?\d+)?\s*(?::\s*(-?\d+)?)?)?\s*", part)
    if match is None or not (match[1] or match[2]):
        return None
    start, stop, step = (int(match[group]) if match[group] else None for group in (1, 3, 4))
    if match[2]:
        return slice(start, stop, step)
    assert start is not None
    return slice(start, start + 1 or None)


def plan_unfolding(
    axes: ArrayAxes, samples: tuple[int, ...], region: tuple[range, ...], mask: np.ndarray | None, item: int
) -> Unfolding:
    """How an array is unfolded so that no chunk is cut.

    Parameters
    ----------
    axes : ArrayAxes
    samples : tuple of int
        Axes that hold the samples, ascending.
    region : tuple of range
        Places that are taken along every axis.
    mask : ndarray of bool or None
        Features that are taken, of the shape of their axes in that region.
    item : int
        Bytes of an entry.

    Returns
    -------
    Unfolding
        Samples are rows, except where they are the axes that run fastest.
    """
    count = len(axes.shape)
    features = tuple(axis for axis in range(count) if axis not in samples)
    fastest = samples == tuple(range(count - len(samples), count)) and not axes.reversed
    cuts = [_cuts(axes, axis, region[axis], item) for axis in range(count)]
    sample_side = Side(tuple(cuts[axis] for axis in samples))
    feature_side = Side(tuple(cuts[axis] for axis in features), mask)
    return Unfolding(
        names=tuple(axes.name(axis) for axis in range(count)),
        row_axes=features if fastest else samples,
        column_axes=samples if fastest else features,
        rows=feature_side if fastest else sample_side,
        columns=sample_side if fastest else feature_side,
        samples_are_rows=not fastest,
        starts=tuple(places.start for places in region),
        steps=tuple(places.step for places in region),
    )


def _cuts(axes: ArrayAxes, axis: int, places: range, item: int) -> np.ndarray:
    """Where chunks begin along an axis, in places of the region."""
    if axes.chunks is None and places.step > 1:
        # What is left out between long runs is not read; short ones are read with it.
        run = item * int(np.prod(axes.shape[axis + 1 :], dtype=np.int64))
        if not axes.reversed and run >= _RUN_BYTES:
            return np.arange(len(places) + 1)
        return np.array([0, len(places)])
    inside = np.clip(-(-(axes.cuts(axis) - places.start) // places.step), 0, len(places))
    return np.unique(np.append(inside, (0, len(places))))


def check_mask(mask: np.ndarray, shape: tuple[int, ...], where: str) -> np.ndarray:
    """A mask as truth values.

    Raises
    ------
    OptionError
        If it has another shape than the axes of the features, holds anything but 0 and 1, or chooses nothing.
    """
    if mask.shape != shape:
        raise OptionError(
            f"{where} has the shape {show_shape(mask.shape)}, and the axes of the features {show_shape(shape)}",
            remedy="Give a mask of the whole of these axes; --region applies to it as to the array.",
        )
    if mask.dtype.kind not in "biuf" or not np.isin(mask, (0, 1)).all():
        raise OptionError(
            f"{where} holds other values than true and false, or 0 and 1",
            evidence=[f"type {mask.dtype}"],
            remedy="Write it as truth values: mask = labels > 0",
        )
    return mask.astype(np.bool_)

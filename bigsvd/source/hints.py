"""Which axis holds the samples, said only where a sure marker in the file says so."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

Hint = tuple[str | None, str]
NO_HINT: Hint = (None, "")
_SAMPLES = {"time", "frame", "frames", "sample", "samples", "cell", "cells", "obs"}
_FEATURES = {"gene", "genes", "feature", "features", "var", "vars", "pixel", "pixels"}


def hint_from_names(names: Sequence[str | None], marker: str) -> Hint:
    """Read the names of the two axes; names that contradict each other say nothing."""
    if len(names) != 2:
        return NO_HINT
    votes = []
    for axis, name in enumerate(names):
        word = (name or "").strip().lower()
        if word in _SAMPLES:
            votes.append((axis, f"{marker} names axis {axis} {name!r}"))
        elif word in _FEATURES:
            votes.append((1 - axis, f"{marker} names axis {axis} {name!r}"))
    if not votes or len({axis for axis, _ in votes}) > 1:
        return NO_HINT
    return ("rows", "columns")[votes[0][0]], "; ".join(reason for _, reason in votes)


def sample_axis_from_names(names: Sequence[str | None], marker: str) -> tuple[tuple[int, ...], str]:
    """The axis of an array of more than two that is named as samples are; none where several are."""
    words = [(name or "").strip().lower() for name in names]
    found = [axis for axis, word in enumerate(words) if word in _SAMPLES or word == "t"]
    if len(found) != 1:
        return (), ""
    return (found[0],), f"{marker} names axis {found[0]} {names[found[0]]!r}"


def axis_names(dataset: Any) -> tuple[str, ...]:
    """Names of the axes of an HDF5 dataset by its dimension scales; empty where none has one."""
    try:
        names = tuple(_axis_name(dataset, axis) for axis in range(len(dataset.shape)))
    except (OSError, KeyError, ValueError, TypeError, RuntimeError):
        return ()
    # netCDF-4 without a scale of its own for a dimension calls it so.
    names = tuple("" if name.startswith("phony_dim_") else name for name in names)
    return names if any(names) else ()


def annotated_hint(path: str, encoding_type: object) -> Hint:
    """Matrices of the AnnData layout hold observations, which are samples, in rows."""
    inside = path.strip("/")
    if encoding_type == "anndata" and (inside in ("X", "raw/X") or inside.startswith("layers/")):
        return "rows", f"AnnData layout: the rows of {inside} are observations"
    return NO_HINT


def hdf5_hint(dataset: Any, path: str) -> Hint:
    """Look for markers on a two-dimensional HDF5 dataset and at the root of its file."""
    if len(dataset.shape or ()) != 2:
        return NO_HINT
    root = dataset.file
    try:
        hint = annotated_hint(path, root.attrs.get("encoding-type"))
        if hint[0]:
            return hint
        inside = path.strip("/")
        if {"row_attrs", "col_attrs", "matrix"} <= set(root) and (inside == "matrix" or inside.startswith("layers/")):
            return "columns", "Loom layout: the columns of the matrix are samples"
        if "MATLAB_class" in dataset.attrs:
            return "columns", "written by MATLAB, which stores a matrix transposed: its rows are the columns here"
        return hint_from_names([_axis_name(dataset, axis) for axis in (0, 1)], "the dimension scale")
    except (OSError, KeyError, ValueError, TypeError, RuntimeError):
        # A marker that cannot be read is no marker; the matrix itself may be fine.
        return NO_HINT


def _axis_name(dataset: Any, axis: int) -> str:
    """Label of an axis, else the name of the first scale attached to it."""
    dimension = dataset.dims[axis]
    if dimension.label:
        return str(dimension.label)
    return str(dimension[0].name).rsplit("/", 1)[-1] if len(dimension) else ""

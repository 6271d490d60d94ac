"""The axes of the array that a matrix was unfolded from, as a result keeps them, and vectors folded back to images."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from bigsvd.source import Side, Unfolding

# Longest axis of which every label is kept; longer ones are told by start and step.
MOST_LABELS = 1_000_000
MASK, SAMPLE_MASK = "feature_mask", "sample_mask"
# Names that an array of a result has, or a dimension, or that no folder may have everywhere.
_TAKEN = {
    *("row", "column", "component", "computed", "left_vectors", "right_vectors", "singular_values", "column_mean"),
    *("column_scale", "spectrum", "certificate", "row_name", "column_name", MASK, SAMPLE_MASK),
}
_PLAIN_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]{0,63}")


@dataclass(frozen=True, eq=False)
class StoredAxis:
    """One axis of the array.

    Attributes
    ----------
    number : int
        In the array.
    name : str
        As the file has it, or ``axis 1``.
    dimension : str
        What its dimension, and the array of its labels, is called in the store.
    size, start, step : int
        Which entries of the axis were taken.
    labels : ndarray or None, shape (size,)
        Coordinates as the file has them, else places in the file; None for an axis of more than a million entries.
    from_file : bool
        Whether these labels are coordinates of the file.
    """

    number: int
    name: str
    dimension: str
    size: int
    start: int
    step: int
    labels: np.ndarray | None
    from_file: bool

    def facts(self) -> dict[str, Any]:
        """All but the labels."""
        return {
            "axis": self.number,
            "name": self.name,
            "dimension": self.dimension,
            "size": self.size,
            "start": self.start,
            "step": self.step,
            "labels": None if self.labels is None else "file" if self.from_file else "places",
        }


@dataclass(frozen=True, eq=False)
class StoredAxes:
    """What is needed to fold vectors back.

    Attributes
    ----------
    samples, features : tuple of StoredAxis
        Axes that rows and columns of the matrix stand for; the last of each runs fastest.
    mask, sample_mask : ndarray of bool or None
        Features that are columns, and samples that are rows, of the shape of their axes; None for all.
    """

    samples: tuple[StoredAxis, ...]
    features: tuple[StoredAxis, ...]
    mask: np.ndarray | None = None
    sample_mask: np.ndarray | None = None

    @classmethod
    def of(cls, unfolding: Unfolding) -> StoredAxes:
        """Take them from the matrix that was decomposed."""
        used: set[str] = set(_TAKEN)

        def stored(axis: int, side: Side, at: int) -> StoredAxis:
            name, size = unfolding.names[axis], side.lengths[at]
            dimension = name if _PLAIN_NAME.fullmatch(name) and name not in used else f"axis_{axis}"
            used.add(dimension)
            labels = unfolding.coordinates[axis] if unfolding.coordinates else None
            from_file = labels is not None
            start, step = unfolding.starts[axis], unfolding.steps[axis]
            if labels is None and size <= MOST_LABELS:
                labels = np.arange(start, start + size * step, step)
            if labels is not None:
                labels = labels.astype(labels.dtype.newbyteorder("="))
            return StoredAxis(axis, name, dimension, size, start, step, labels, from_file)

        return cls(
            tuple(stored(axis, unfolding.samples, at) for at, axis in enumerate(unfolding.sample_axes)),
            tuple(stored(axis, unfolding.features, at) for at, axis in enumerate(unfolding.feature_axes)),
            unfolding.features.chosen,
            unfolding.samples.chosen,
        )

    @classmethod
    def restore(cls, facts: Mapping[str, Any], arrays: Mapping[str, np.ndarray]) -> StoredAxes:
        """Take them from what a result keeps."""
        samples, features = (
            tuple(
                StoredAxis(
                    each["axis"], each["name"], each["dimension"], each["size"], each["start"], each["step"],
                    arrays.get(each["dimension"]), each["labels"] == "file",
                )
                for each in facts[side]
            )
            for side in ("samples", "features")
        )  # fmt: skip
        return cls(samples, features, arrays.get(MASK), arrays.get(SAMPLE_MASK))

    def facts(self) -> dict[str, Any]:
        """All but the arrays."""
        return {
            "samples": [axis.facts() for axis in self.samples],
            "features": [axis.facts() for axis in self.features],
            "mask": self.mask is not None,
            "sample_mask": self.sample_mask is not None,
        }

    def arrays(self) -> dict[str, tuple[np.ndarray, tuple[str, ...]]]:
        """Arrays by name, with the names of their dimensions."""
        found: dict[str, tuple[np.ndarray, tuple[str, ...]]] = {
            axis.dimension: (axis.labels, (axis.dimension,))
            for axis in (*self.samples, *self.features)
            if axis.labels is not None
        }
        if self.mask is not None:
            found[MASK] = (self.mask, tuple(axis.dimension for axis in self.features))
        if self.sample_mask is not None:
            found[SAMPLE_MASK] = (self.sample_mask, tuple(axis.dimension for axis in self.samples))
        return found

    def shape(self, side: Literal["samples", "features"]) -> tuple[int, ...]:
        """Lengths of the axes of one side."""
        return tuple(axis.size for axis in (self.samples if side == "samples" else self.features))

    def fold(self, vectors: np.ndarray, side: Literal["samples", "features"]) -> np.ndarray:
        """Fold vectors, a row for each sample or feature, to images.

        Parameters
        ----------
        vectors : ndarray, shape (samples or features, k)
        side : {"samples", "features"}

        Returns
        -------
        ndarray, shape (k, *axes)
            NaN where no feature, or no sample, was taken.
        """
        shape = self.shape(side)
        mask = self.sample_mask if side == "samples" else self.mask
        if mask is None:
            return np.ascontiguousarray(vectors.T).reshape(-1, *shape)
        images = np.full((vectors.shape[1], math.prod(shape)), np.nan, vectors.dtype)
        images[:, mask.reshape(-1)] = vectors.T
        return images.reshape(-1, *shape)


def names_in(record: Any) -> Sequence[str]:
    """Names of the arrays of axes that a root attribute speaks of, whatever it holds."""
    try:
        axes = record["axes"]
        names = [str(each["dimension"]) for side in ("samples", "features") for each in axes[side]]
    except (KeyError, TypeError):
        return []
    return [MASK, SAMPLE_MASK, *(name for name in names if _PLAIN_NAME.fullmatch(name) and name not in _TAKEN)]

"""The axes of a stored array: what they are called, which of them holds samples, how they are cut into chunks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bigsvd.source.names import Names


@dataclass(frozen=True)
class ArrayAxes:
    """An array of two or more axes, before any of them are run together.

    Attributes
    ----------
    shape : tuple of int
    chunks : tuple of int or None
        The smallest box that can be read without reading anything twice; None where any box will do.
    names : tuple of str
        Of every axis; empty where it has none.
    samples : tuple of int
        Axes that a marker in the file says hold samples; empty where none does.
    why : str
        That marker, for people.
    reversed : bool
        Whether entries lie in Fortran order, the last axis slowest.
    borders : tuple of tuple of int
        Where the chunks of every axis begin, and the end; only where they are of unequal size.
    coordinates : tuple of (Names or None)
        Labels along every axis, not read yet; empty where no axis has any.
    """

    shape: tuple[int, ...]
    chunks: tuple[int, ...] | None = None
    names: tuple[str, ...] = ()
    samples: tuple[int, ...] = ()
    why: str = ""
    reversed: bool = False
    borders: tuple[tuple[int, ...], ...] = ()
    coordinates: tuple[Names | None, ...] = ()

    def cuts(self, axis: int) -> np.ndarray:
        """Where the chunks along an axis begin, and the end."""
        side = self.shape[axis]
        if self.borders:
            return np.array(self.borders[axis])
        if self.chunks is None:
            return np.array([0, side])
        return np.append(np.arange(0, side, self.chunks[axis]), side)

    def labels(self, axis: int) -> Names | None:
        """Labels along an axis, one for each of its places; None where the file has none."""
        found = self.coordinates[axis] if self.coordinates else None
        return found if found is not None and found.count == self.shape[axis] else None

    def name(self, axis: int) -> str:
        """What to call an axis.

        >>> ArrayAxes((20, 5, 5), names=("time", "", "")).name(1)
        'axis 1'
        """
        return (self.names[axis] if self.names else "") or f"axis {axis}"

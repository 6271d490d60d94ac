"""Panels of the stored matrix as they are handed to the workers, read anew or kept."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from bigsvd.plan import Geometry
from bigsvd.source import Source
from bigsvd.sweep.events import Control


class PanelReader:
    """Reads panels; keeps those it was told to keep.

    Parameters
    ----------
    source : Source
    geometry : Geometry
    control : Control
        Counts what is read.
    keep : bool
        Keep every panel in its stored type once it was read.
    """

    def __init__(self, source: Source, geometry: Geometry, control: Control, *, keep: bool = False) -> None:
        self.source = source
        self.geometry = geometry
        self.control = control
        self.keep = keep
        self._kept: dict[int, np.ndarray] = {}
        self._announce = getattr(source, "announce", None)

    @property
    def dtype(self) -> np.dtype:
        """Stored type."""
        return self.source.spec.dtype

    def buffer(self) -> np.ndarray:
        """Memory for the largest panel; nothing when panels are kept."""
        height = (
            0 if self.keep else max(b - a for a, b in zip(self.geometry.edges, self.geometry.edges[1:], strict=False))
        )
        return np.empty(height * self.geometry.across, self.dtype)

    def fetch(self, panel: int, buffer: np.ndarray) -> np.ndarray:
        """Return the panel, contiguous as stored, shape (rows, columns) of its rectangle."""
        kept = self._kept.get(panel) if self.keep else self._kept.pop(panel, None)
        rows, columns = self.geometry.rectangle(panel)
        shape = (rows[1] - rows[0], columns[1] - columns[0])
        size = shape[0] * shape[1] * self.dtype.itemsize
        if kept is not None:
            self.control.advance(size, read=0)
            return kept
        out = np.empty(shape, self.dtype) if self.keep else buffer[: shape[0] * shape[1]].reshape(shape)
        self.source.read(rows, columns, out)
        if self.keep:
            self._kept[panel] = out
        self.control.advance(size, read=self.decoded(panel))
        return out

    def announce(self, panel: int) -> None:
        """Have the system fetch a panel that will be fetched next, into its own cache, while this one is multiplied."""
        if self._announce is not None and panel not in self._kept:
            self._announce(*self.geometry.rectangle(panel))

    def pass_over(self, runs: Iterable[tuple[int, int]]) -> None:
        """Count panels first … stop of each run as done, unread: an earlier process summed them."""
        lines = sum(self.geometry.edges[stop] - self.geometry.edges[first] for first, stop in runs)
        if lines:
            self.control.advance(lines * self.geometry.across * self.dtype.itemsize, read=0)

    def hold(self, panel: int) -> None:
        """Read a panel now and hold it until it is fetched."""
        rows, columns = self.geometry.rectangle(panel)
        out = np.empty((rows[1] - rows[0], columns[1] - columns[0]), self.dtype)
        self.source.read(rows, columns, out)
        self._kept[panel] = out
        self.control.advance(out.nbytes, read=self.decoded(panel))

    def peek(self, panel: int) -> np.ndarray:
        """A held panel, which stays held."""
        return self._kept[panel]

    def decoded(self, panel: int) -> int:
        """Bytes decoded to read a panel: more than its own where it is part of a chunk."""
        start, stop = self.geometry.edges[panel : panel + 2]
        first, last = self.source.spec.whole_chunks(self.geometry.axis, start, stop)
        return (last - first) * self.geometry.across * self.dtype.itemsize

    def forget(self) -> None:
        """Drop the kept panels."""
        self._kept = {}

"""Panels of the stored matrix as they are handed to the workers, read anew or kept."""

from __future__ import annotations

from collections.abc import Iterable
from itertools import pairwise
from typing import TYPE_CHECKING, TypeAlias, cast

import numpy as np

from bigsvd.plan import Geometry
from bigsvd.source import LineSource, Source
from bigsvd.sweep.events import Control

if TYPE_CHECKING:
    from scipy.sparse import csr_array

# As it is stored, or its lines without their zeros.
Panel: TypeAlias = "np.ndarray | csr_array"


class PanelReader:
    """Reads panels; keeps those it was told to keep.

    Parameters
    ----------
    source : Source
    geometry : Geometry
        Says whether panels come with their zeros; a source that is to leave them out must be a `LineSource`.
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
        self._kept: dict[int, Panel] = {}
        self._announce = getattr(source, "announce", None)

    @property
    def dtype(self) -> np.dtype:
        """Stored type."""
        return self.source.spec.dtype

    def buffer(self) -> np.ndarray:
        """Memory for the largest panel; nothing when panels are kept, or bring their own without zeros."""
        own = self.keep or self.geometry.sparse
        height = 0 if own else max(stop - start for start, stop in pairwise(self.geometry.edges))
        return np.empty(height * self.geometry.across, self.dtype)

    def fetch(self, panel: int, buffer: np.ndarray) -> Panel:
        """Return the panel.

        Parameters
        ----------
        panel : int
        buffer : ndarray
            What `buffer` gave.

        Returns
        -------
        ndarray, shape (rows, columns) of its rectangle, contiguous as stored
            Where zeros are multiplied.
        scipy.sparse.csr_array, shape (lines, across)
            Where they are not.
        """
        kept = self._kept.get(panel) if self.keep else self._kept.pop(panel, None)
        rows, columns = self.geometry.rectangle(panel)
        shape = (rows[1] - rows[0], columns[1] - columns[0])
        size = shape[0] * shape[1] * self.dtype.itemsize
        if kept is not None:
            self.control.advance(size, read=0)
            return kept
        out: Panel
        if self.geometry.sparse:
            out = self._read_lines(panel)
        else:
            out = np.empty(shape, self.dtype) if self.keep else buffer[: shape[0] * shape[1]].reshape(shape)
            self.source.read(rows, columns, out)
        if self.keep:
            self._kept[panel] = out
        self.control.advance(size, read=self.decoded(panel))
        return out

    def _read_lines(self, panel: int) -> csr_array:
        """Read a panel without its zeros, places as short as they may be."""
        from scipy.sparse import csr_array

        start, stop = self.geometry.edges[panel : panel + 2]
        found = cast("LineSource", self.source).read_lines(start, stop)
        short = np.dtype(np.int32 if max(found.nnz, self.geometry.across) < 2**31 else np.int64)
        places = found.indices.astype(short, copy=False), found.indptr.astype(short, copy=False)
        return csr_array((found.data, *places), shape=(stop - start, self.geometry.across))

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
        shape = (rows[1] - rows[0], columns[1] - columns[0])
        if self.geometry.sparse:
            self._kept[panel] = self._read_lines(panel)
        else:
            out = np.empty(shape, self.dtype)
            self.source.read(rows, columns, out)
            self._kept[panel] = out
        self.control.advance(shape[0] * shape[1] * self.dtype.itemsize, read=self.decoded(panel))

    def peek(self, panel: int) -> Panel:
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

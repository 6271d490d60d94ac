"""A sparse matrix, compressed by rows or by columns, as a source: read line by line, never whole."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np

from bigsvd.source.complete import check_complete
from bigsvd.source.rectangle import Span, require_rectangle, require_sizes
from bigsvd.source.sparse_describe import sparse_type
from bigsvd.source.sparse_layout import SparseLayout
from bigsvd.source.sparse_lines import IndexCheck, densify, index_type, longest_line, read_pointers, summed
from bigsvd.source.sparse_runs import BATCH_ENTRIES, Runs
from bigsvd.source.spec import Absent, MatrixSpec, Source
from bigsvd.source.stamp import digest

# Beside value and index of an entry: the batch and its line numbers while it is made dense.
_DENSE_BYTES = 24


class SparseSource:
    """Reads the three lists of a sparse matrix by ranges; the pointers are held, 8 bytes a line.

    Parameters
    ----------
    layout : SparseLayout
    parts : tuple of Source
        Values, indices and pointers, each as a matrix of one row; the first two may be None where nothing is stored.
    spec : MatrixSpec
        Name, encoding, stored bytes, cautions, and the fingerprint of what the parts do not tell.
    """

    def __init__(
        self, layout: SparseLayout, parts: tuple[Source | None, Source | None, Source], spec: MatrixSpec
    ) -> None:
        self.layout = layout
        self._values, self._indices, self._pointer_source = parts
        self.spec = spec
        self._forget()
        item = spec.dtype.itemsize
        require_sizes(layout.shape, None, item, spec.name)
        # What is missing of the pointers must be said before they are read.
        check_complete(self._pointer_source)
        pointers = self._pointers()
        longest = longest_line(pointers)
        # A sum in place needs a wider copy of the values and one that goes back.
        batch = min(BATCH_ENTRIES, layout.nonzeros)
        held = max(longest, batch) * (2 * item + 16) + batch * _DENSE_BYTES
        rows, columns = layout.shape
        known = [part.spec for part in parts if part is not None]
        self.spec = replace(
            spec,
            chunks=(1, columns) if layout.compressed_axis == 0 else (rows, 1),
            storage="sparse",
            fingerprint=digest(spec.fingerprint, layout, *(part.fingerprint for part in known))
            if all(part.fingerprint for part in known)
            else "",
            samples_hint=layout.hint[0] or spec.samples_hint,
            hint_reason=layout.hint[1] if layout.hint[0] else spec.hint_reason,
            cautions=(*spec.cautions, *known[0].cautions),
            codecs=known[0].codecs,
            decode_bytes=held + sum(runs.held_bytes for runs in self._runs.values()),
            held_bytes=spec.held_bytes + pointers.nbytes,
            nonzeros=layout.nonzeros,
            compressed_axis=layout.compressed_axis,
        )

    def _forget(self) -> None:
        self._lock = threading.Lock()
        self._held: np.ndarray | None = None
        parts = {"values": self._values, "indices": self._indices}
        self._runs = {name: Runs(part) for name, part in parts.items() if part is not None}

    def __getstate__(self) -> dict[str, Any]:
        return {name: value for name, value in self.__dict__.items() if name not in ("_lock", "_held", "_runs")}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._forget()

    def __repr__(self) -> str:
        return f"SparseSource({self.spec.name!r})"

    def _pointers(self) -> np.ndarray:
        with self._lock:
            if self._held is None:
                self._held = read_pointers(Runs(self._pointer_source), self.layout, self.spec.name)
            return self._held

    def close(self) -> None:
        """Release the file. Reading again opens it again."""
        for runs in self._runs.values():
            runs.forget()
            runs.source.close()
        self._pointer_source.close()

    def lines_nonzeros(self, first: int, stop: int) -> int:
        """Entries stored in lines first … stop along the compressed axis, told by the pointers alone."""
        pointers = self._pointers()
        return int(pointers[stop] - pointers[first])

    def read_lines(self, first: int, stop: int) -> Any:
        """Read lines along the compressed axis without making them dense.

        Parameters
        ----------
        first, stop : int
            First line and one past the last: rows, or columns where the matrix is compressed by columns.

        Returns
        -------
        scipy.sparse.csr_array, shape (stop - first, entries across), dtype ``spec.dtype``
            Indices sorted, of 32 bits where they fit, and no place twice.

        Raises
        ------
        DamagedSourceError
            If an index lies outside the matrix, or stored bytes are absent or do not decode.
        UnsupportedMatrixError
            If entries of one place have a sum that does not fit into their type.
        """
        from scipy.sparse import csr_array

        if not 0 <= first <= stop <= self.layout.lines:
            raise ValueError(f"lines {first}:{stop} asked of a matrix with {self.layout.lines}")
        pointers, across = self._pointers(), self.layout.shape[1 - self.layout.compressed_axis]
        start, end = int(pointers[first]), int(pointers[stop])
        narrow = index_type(across, end - start)
        indices, values = np.empty(end - start, narrow), np.empty(end - start, self.spec.dtype)
        if start < end:
            self._runs["indices"].read(start, end, indices, IndexCheck(self.layout, pointers, self.spec.name))
            runs = self._runs["values"]
            # Truth values are the numbers 0 and 1 as they lie there.
            runs.read(start, end, values.view(np.bool_) if runs.dtype.kind == "b" else values)
        begins = (pointers[first : stop + 1] - start).astype(narrow)
        return summed(csr_array((values, indices, begins), shape=(stop - first, across)), self.spec.name)

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Read the half-open rectangle rows × columns into `out`; see `Source.read`.

        Whole lines are read, some at a time; of each, what lies outside the rectangle is dropped at once.
        """
        require_rectangle(self.spec, rows, columns, out)
        if not out.size:
            return
        by_rows = self.layout.compressed_axis == 0
        lines, others = (rows, columns) if by_rows else (columns, rows)
        target = out if by_rows else out.T
        whole = others == (0, self.layout.shape[1 - self.layout.compressed_axis])
        for first, stop in self._groups(*lines):
            part = self.read_lines(first, stop)
            densify(part if whole else part[:, others[0] : others[1]], target[first - lines[0] : stop - lines[0]])

    def _groups(self, first: int, stop: int) -> Iterator[Span]:
        """Cut a range of lines into groups of about `BATCH_ENTRIES` entries, of at least a line each."""
        pointers = self._pointers()
        while first < stop:
            end = int(np.searchsorted(pointers, pointers[first] + BATCH_ENTRIES, "right")) - 1
            end = min(stop, max(end, first + 1))
            yield first, end
            first = end

    def announce(self, rows: Span, columns: Span) -> None:
        """Have the system fetch a rectangle that will be read soon."""
        first, stop = rows if self.layout.compressed_axis == 0 else columns
        pointers = self._pointers()
        for runs in self._runs.values():
            runs.announce(int(pointers[first]), int(pointers[stop]))

    def require_complete(self) -> None:
        """Look for parts that are absent; see `check_complete`."""
        for part in (self._values, self._indices, self._pointer_source):
            if part is not None:
                check_complete(part)
        if self.spec.absent is None:
            self.spec = self._with_absent()

    def _with_absent(self) -> MatrixSpec:
        """Note in the spec what the parts lack and the user accepts."""
        parts = [part.spec for part in (self._values, self._indices, self._pointer_source) if part is not None]
        lacking = [(part.name, part.absent) for part in parts if part.absent is not None]
        if not lacking:
            return self.spec
        absent = Absent(
            sum(found.chunks for _, found in lacking),
            sum(found.of for _, found in lacking),
            tuple(f"{name}: {place}" for name, found in lacking for place in found.first),
            " and ".join(dict.fromkeys(found.read_as for _, found in lacking)),
        )
        return replace(
            self.spec,
            absent=absent,
            cautions=(*self.spec.cautions, absent.words),
            fingerprint=digest(self.spec.fingerprint, absent),
        )


def new_spec(layout: SparseLayout, name: str, value_type: np.dtype, /, **known: Any) -> MatrixSpec:
    """What is known of a sparse matrix before its pointers are read."""
    dtype = sparse_type(value_type)
    assert dtype is not None, "the layout was checked"
    return MatrixSpec(name=name, shape=layout.shape, dtype=dtype, chunks=(1, 1), storage="sparse", **known)

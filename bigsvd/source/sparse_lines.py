"""Lines of a sparse matrix made of its three lists: pointers and indices checked, duplicates summed, made dense."""

from __future__ import annotations

from typing import Any

import numpy as np

from bigsvd import machine
from bigsvd.errors import DamagedSourceError, UnsupportedMatrixError
from bigsvd.source.sparse_layout import SparseLayout
from bigsvd.source.sparse_runs import BATCH_ENTRIES, Runs
from bigsvd.units import show_bytes, show_count

_REMEDY = "Copy or download the file again, or write the group again from its origin."
_LARGEST = 2**31 - 1


def read_pointers(runs: Runs, layout: SparseLayout, name: str) -> np.ndarray:
    """Read the pointers in 64 bits and check them: from 0, never falling, to the number of entries.

    Parameters
    ----------
    runs : Runs
        Of the list of pointers.
    layout : SparseLayout
    name : str
        Of the matrix, for errors.

    Returns
    -------
    ndarray of int64, shape (lines + 1,)

    Raises
    ------
    DamagedSourceError
        If one does not hold; names the first line where it does not.
    UnsupportedMatrixError
        If they take more memory than is free.
    """
    size, free = 8 * (layout.lines + 1), machine.available_bytes()
    if size > free:
        raise UnsupportedMatrixError(
            f"{name} cannot be opened: {show_bytes(size)} are needed for its pointers, which are held in memory",
            evidence=[f"{show_count(layout.lines)} {layout.line}s, 8 bytes each; {show_bytes(free)} are free"],
            remedy="Give back memory of other programs, or write the matrix in parts of fewer lines.",
        )
    pointers = np.empty(layout.lines + 1, np.int64)
    runs.read(0, layout.lines + 1, pointers)
    # Unsigned ones beyond 2⁶³ are negative here, and so fall.
    found = ""
    if pointers[0] != 0:
        found = f"the first is {show_count(int(pointers[0]))} instead of 0"
    else:
        # Without a list of all differences, which would be as long again.
        for start in range(0, layout.lines, BATCH_ENTRIES):
            falling = np.flatnonzero(np.diff(pointers[start : start + BATCH_ENTRIES + 1]) < 0)
            if falling.size:
                line = start + int(falling[0])
                before, after = (show_count(int(pointers[at])) for at in (line, line + 1))
                found = f"{layout.line} {show_count(line)} begins at entry {before} and ends at entry {after}"
                break
    if not found and pointers[-1] != layout.nonzeros:
        found = f"the last is {show_count(int(pointers[-1]))}, but {show_count(layout.nonzeros)} entries are stored" + (
            f" in {layout.values} and {layout.indices}" if layout.values else ""
        )
    if found:
        raise DamagedSourceError(
            f"{name} is damaged: its pointers, {layout.pointers}, do not rise from 0 to the number of entries",
            evidence=[f"{found} (counted from 0)"],
            remedy=_REMEDY,
        )
    return pointers


def longest_line(pointers: np.ndarray) -> int:
    """Most entries of a line, found without a list of all lengths."""
    parts = (pointers[start : start + BATCH_ENTRIES + 1] for start in range(0, len(pointers) - 1, BATCH_ENTRIES))
    return max((int(np.diff(part).max()) for part in parts), default=0)


def index_type(across: int, nonzeros: int) -> np.dtype:
    """Type of indices and pointers of some lines: 32 bits where they fit."""
    return np.dtype("i4" if max(across, nonzeros) <= _LARGEST else "i8")


class IndexCheck:
    """Refuses indices outside the matrix, before anything is written by them.

    Parameters
    ----------
    layout : SparseLayout
    pointers : ndarray of int64
    name : str
    """

    def __init__(self, layout: SparseLayout, pointers: np.ndarray, name: str) -> None:
        self._layout, self._pointers, self._name = layout, pointers, name
        self._across = layout.shape[1 - layout.compressed_axis]

    def __call__(self, indices: np.ndarray, start: int) -> None:
        """Check a batch whose first entry has this place."""
        if not indices.size or (indices.min() >= 0 and indices.max() < self._across):
            return
        place = int(np.flatnonzero((indices < 0) | (indices >= self._across))[0])
        line = int(np.searchsorted(self._pointers, start + place, "right")) - 1
        layout, other = self._layout, ("column", "row")[self._layout.compressed_axis]
        raise DamagedSourceError(
            f"{self._name} is damaged: {layout.indices} holds an index that is no {other} of the matrix",
            evidence=[
                f"{layout.line} {show_count(line)}, entry {show_count(start + place)}: {other} {int(indices[place])}",
                f"the matrix has {other}s 0 to {show_count(self._across - 1)}",
            ],
            remedy=_REMEDY,
        )


def summed(lines: Any, name: str) -> Any:
    """Sort the entries of every line by index and add up those of the same index, in place.

    Parameters
    ----------
    lines : scipy.sparse.csr_array
    name : str
        Of the matrix, for errors.

    Returns
    -------
    scipy.sparse.csr_array
        The same, if it was so already.

    Raises
    ------
    UnsupportedMatrixError
        If a sum does not fit into the type of the values.
    """
    from scipy.sparse import csr_array

    if lines.has_canonical_format:
        return lines
    lines.sort_indices()
    # Made anew of the same lists, to be asked anew: unsorted is not duplicate.
    lines = csr_array((lines.data, lines.indices, lines.indptr), shape=lines.shape)
    if lines.has_canonical_format:
        return lines
    if lines.dtype.kind not in "iu":
        lines.sum_duplicates()
        return lines
    return _summed_integers(lines, name)


def _summed_integers(lines: Any, name: str) -> Any:
    """Add whole numbers up in a type that holds the sums, and go back to the type of the values if they fit."""
    from scipy.sparse import csr_array

    dtype, limits = lines.dtype, np.iinfo(lines.dtype)
    # 64 bits have no wider type: their sums are made in them, and told by their approximate size.
    wide = np.dtype("i8" if dtype.itemsize < 8 else "f8")
    copies = dtype.itemsize == 8
    sums = csr_array((lines.data.astype(wide), lines.indices, lines.indptr), shape=lines.shape, copy=copies)
    sums.sum_duplicates()
    beyond = (sums.data < float(limits.min)) | (sums.data >= float(int(limits.max) + 1))
    if beyond.any():
        raise UnsupportedMatrixError(
            f"{name} holds several entries of one place, whose sum does not fit into their type, {dtype}",
            evidence=[f"a sum is {sums.data[beyond][0]}; {dtype} holds {limits.min} to {limits.max}"],
            remedy="Write the group again with wider values, or with duplicates summed: matrix.sum_duplicates().",
        )
    if copies:
        lines.sum_duplicates()
        return lines
    return csr_array((sums.data.astype(dtype), sums.indices, sums.indptr), shape=lines.shape)


def densify(lines: Any, out: np.ndarray) -> None:
    """Write lines without duplicates into a dense buffer of any strides, zeros included.

    Parameters
    ----------
    lines : scipy.sparse.csr_array, shape (lines, across)
    out : ndarray of the same shape and type
    """
    if out.flags.c_contiguous or out.flags.f_contiguous:
        lines.toarray(out=out)
        return
    out[...] = 0
    # A batch at a time, lest a single long line takes several times its own size.
    for start in range(0, lines.nnz, BATCH_ENTRIES):
        stop = min(start + BATCH_ENTRIES, lines.nnz)
        first, last = np.searchsorted(lines.indptr, (start, stop - 1), "right") - 1
        edges = np.clip(lines.indptr[first : last + 2], start, stop)
        number = np.repeat(np.arange(first, last + 1), np.diff(edges))
        out[number, lines.indices[start:stop]] = lines.data[start:stop]

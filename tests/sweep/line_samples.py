"""A small source of a sparse matrix in memory, and matrices for it; files are read by bigsvd/source/sparse_*.py."""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_array

from bigsvd.source import MatrixSpec


class SparseInMemory:
    """Lines of a SciPy matrix, as a source gives them.

    Parameters
    ----------
    lines : csr_array, shape (lines, across)
        Sorted, without duplicates.
    axis : int
        Stored axis that the lines are: 1 for a matrix that is stored by columns.
    long_places : bool
        Whether places are handed out as 64-bit integers, as files often hold them.
    """

    def __init__(self, lines: csr_array, axis: int = 0, *, long_places: bool = False) -> None:
        self.lines, self.long_places = lines, long_places
        self.reads: list[tuple[int, int]] = []
        shape = (lines.shape[0], lines.shape[1]) if axis == 0 else (lines.shape[1], lines.shape[0])
        chunks = (1, lines.shape[1]) if axis == 0 else (lines.shape[1], 1)
        held = lines.data.nbytes + lines.indices.nbytes + lines.indptr.nbytes
        self.spec = MatrixSpec(
            "sparse lines in memory", shape, lines.dtype, chunks, "sparse", encoding="in memory, for tests",
            nonzeros=int(lines.nnz), compressed_axis=axis, held_bytes=held,
        )  # fmt: skip

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        along, across = (rows, columns) if self.spec.compressed_axis == 0 else (columns, rows)
        part = self.lines[along[0] : along[1], across[0] : across[1]].toarray()
        out[...] = part if self.spec.compressed_axis == 0 else part.T

    def read_lines(self, first: int, stop: int) -> csr_array:
        self.reads.append((first, stop))
        pointers = self.lines.indptr[first : stop + 1]
        stored = slice(pointers[0], pointers[-1])
        kind = np.int64 if self.long_places else np.int32
        return csr_array(
            (
                self.lines.data[stored].copy(),
                self.lines.indices[stored].astype(kind),
                (pointers - pointers[0]).astype(kind),
            ),
            shape=(stop - first, self.lines.shape[1]),
        )

    def lines_nonzeros(self, first: int, stop: int) -> int:
        return int(self.lines.indptr[stop] - self.lines.indptr[first])

    def close(self) -> None:
        """Nothing is open."""


def sparse_lines(
    code: str, shape: tuple[int, int], share: float = 0.2, seed: int = 1, *, filled: bool = False
) -> csr_array:
    """Random entries of that type; line 7 holds stored zeros alone.

    `filled` fills lines 3 and 6 (with sevens) and place 5; otherwise line 2 and place 4 are empty.
    """
    random = np.random.default_rng(seed)
    kind = np.dtype(code).kind
    values = random.standard_normal(shape) * 3 + 4
    if kind in "iub":
        values = np.clip(np.round(values * 5), 0 if kind in "ub" else -90, 250)
    if kind == "c":
        values = values + 1j * random.standard_normal(shape)
    stored = random.random(shape) < share
    if filled:
        stored[[3, 6]], stored[:, 5], values[6] = True, True, 7
    else:
        stored[2], stored[:, 4] = False, False
    values[7] = 0
    row, column = np.nonzero(stored)
    pointers = np.concatenate([[0], np.cumsum(stored.sum(axis=1))]).astype(np.int32)
    return csr_array((values[row, column].astype(code), column.astype(np.int32), pointers), shape=shape)

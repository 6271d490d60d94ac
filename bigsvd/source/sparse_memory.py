"""A sparse matrix of SciPy in memory as a source: CSR and CSC referred to and never copied, others converted once."""

from __future__ import annotations

from typing import Any

import numpy as np

from bigsvd.errors import DamagedSourceError, UnsupportedMatrixError
from bigsvd.source.candidate import why_unusable
from bigsvd.source.entries import show_type
from bigsvd.source.memory import MemorySource
from bigsvd.source.sparse_describe import sparse_type, sparse_words
from bigsvd.source.sparse_layout import SparseLayout
from bigsvd.source.sparse_source import SparseSource, new_spec
from bigsvd.units import show_bytes

# A conversion holds the matrix twice; larger ones are left to the caller, who can give the first back.
MOST_CONVERTED = 2**30


def sparse_in_memory(matrix: Any) -> SparseSource:
    """Open a sparse matrix or array of SciPy.

    Raises
    ------
    UnsupportedMatrixError
        If it holds no numbers, has not two axes, is empty, or is large and of a format that must be converted.
    DamagedSourceError
        If its pointers or the lengths of its lists contradict each other.
    """
    given = matrix.format
    dtype = sparse_type(matrix.dtype)
    reason = why_unusable(matrix.shape, dtype is not None, show_type(matrix.dtype))
    if reason:
        raise UnsupportedMatrixError(
            "the sparse matrix is no matrix that can be decomposed",
            evidence=[reason, f"shape {matrix.shape}, type {show_type(matrix.dtype)}"],
            remedy="Give a two-dimensional sparse matrix of numbers.",
        )
    cautions: tuple[str, ...] = ()
    held = 0
    if given not in ("csr", "csc"):
        matrix = _converted(matrix)
        held = sum(part.nbytes for part in (matrix.data, matrix.indices, matrix.indptr))
        cautions = (f"converted from {given} to csr in memory, which holds {show_bytes(held)} beside the original",)
    try:
        matrix.check_format(full_check=False)
    except ValueError as error:
        raise DamagedSourceError(
            "the lists of the sparse matrix contradict each other",
            evidence=[f"SciPy says: {error}"],
            remedy="Make the matrix again: scipy.sparse.csr_array((data, indices, indptr), shape=…)",
        ) from error
    axis = ("csr", "csc").index(matrix.format)
    nonzeros = int(matrix.indptr[-1])
    # SciPy allows lists that are longer than the pointers say.
    values, indices = matrix.data[:nonzeros], matrix.indices[:nonzeros]
    rows, columns = (int(side) for side in matrix.shape)
    layout = SparseLayout((rows, columns), axis, nonzeros)
    stored = values.nbytes + indices.nbytes + matrix.indptr.nbytes
    parts = tuple(MemorySource(part[np.newaxis]) if part.size else None for part in (values, indices))
    return SparseSource(
        layout,
        (parts[0], parts[1], MemorySource(matrix.indptr[np.newaxis])),
        new_spec(
            layout, "sparse matrix in memory", values.dtype, encoding=sparse_words(layout, "in memory"),
            stored_bytes=stored, cautions=cautions, held_bytes=held,
        ),
    )  # fmt: skip


def _converted(matrix: Any) -> Any:
    """Rows of a matrix in another format, duplicates summed."""
    size = matrix.nnz * (matrix.dtype.itemsize + 8)
    if size > MOST_CONVERTED:
        raise UnsupportedMatrixError(
            f"a sparse matrix of the format {matrix.format} must be converted, and this one is large",
            evidence=[
                f"{matrix.nnz:,} entries, about {show_bytes(size)}; up to {show_bytes(MOST_CONVERTED)} are converted"
            ],
            remedy="Convert it first, and give the original back: matrix = matrix.tocsr()",
        )
    return matrix.tocsr()

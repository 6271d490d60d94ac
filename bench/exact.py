"""The true leading factors of a benchmark file, by a short program that shares nothing with bigsvd's solvers.

    n ≤ 6,000 (short side):  G = Σ A_pᵀA_p in double, eigenvectors V of its largest eigenvalues   (first read)
    wider:                   V by subspace iteration in double, V ← orth(Aᵀ orth(A V)), until the values stand still
    both, in a closing read: A V = Q R (bands folded by LAPACK's QR), σ(R), V rotated by its right vectors

The closing read makes the values good to rounding: those of G alone have lost half their figures. Means are
subtracted from the products, in double: (A − 1μᵀ)B = AB − 1(μᵀB).
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from bench.data import MATRIX

MOST_GRAM = 6_000
# The HDF Group gives numbers below 256 to filters of its own.
FOREIGN_FILTERS = 256
BAND_BYTES = 64_000_000
# Columns beyond those wanted, and the change between two iterations at which values count as found.
EXTRA, STILL, MOST_ITERATIONS = 180, 1e-12, 40


def exact_factors(path: Path, count: int, *, centred: bool) -> tuple[np.ndarray, np.ndarray]:
    """Leading singular values (count + 1,) and right vectors (n, count), kept beside the file for the next time.

    The value after the last wanted one says how well the wanted subspace is separated.
    """
    kept = path.with_name(f"{path.name}.exact-{'centred' if centred else 'plain'}.npz")
    if kept.is_file():
        with np.load(kept) as found:
            if found["right_vectors"].shape[1] >= count:
                return found["singular_values"][: count + 1], found["right_vectors"][:, :count]
    values, right = streamed_factors(open_stored(path), count, centred=centred)
    np.savez(kept, singular_values=values, right_vectors=right)
    return values, right


def open_stored(path: Path) -> Any:
    """The matrix as its own library gives it."""
    if path.is_dir():
        import zarr

        return zarr.open_array(str(path), mode="r")
    import h5py

    # The file stays open as long as the matrix is held.
    matrix = h5py.File(path, "r")[MATRIX]
    filters = matrix.id.get_create_plist()
    if any(filters.get_filter(i)[0] >= FOREIGN_FILTERS for i in range(filters.get_nfilters())):
        # Filters that the library does not bring: their plugins register on import.
        import hdf5plugin  # noqa: F401
    return matrix


def streamed_factors(
    matrix: Any, count: int, *, centred: bool, most_gram: int = MOST_GRAM, band_bytes: int = BAND_BYTES
) -> tuple[np.ndarray, np.ndarray]:
    """Leading values (count + 1,) and right vectors (n, count) of anything that is sliced by rows."""
    m, n = matrix.shape
    rows = max(1, band_bytes // (8 * n))
    mean = np.zeros(n)
    if centred:
        for _, band in _bands(matrix, rows):
            mean += band.sum(axis=0) / m
    width = min(m, n, count + 1)
    basis = (_gram_basis if n <= most_gram else _iterated_basis)(matrix, rows, mean, width)
    triangle = np.zeros((0, basis.shape[1]))
    for _, band in _bands(matrix, rows):
        product = band @ basis - mean @ basis
        triangle = np.asarray(np.linalg.qr(np.vstack([triangle, product]), mode="r"))
    _, values, rotation = np.linalg.svd(triangle)
    right = basis @ rotation.T
    return values[:width], right[:, : min(count, width)]


def _bands(matrix: Any, rows: int) -> Iterator[tuple[slice, np.ndarray]]:
    for start in range(0, matrix.shape[0], rows):
        place = slice(start, min(start + rows, matrix.shape[0]))
        yield place, np.asarray(matrix[place]).astype("f8")


def _gram_basis(matrix: Any, rows: int, mean: np.ndarray, width: int) -> np.ndarray:
    """Eigenvectors of the largest eigenvalues of (A − 1μᵀ)ᵀ(A − 1μᵀ)."""
    from scipy.linalg import eigh
    from scipy.linalg.blas import dsyrk

    n = matrix.shape[1]
    gram = np.zeros((n, n), order="F")
    for _, band in _bands(matrix, rows):
        band -= mean
        gram = dsyrk(1.0, band.T, beta=1.0, c=gram, overwrite_c=True)
    _, vectors = eigh(gram, lower=False, subset_by_index=[n - width, n - 1], overwrite_a=True, check_finite=False)
    return np.ascontiguousarray(vectors[:, ::-1])


def _iterated_basis(matrix: Any, rows: int, mean: np.ndarray, width: int) -> np.ndarray:
    """Subspace iteration from Gaussians, far wider than what is wanted."""
    m, n = matrix.shape
    basis = np.linalg.qr(np.random.default_rng(7).standard_normal((n, min(m, n, width + EXTRA))))[0]
    before = np.zeros(width)
    for _ in range(MOST_ITERATIONS):
        tall = np.empty((m, basis.shape[1]))
        for place, band in _bands(matrix, rows):
            tall[place] = band @ basis - mean @ basis
        tall = np.linalg.qr(tall)[0]
        product = np.zeros((n, basis.shape[1]))
        for place, band in _bands(matrix, rows):
            product += band.T @ tall[place]
        product -= np.outer(mean, tall.sum(axis=0))
        # The singular values of AᵀQ are Rayleigh–Ritz values of A; its left vectors lie in the row space.
        basis, values, _ = np.linalg.svd(product, full_matrices=False)
        if np.max(np.abs(values[:width] - before)) <= STILL * values[0]:
            return basis
        before = values[:width]
    raise RuntimeError(f"values still moved after {MOST_ITERATIONS} iterations: no truth to compare with")

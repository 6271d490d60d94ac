"""Small dense kernels, fenced off: orthonormal columns, singular values of a triangle, eigenvalues of a Gram matrix."""

from __future__ import annotations

import numpy as np

# Rows handled at a time where a tall matrix is combined, so that no temporary of its size is made.
ROWS = 8192


def orthonormalise(columns: np.ndarray, basis: np.ndarray) -> np.ndarray:
    """Orthonormal columns that span `columns`, orthogonal to `basis`: two rounds of block Gram–Schmidt and QR.

    Parameters
    ----------
    columns : ndarray, shape (n, b)
        Overwritten.
    basis : ndarray, shape (n, L)
        Orthonormal; L + b ≤ n.

    Returns
    -------
    ndarray, shape (n, b)

    Notes
    -----
    A column that already lies in the span comes back as an arbitrary direction orthogonal to everything else.
    """
    norms = np.linalg.norm(columns, axis=0)
    columns /= np.where(norms > 0, norms, 1.0)
    for _ in range(2):
        _subtract_projection(columns, basis)
        columns = np.linalg.qr(columns)[0]
    # After the second round a dependent column may still lean on the basis by its own rounding.
    _subtract_projection(columns, basis)
    return np.linalg.qr(columns)[0]


def _subtract_projection(columns: np.ndarray, basis: np.ndarray) -> np.ndarray:
    """Take the part in the basis out of the columns, in place; return its coefficients."""
    coefficients = basis.conj().T @ columns
    for first in range(0, len(columns), ROWS):
        rows = slice(first, first + ROWS)
        columns[rows] -= basis[rows] @ coefficients
    return coefficients


def split(columns: np.ndarray, basis: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Write columns = basis·H + Q·T with Q orthonormal and orthogonal to the basis, T upper triangular.

    Returns
    -------
    Q : ndarray, shape (n, b)
    H : ndarray, shape (L, b)
    T : ndarray, shape (b, b)
    """
    rest = columns.copy()
    inside = _subtract_projection(rest, basis)
    inside += _subtract_projection(rest, basis)
    q, t = np.linalg.qr(rest)
    return q, inside, t


def triangle_svd(triangle: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Singular values θ, decreasing, and right vectors W of a square matrix.

    LAPACK gesdd; where that fails on finite input (it can, gesvd does not), gesvd.
    """
    from scipy.linalg import LinAlgError, svd

    try:
        _, theta, right = svd(triangle, lapack_driver="gesdd")
    except LinAlgError:
        _, theta, right = svd(triangle, lapack_driver="gesvd")
    return theta, right.conj().T


def gram_eigen(gram: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Eigenvalues, decreasing and clipped at zero, and eigenvectors of a Hermitian matrix, which is overwritten."""
    from scipy.linalg import eigh

    value, vector = eigh(gram, overwrite_a=True, check_finite=False)
    return np.clip(value[::-1], 0.0, None), vector[:, ::-1]

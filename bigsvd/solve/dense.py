"""Small dense kernels, fenced off: orthonormal columns, singular values of a triangle, eigenvalues of a Gram matrix."""

from __future__ import annotations

import numpy as np

# Rows handled at a time where a tall matrix is combined, so that no temporary of its size is made.
ROWS = 8192
UNIT_ROUNDOFF = 2.0**-53
# A pivot below this share of the columns' norm: the Gram matrix lost more by squaring than another round mends.
LEAST_PIVOT = 1e-7


def orthonormalise(columns: np.ndarray, basis: np.ndarray) -> np.ndarray:
    """Orthonormal columns that span `columns`, orthogonal to `basis`: three rounds of block Gram–Schmidt and QR.

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

    Method: shifted CholeskyQR3 (Fukaya, Kannan, Nakatsukasa, Yamamoto, Yanagisawa, SIAM J. Sci. Comput. 42 (2020)),
    with Householder QR in any round whose Gram matrix is not positive definite.
    """
    norms = np.linalg.norm(columns, axis=0)
    columns /= np.where(norms > 0, norms, 1.0)
    # The first round takes any matrix to a moderate condition, the second to 1 + √u; after a second round by
    # reflections a dependent column may still lean on the basis by its own rounding, which the third takes out.
    for shifted in (True, False, False):
        subtract_projection(columns, basis)
        columns, _ = tall_qr(columns, shifted=shifted)
    return columns


def subtract_projection(columns: np.ndarray, basis: np.ndarray) -> np.ndarray:
    """Take the part in the basis out of the columns, in place; return its coefficients."""
    coefficients = basis.conj().T @ columns
    if basis.shape[1]:
        for first in range(0, len(columns), ROWS):
            rows = slice(first, first + ROWS)
            columns[rows] -= basis[rows] @ coefficients
    return coefficients


def tall_qr(columns: np.ndarray, *, shifted: bool = False) -> tuple[np.ndarray, np.ndarray]:
    """QR of tall columns at the speed of products, where their Gram matrix is safely positive definite.

    Parameters
    ----------
    columns : ndarray, shape (n, b)
    shifted : bool
        Add 11(nb + b(b + 1))u‖X‖² to the Gram matrix: it is then positive definite, and Q not orthonormal but of
        moderate condition.

    Returns
    -------
    Q : ndarray, shape (n, b)
        Orthonormal to about u·κ² of the columns, unless shifted.
    R : ndarray, shape (b, b)
        Upper triangular.
    """
    from scipy.linalg import LinAlgError, cholesky, solve_triangular

    gram = columns.conj().T @ columns
    n, b = columns.shape
    trace = float(np.trace(gram).real) if b else 0.0
    if not np.isfinite(trace) or trace == 0:
        return np.linalg.qr(columns)
    if shifted:
        gram[np.diag_indices(b)] += 11 * (n * b + b * (b + 1)) * UNIT_ROUNDOFF * trace
    try:
        triangle = cholesky(gram, check_finite=False)
    except LinAlgError:
        return np.linalg.qr(columns)
    if not shifted and np.diag(triangle).real.min() < LEAST_PIVOT * np.sqrt(trace / b):
        return np.linalg.qr(columns)
    # Products with the inverse take half the time of a triangular solve on so few columns, and lose no more.
    q = np.empty((n, b), columns.dtype)
    inverse = solve_triangular(triangle, np.eye(b, dtype=triangle.dtype), check_finite=False)
    for first in range(0, n, ROWS):
        rows = slice(first, first + ROWS)
        np.matmul(columns[rows], inverse, out=q[rows])
    return q, triangle


def split(columns: np.ndarray, basis: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Write columns = basis·H + Q·T with Q orthonormal and orthogonal to the basis, T upper triangular.

    Parameters
    ----------
    columns : ndarray, shape (n, b)
        Nearly orthonormal.
    basis : ndarray, shape (n, L)

    Returns
    -------
    Q : ndarray, shape (n, b)
    H : ndarray, shape (L, b)
    T : ndarray, shape (b, b)
    """
    rest = columns.copy()
    inside = subtract_projection(rest, basis)
    inside += subtract_projection(rest, basis)
    q, first = tall_qr(rest)
    q, second = tall_qr(q)
    return q, inside, second @ first


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

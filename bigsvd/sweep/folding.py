"""Triangular factors and Gram matrices of tall blocks, at the speed of products where that is safe."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

# ‖X·R⁻¹‖_F² per column up to which `fold_upon` uses products; as many lines as before, and like them, have one.
MOST_GAIN = 2.0


def fold(blocks: Sequence[np.ndarray]) -> np.ndarray:
    """Triangular factor of blocks stacked upon each other, without squaring: RᴴR = Σ XᴴX.

    Parameters
    ----------
    blocks : sequence of ndarray, shape (any, columns)

    Returns
    -------
    ndarray, shape (columns, columns)
        Upper triangular.

    Notes
    -----
    Method: tall-skinny QR, Demmel, Grigori, Hoemmen, Langou, SIAM J. Sci. Comput. 34 (2012).
    """
    # A single block is not copied once more: LAPACK's own two copies are what memory was planned for.
    stacked = blocks[0] if len(blocks) == 1 else np.concatenate(blocks)
    triangle = np.asarray(np.linalg.qr(stacked, mode="r"))
    columns = stacked.shape[1]
    if len(triangle) < columns:
        triangle = np.concatenate([triangle, np.zeros((columns - len(triangle), columns), triangle.dtype)])
    return triangle


def fold_upon(triangle: np.ndarray, lines: np.ndarray) -> np.ndarray:
    """Fold lines into a triangle: RᴴR + XᴴX, by products preconditioned with R where X is no larger than R allows.

    W = X·R⁻¹, CᴴC = I + WᴴW, and the new triangle is C·R.

    Parameters
    ----------
    triangle : ndarray, shape (columns, columns)
        Upper triangular R.
    lines : ndarray, shape (any, columns)
        X.

    Returns
    -------
    ndarray, shape (columns, columns)
        Upper triangular.

    Notes
    -----
    Squaring W costs no small singular value of X. With g = ‖W‖_F²/columns, at most `MOST_GAIN`, rounding changes every
    singular value by the relative amounts ½γ_rows·g·columns (sums of WᴴW) and ½γ_{columns+1}(1 + g)·columns (its
    factor), and by 2γ_columns√((1 + g)·columns)‖R‖_F (solve and last product): γ_{columns·(rows + 5·columns)} in all
    (Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed. (2002), Theorems 8.5 and 10.3). For larger W, and
    where R is singular, Householder reflections.

    Cost: 3·rows·columns² flops as triangular solve and product, 2.2 times as fast as Householder at 64 to 142 columns.

    Method: preconditioned CholeskyQR (Fukaya, Kannan, Nakatsukasa, Yamamoto, Yanagisawa, SIAM J. Sci. Comput. 42
    (2020)).
    """
    from scipy.linalg.blas import get_blas_funcs
    from scipy.linalg.lapack import get_lapack_funcs

    if not lines.shape[0]:
        return triangle
    columns = triangle.shape[1]
    diagonal = np.abs(np.diag(triangle))
    if len(lines) < columns or not diagonal.min() > 0:
        return fold([triangle, lines])
    solve: Any = get_blas_funcs("trsm", (triangle,))
    factor: Any = get_lapack_funcs("potrf", (triangle,))
    # BLAS reads the C-ordered lines as their transpose: Rᵀ·Wᵀ = Xᵀ.
    turned = solve(1.0, triangle, lines.T, side=0, lower=0, trans_a=1)
    gain = float(np.linalg.norm(turned)) ** 2
    if not gain <= MOST_GAIN * columns:
        return fold([triangle, lines])
    square = turned.conj() @ turned.T
    square[np.diag_indices(columns)] += 1.0
    upper, failed = factor(square, lower=0, clean=1, overwrite_a=1)
    if failed:
        return fold([triangle, lines])
    return np.triu(upper @ triangle)


def add_gram(gram: np.ndarray, lines: np.ndarray) -> None:
    """Add XᴴX to the lower triangle of a Fortran-ordered matrix, in place; `mirror` completes it.

    Half the work of a product, and no temporary: 1.2 to 1.7 times as fast at 1,000 to 3,000 columns.

    Parameters
    ----------
    gram : ndarray, shape (columns, columns)
    lines : ndarray, shape (any, columns)
        X, ordered either way.
    """
    from scipy.linalg.blas import dsyrk, zherk

    if gram.dtype.kind == "c":
        # Of rows in C order BLAS sees the transpose, whose XᵀX̄ is the conjugate of what is wanted.
        a = lines if lines.flags.f_contiguous else lines.conj().T
        done: np.ndarray = zherk(
            1.0, a, beta=1.0, c=gram, trans=2 if lines.flags.f_contiguous else 0, lower=1, overwrite_c=1
        )
    else:
        a = lines if lines.flags.f_contiguous else lines.T
        done = dsyrk(1.0, a, beta=1.0, c=gram, trans=1 if lines.flags.f_contiguous else 0, lower=1, overwrite_c=1)
    assert np.shares_memory(done, gram)


def mirror(gram: np.ndarray) -> None:
    """Complete a Hermitian matrix from its lower triangle, in place."""
    # Row by row: index arrays would be as large as the matrix.
    for i in range(len(gram)):
        gram[i, i + 1 :] = gram[i + 1 :, i].conj()

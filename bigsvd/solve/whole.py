"""Routes that compute the whole spectrum: from AᴴA, or from the triangular factor of A itself."""

from __future__ import annotations

import numpy as np

from bigsvd.solve.dense import gram_eigen, triangle_svd
from bigsvd.solve.statistics import Learnt


def from_gram(gram: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """All singular values, decreasing, and right vectors, from AᴴA (overwritten).

    Cost: about 9·n³ flops. Nothing below √ε·σ₁ is accurate.
    """
    value, vector = gram_eigen(gram)
    return np.sqrt(value), vector


def from_triangle(folded: np.ndarray, learnt: Learnt | None, *, centred: bool) -> tuple[np.ndarray, np.ndarray]:
    """All singular values, decreasing, and right vectors, from the fold of [1, Ã] (the ones only when centred).

    Dropping the row and column of the ones centres R exactly; scales that were learnt divide its columns.
    """
    triangle = folded[1:, 1:] if centred else folded
    if learnt is not None and learnt.column_scale is not None:
        triangle = triangle / learnt.column_scale
    return triangle_svd(triangle)

"""Sums of a sweep taken densely, and a state that absorbs them, so that solving is tested without reading."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from bigsvd.prepare import Preparation
from bigsvd.solve import State, correct_products, learn
from bigsvd.sweep import Partial, Scratch, fold


def samples(rows: int, columns: int, *, imaginary: bool = False, seed: int = 1) -> np.ndarray:
    """A decaying matrix with means of about 5 and deviations from 0.3 to 3."""
    random = np.random.default_rng(seed)
    left, right = random.standard_normal((rows, columns)), random.standard_normal((columns, columns))
    matrix = (left * 0.8 ** np.arange(columns)) @ right
    if imaginary:
        matrix = matrix * np.exp(1j * random.uniform(0, 6, matrix.shape))
    scales = np.linspace(0.3, 3, columns)
    means = 5 + random.standard_normal(columns) * (1 + 2j if imaginary else 1)
    return np.asarray(matrix * scales + means)


def dense_prepared(matrix: np.ndarray, *, center: bool, scale: bool) -> np.ndarray:
    """What the whole preparation amounts to."""
    mean = matrix.mean(axis=0)
    spread = np.sqrt((np.abs(matrix - mean) ** 2).sum(axis=0) / (len(matrix) - 1))
    still = (matrix == matrix[:1]).all(axis=0)
    centred = matrix - np.where(still, matrix[0], mean) if center else matrix
    return np.asarray(centred / np.where(still, 1.0, spread) if scale else centred)


def swept(matrix: np.ndarray, preparation: Preparation) -> np.ndarray:
    """What a sweep multiplies: shifted and scaled by what is known so far."""
    shifted = matrix - preparation.shift if preparation.shift is not None else matrix
    return np.asarray(shifted * preparation.inverse_scale if preparation.inverse_scale is not None else shifted)


def sums_of(matrix: np.ndarray, preparation: Preparation, block: np.ndarray | None = None) -> Partial:
    """The sums of a first sweep."""
    panel = swept(matrix, preparation)
    centred = panel - preparation.about if preparation.about is not None else panel
    parts = np.hstack([matrix.real, matrix.imag]) if np.iscomplexobj(matrix) else matrix
    return Partial(
        lines=len(panel),
        energy=float(np.linalg.norm(panel) ** 2),
        line_sum=centred.sum(axis=0),
        square_sum=(np.abs(centred) ** 2).sum(axis=0) if preparation.scale else None,
        lowest=parts.min(axis=0),
        highest=parts.max(axis=0),
        products=None if block is None else (panel.conj().T @ (panel @ block)).conj().T,
    )


def add_columns(
    state: State,
    scratch: Scratch,
    matrix: np.ndarray,
    block: np.ndarray,
    preparation: Preparation,
    *,
    centred: bool,
    exact: bool,
) -> np.ndarray | None:
    """Sweep a block densely and let the state absorb it; returns the factors of scale that were learnt."""
    panel = swept(matrix, preparation)
    tall = panel @ block
    number = scratch.add_block(block.shape[1])
    scratch.write(number, 0, tall)
    earlier = scratch.read(0, len(panel), number) @ scratch.map
    folded = fold([np.hstack([*([np.ones((len(panel), 1))] if centred else []), earlier, tall])])
    sums = sums_of(matrix, preparation, block)
    learnt = learn(sums, preparation)
    assert sums.products is not None
    used = block.copy()
    products = correct_products(np.ascontiguousarray(sums.products.conj().T), used, learnt, len(panel), centred=centred)
    state.absorb(used, products, folded, scratch, np.full(block.shape[1], 1e-12), centred=centred, exact=exact)
    return learnt.column_scale


def empty(tmp_path: Path, matrix: np.ndarray, limit: int) -> tuple[State, Scratch]:
    """A state with no columns, and its scratch."""
    kind = np.dtype(np.complex128 if np.iscomplexobj(matrix) else np.float64)
    return State.empty(matrix.shape[1], limit, kind), Scratch(tmp_path, len(matrix), kind)


def orthonormal_block(columns: int, width: int, *, imaginary: bool = False, seed: int = 3) -> np.ndarray:
    random = np.random.default_rng(seed)
    block = random.standard_normal((columns, width))
    return np.linalg.qr(block + 1j * random.standard_normal(block.shape) if imaginary else block)[0]


def assert_consistent(state: State, scratch: Scratch, prepared: np.ndarray, tolerance: float = 1e-11) -> None:
    """BᴴB = I, Z = AᴴAB, (stored Y)·map − mean row = AB, and R is the triangle of AB."""
    size = np.linalg.norm(prepared)
    basis, width = state.used, state.width
    assert np.linalg.norm(basis.conj().T @ basis - np.eye(width)) < 1e-12
    assert np.linalg.norm(state.used_products - prepared.conj().T @ (prepared @ basis)) < tolerance * size**2
    tall = scratch.read(0, scratch.lines) @ scratch.map - state.mean_row
    assert np.linalg.norm(tall - prepared @ basis) < tolerance * size
    assert np.linalg.norm(state.triangle.conj().T @ state.triangle - tall.conj().T @ tall) < tolerance * size**2
    assert state.product_error.shape == (width,)

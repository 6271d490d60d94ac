"""A fold by products: as exact as reflections where it is taken, and not taken where it would not be."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg

from bigsvd.sweep import folding
from bigsvd.sweep.folding import fold, fold_upon

EPS = 2.0**-53


def lines(count: int, columns: int, *, seed: int, imaginary: bool = False, decades: float = 0.0) -> np.ndarray:
    """Gaussian lines, columns falling by so many decades from first to last, then mixed."""
    random = np.random.default_rng(seed)
    made = random.standard_normal((count, columns))
    if imaginary:
        made = made + 1j * random.standard_normal((count, columns))
    mixed = np.linalg.qr(np.random.default_rng(99).standard_normal((columns, columns)))[0]
    return made * 10.0 ** -np.linspace(0, decades, columns) @ mixed


@pytest.fixture
def reflections(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """Counts the folds that fell back on reflections."""
    calls: list[int] = []

    def counted(blocks: list[np.ndarray]) -> np.ndarray:
        calls.append(len(blocks))
        return fold(blocks)

    monkeypatch.setattr(folding, "fold", counted)
    return calls


@pytest.mark.parametrize("imaginary", [False, True])
@pytest.mark.parametrize("decades", [0.0, 6.0, 12.0])
def test_small_singular_values_keep_their_figures(imaginary: bool, decades: float, reflections: list[int]) -> None:
    blocks = [lines(300, 20, seed=seed, imaginary=imaginary, decades=decades) for seed in range(4)]
    triangle = fold([blocks[0]])
    for block in blocks[1:]:
        triangle = fold_upon(triangle, block)
    assert not reflections
    assert np.array_equal(triangle, np.triu(triangle))
    # Reflections over all lines at once, by SciPy: both err by a few roundoffs of the largest value.
    wanted = scipy.linalg.svd(np.concatenate(blocks), compute_uv=False)
    found = scipy.linalg.svd(triangle, compute_uv=False)
    assert np.abs(found - wanted).max() <= 100 * EPS * wanted[0]


def test_louder_lines_are_folded_by_reflections(reflections: list[int]) -> None:
    triangle = fold([lines(300, 20, seed=1)])
    loud = 1e6 * lines(300, 20, seed=2)
    found = fold_upon(triangle, loud)
    assert reflections == [2]
    np.testing.assert_allclose(found.T @ found, triangle.T @ triangle + loud.T @ loud, rtol=1e-12, atol=1.0)


@pytest.mark.parametrize("rank", [0, 7])
def test_a_singular_triangle_is_folded_by_reflections(rank: int, reflections: list[int]) -> None:
    first = np.zeros((300, 20))
    first[:, :rank] = lines(300, 20, seed=3)[:, :rank]
    more = lines(300, 20, seed=4)
    found = fold_upon(fold([first]), more)
    assert reflections
    np.testing.assert_allclose(found.T @ found, first.T @ first + more.T @ more, atol=1e-10)


def test_few_lines_or_none_are_folded_too() -> None:
    triangle = fold([lines(300, 20, seed=5)])
    assert fold_upon(triangle, np.zeros((0, 20))) is triangle
    few = lines(3, 20, seed=6)
    found = fold_upon(triangle, few)
    np.testing.assert_allclose(found.T @ found, triangle.T @ triangle + few.T @ few, atol=1e-10)

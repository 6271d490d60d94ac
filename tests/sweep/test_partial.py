"""Sums of neighbouring runs of panels: adding them is adding their panels."""

from __future__ import annotations

import copy

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bigsvd.sweep import Partial, fold
from bigsvd.sweep.partial import combine


def sums_of(block: np.ndarray, first: int) -> Partial:
    """All sums over some lines, taken directly."""
    return Partial(
        lines=len(block),
        energy=float(np.sum(block**2)),
        line_sum=block.sum(axis=0),
        square_sum=(block**2).sum(axis=0),
        lowest=block.min(axis=0),
        highest=block.max(axis=0),
        products=block.sum(axis=1)[None] @ block,
        gram=block.T @ block,
        triangle=fold([block]),
        line_mean=[block.mean(axis=1)],
        line_inverse_scale=[1 / block.std(axis=1)],
        line_constant=[np.zeros(len(block), bool)],
        ledger=[first],
        rounding=np.array([[1.0, 1.0], [2.0, 3.0], [4.0, 5.0]]),
    )


@settings(max_examples=30, deadline=None)
@given(st.lists(st.integers(1, 9), min_size=2, max_size=5), st.integers(0, 1000))
def test_combined_sums_are_the_sums_of_all_lines(heights: list[int], seed: int) -> None:
    blocks = [np.random.default_rng(seed + i).standard_normal((height, 4)) for i, height in enumerate(heights)]
    parts = [sums_of(block, i) for i, block in enumerate(blocks)]
    total = copy.deepcopy(parts[0])
    for part in parts[1:]:
        total = combine(total, part)
    whole, direct = np.concatenate(blocks), sums_of(np.concatenate(blocks), 0)
    assert total.lines == direct.lines
    assert total.energy == pytest.approx(direct.energy)
    for name in ("line_sum", "square_sum", "gram", "products"):
        np.testing.assert_allclose(getattr(total, name), getattr(direct, name), rtol=0, atol=1e-12)
    np.testing.assert_array_equal(total.lowest, direct.lowest)
    np.testing.assert_array_equal(total.highest, direct.highest)
    assert total.triangle is not None
    np.testing.assert_allclose(total.triangle.T @ total.triangle, whole.T @ whole, rtol=0, atol=1e-12)
    assert total.ledger == list(range(len(blocks)))
    assert total.line_mean is not None
    np.testing.assert_array_equal(np.concatenate(total.line_mean), np.concatenate([b.mean(axis=1) for b in blocks]))
    np.testing.assert_array_equal(total.rounding, len(blocks) * np.array([[1.0, 1.0], [2.0, 3.0], [4.0, 5.0]]))


def test_bad_entries_are_counted_and_the_first_in_file_order_is_kept() -> None:
    first = Partial(bad=2, first_bad=(7, 3), ledger=[])
    second = Partial(bad=5, first_bad=(7, 1), ledger=[], overflow=True, beyond=True)
    total = combine(first, second)
    assert (total.bad, total.first_bad) == (7, (7, 1))
    assert total.overflow
    assert total.beyond
    assert combine(Partial(ledger=[]), Partial(bad=1, first_bad=(9, 9), ledger=[])).first_bad == (9, 9)


@pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("heights", [[30], [5, 30], [2, 3], [1], [8, 8, 8, 8]])
def test_a_fold_is_the_triangle_of_the_stack(heights: list[int], imaginary: bool) -> None:
    random = np.random.default_rng(sum(heights))
    blocks = [random.standard_normal((height, 6)) * (1 + 1j if imaginary else 1) for height in heights]
    if imaginary:
        blocks = [block + 1j * random.standard_normal(block.shape) for block in blocks]
    before = [block.copy() for block in blocks]
    triangle = fold(blocks)
    stack = np.concatenate(blocks)
    assert triangle.shape == (6, 6)
    assert np.array_equal(triangle, np.triu(triangle))
    np.testing.assert_allclose(triangle.conj().T @ triangle, stack.conj().T @ stack, rtol=0, atol=1e-12)
    assert all(np.array_equal(a, b) for a, b in zip(blocks, before, strict=True)), "the blocks are left as they were"


def test_a_fold_does_not_square_small_values_away() -> None:
    # σ = 1 and 1e-12 of a 2-column block: lost in XᴴX, kept by QR (Higham, Accuracy and Stability, 2nd ed., §20.4).
    block = np.array([[1.0, 1.0], [0.0, 1e-12], [0.0, 0.0]])
    small = np.linalg.svd(fold([block[:2], block[2:]]), compute_uv=False)[1]
    assert small == pytest.approx(np.linalg.svd(block, compute_uv=False)[1], rel=1e-3)

"""The rounding of products without zeros stays below the bounds of docs/method.md, §7e, against sums in fractions."""

from __future__ import annotations

from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from scipy.sparse import csr_array
from sweep_samples import sweep
from test_sparse_segments import reader_of, task_of

from bigsvd.certify import SumDepth, gamma, measured_rounding, product_rounding, tall_rounding
from bigsvd.prepare import Preparation
from bigsvd.sweep import Partial, Scratch

LINES, ACROSS, WIDTH, PANEL, SEGMENTS = 24, 9, 2, 8, 3
OFFSETS = (0.0, 1.0, 1e4, 1e8)


def exactly(values: np.ndarray) -> np.ndarray:
    """The same numbers as fractions."""
    return np.array([Fraction(float(value)) for value in values.ravel()], object).reshape(values.shape)


def norm(values: np.ndarray) -> float:
    return float(np.sqrt(float((values * values).sum())))


def far_from_zero(seed: int, offset: float, share: float, *, by_line: bool) -> csr_array:
    """Entries whose deviations are about one, most of them about an offset of their own line or place."""
    random = np.random.default_rng(seed)
    values = random.standard_normal((LINES, ACROSS)) + offset * random.uniform(
        0.5, 1, (LINES, 1) if by_line else ACROSS
    )
    values[random.random((LINES, ACROSS)) > share] = 0
    return csr_array(values)


def exact_lines(lines: csr_array, made: Preparation, sums: Partial) -> np.ndarray:
    """The prepared matrix in fractions: centred exactly, divided by the deviations that the sweep found."""
    entries = exactly(lines.toarray())
    if made.across_features:
        assert made.shift is not None
        entries = entries - exactly(made.shift)
        return entries * exactly(made.inverse_scale) if made.inverse_scale is not None else entries
    assert sums.line_constant is not None
    assert sums.line_inverse_scale is not None
    varying = ~np.concatenate(sums.line_constant)
    centred = (entries - entries.sum(axis=1, keepdims=True) / ACROSS) * varying[:, None]
    return centred * exactly(np.concatenate(sums.line_inverse_scale))[:, None] if made.scale else centred


def preparation(lines: csr_array, *, by_line: bool, scale: bool, seed: int) -> Preparation:
    if by_line:
        return Preparation(False, center=True, scale=scale)
    inverse = np.random.default_rng(seed).uniform(0.1, 3, ACROSS) if scale else None
    made = Preparation(True, center=True, scale=scale)
    return made.learnt(np.asarray(lines.mean(axis=0)), inverse, np.dtype(float))


def swept(lines: csr_array, made: Preparation, block: np.ndarray, folder: Path) -> tuple[Partial, np.ndarray]:
    scratch = Scratch(folder, LINES, np.dtype(float))
    target = scratch.add_block(WIDTH)
    task = task_of(reader_of(lines, 0, PANEL), made, np.dtype(float), block, scratch=scratch, target=target)
    done = sweep(task, segments=SEGMENTS, scratch=scratch)
    scratch.close()
    assert done.tall is not None
    return done.sums, done.tall


@pytest.mark.parametrize("scale", [False, True])
@pytest.mark.parametrize("by_line", [False, True], ids=["across", "lines"])
@pytest.mark.parametrize("offset", OFFSETS)
def test_rounding_in_double_stays_below_its_bound(offset: float, by_line: bool, scale: bool, tmp_path: Path) -> None:
    beyond = 0
    for seed in range(12):
        lines = far_from_zero(seed, offset, (0.3, 0.8, 1.0)[seed % 3], by_line=by_line)
        made = preparation(lines, by_line=by_line, scale=scale, seed=seed)
        block = np.linalg.qr(np.random.default_rng(seed + 99).standard_normal((ACROSS, WIDTH)))[0]
        sums, tall = swept(lines, made, block, tmp_path)
        exact = exact_lines(lines, made, sums)
        product = exact @ exactly(block)
        second = exact.T @ product
        assert sums.products is not None
        errors = [norm(exactly(tall) - product), *map(norm, (exactly(sums.products.T) - second).T)]
        # One unit to a panel, one panel to a segment; segments are added up pairwise, then wave upon wave.
        depth = SumDepth((2 if by_line else 1) * ACROSS, PANEL, 1 + SEGMENTS, LINES, WIDTH, 1, 3, complex_entries=False)
        plain = float(np.sqrt(sums.energy))
        whole = plain + 2 * float(np.sqrt(sums.cancelled))
        norms = np.array([norm(column) for column in product.T])
        bounds = [tall_rounding(depth, whole, WIDTH), *product_rounding(depth, whole, norms)]
        assert all(error <= bound for error, bound in zip(errors, bounds, strict=True)), f"{errors} > {bounds}"
        without = [tall_rounding(depth, plain, WIDTH), *product_rounding(depth, plain, norms)]
        beyond += any(error > bound for error, bound in zip(errors, without, strict=True))

        energy = float((exact * exact).sum())
        per_sum = gamma(PANEL + 1 + SEGMENTS + 4)
        near = per_sum * energy + (gamma(2 * ACROSS) * 2 * float(np.sqrt(sums.cancelled))) ** 2
        assert abs(float(Fraction(sums.energy)) - energy) <= near
    # Where entries lie far from zero, the bound of entries that are centred one by one would be wrong.
    assert (beyond > 0) == (offset >= 1e4)


@pytest.mark.parametrize("scale", [False, True])
def test_sums_of_centred_lines_keep_the_bound_of_dense_ones(scale: bool, tmp_path: Path) -> None:
    for seed in range(12):
        lines = far_from_zero(seed, OFFSETS[seed % 4], 0.6, by_line=False)
        made = preparation(lines, by_line=False, scale=scale, seed=seed)
        made = Preparation(True, True, scale, made.shift * (1 + 1e-9), made.inverse_scale)  # type: ignore[operator]
        task = task_of(reader_of(lines, 0, PANEL), made, np.dtype(float), None, learn=True)
        sums = sweep(task, segments=SEGMENTS).sums
        exact = exact_lines(lines, made, sums)
        per_sum = gamma(PANEL + 1 + SEGMENTS + 4)
        for found, terms in ((sums.line_sum, exact), (sums.square_sum, exact * exact)):
            assert found is not None
            error = np.abs(exactly(found) - terms.sum(axis=0)).astype(float)
            assert np.all(error <= per_sum * np.abs(terms).sum(axis=0).astype(float))


@pytest.mark.parametrize("by_line", [False, True], ids=["across", "lines"])
def test_rounding_in_single_stays_below_what_is_measured(by_line: bool, tmp_path: Path) -> None:
    # One panel lies far from zero, those that are recomputed do not: its lines round by their mean.
    panels = LINES // PANEL
    for seed in range(10):
        random = np.random.default_rng(seed)
        values = random.standard_normal((LINES, ACROSS)).astype(np.float32)
        values[random.random(values.shape) > 0.7] = 0
        values[2 * PANEL :] += 3e3 if by_line else 0
        values[:, ::2] += 0 if by_line else 1e3
        lines = csr_array(values)
        made = preparation(lines, by_line=by_line, scale=False, seed=seed)
        block = np.linalg.qr(random.standard_normal((ACROSS, WIDTH)))[0].astype(np.float32)
        task = task_of(reader_of(lines, 0, PANEL), made, np.dtype(np.float32), block, sampled=frozenset({0}))
        sums = sweep(task, segments=SEGMENTS).sums
        exact = exact_lines(lines, made, sums).astype(float)
        second = exact.T @ (exact @ block.astype(float))
        sums.level_rounding()
        assert sums.rounding is not None
        assert sums.products is not None
        error = np.linalg.norm(sums.products.T - second, axis=0)
        assert np.all(error <= measured_rounding(sums.rounding, panels)[1]), f"seed {seed}"

"""Means that are large beside the deviations leave none of their rounding in what is decomposed."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg

import bigsvd
from bigsvd.prepare import Preparation, line_statistics, prepare_unit

OFFSET = 1e5


def far_from_zero(lines: int, across: int) -> tuple[np.ndarray, np.ndarray]:
    """Deviations of a third about a hundred thousand: as stored, and without the offset, both exact."""
    stored = OFFSET + np.random.default_rng(5).standard_normal((lines, across)) / 3
    return stored, (stored - OFFSET).astype(np.longdouble)


@pytest.mark.parametrize("scale", [False, True])
def test_centred_lines_are_exact_to_their_own_size(scale: bool) -> None:
    stored, exact = far_from_zero(40, 97)
    out = np.empty_like(stored)
    prepare_unit(stored, Preparation(False, True, scale), line_statistics(stored, scale=scale), slice(0, 97), out)
    exact = exact - exact.mean(axis=1, keepdims=True)
    if scale:
        exact = exact / np.sqrt((exact**2).sum(axis=1, keepdims=True) / 96)
    # The mean itself rounds to 1e-11; entries of one are to be right to a few roundoffs.
    np.testing.assert_allclose(out, exact.astype(float), rtol=0, atol=4e-15)


@pytest.mark.parametrize("axis", ["rows", "columns"])
def test_deviations_about_a_large_mean_are_exact_without_centring(axis: str) -> None:
    stored, moved = far_from_zero(300, 20)
    factors = bigsvd.decompose(
        stored, rank=2, center="none", scale="unit", axis=axis, route="krylov", panel_lines=10, memory="1GiB"
    )
    exact = moved.std(axis=0, ddof=1)
    np.testing.assert_allclose(np.asarray(factors.column_scale[:]), exact.astype(float), rtol=4e-15)
    true = scipy.linalg.svd((stored / exact).astype(float), compute_uv=False)[:2]
    certificate = factors.certificate
    slack = 1e-13 * true[0]
    assert certificate.index_proved[0]
    assert certificate.lower[0] - slack <= true[0] <= certificate.upper[0] + slack

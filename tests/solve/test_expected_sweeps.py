"""The sweeps that a pilot lets expect, beside those that runs make."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

import bigsvd
from bigsvd.prepare import Preparation
from bigsvd.solve import Pilot, expected_sweeps

ACROSS = 400


def pilot(values: np.ndarray) -> Pilot:
    """A sample with these singular values."""
    plain = Preparation(across_features=True, center=False, scale=False)
    return Pilot(plain, np.eye(len(values)), values, float(np.sum(values**2)), None, True)


def falls(law: Callable[[np.ndarray], np.ndarray], count: int) -> np.ndarray:
    return law(np.arange(1.0, count + 1))


def test_a_wider_gap_needs_fewer_sweeps() -> None:
    found = [expected_sweeps(pilot(np.r_[np.ones(5), np.full(15, tail)]), 5, 1e-3) for tail in (0.9, 0.7, 0.3, 0.01)]
    assert None not in found
    assert found == sorted(found, reverse=True)
    assert found[0] > found[-1] == 1


def test_a_tighter_tolerance_needs_more_sweeps() -> None:
    # By hand: T grows by arccosh(2·2² − 1) = 2.63 a sweep; arccosh √(4/t) is 2.5, 4.8 and 10.6.
    values = falls(lambda i: 1 / i, 40)
    assert [expected_sweeps(pilot(values), 20, tolerance) for tolerance in (1e-1, 1e-3, 1e-8)] == [1, 2, 5]


def test_where_no_gap_is_seen_nothing_is_expected() -> None:
    assert expected_sweeps(pilot(np.ones(20)), 5, 1e-3) is None
    assert expected_sweeps(pilot(falls(lambda i: 1 / i, 20)), 20, 1e-3) is None
    assert expected_sweeps(pilot(falls(lambda i: 1 / i, 20)), 0, 1e-3) is None
    # Of exact low rank nothing is left beyond.
    assert expected_sweeps(pilot(np.r_[np.ones(5), np.zeros(15)]), 5, 1e-3) == 1


@pytest.mark.parametrize(
    ("law", "sweeps"),
    [(lambda i: 10 ** (-i / 10), 1), (lambda i: 1 / i, 2)],
    ids=["exponential", "inverse"],
)
def test_runs_make_the_sweeps_that_were_expected(
    tmp_path: Path, law: Callable[[np.ndarray], np.ndarray], sweeps: int
) -> None:
    rng = np.random.default_rng(3)
    left = np.linalg.qr(rng.standard_normal((8000, ACROSS)))[0]
    right = np.linalg.qr(rng.standard_normal((ACROSS, ACROSS)))[0]
    path = tmp_path / "matrix.npy"
    np.save(path, (left * falls(law, ACROSS)) @ right.T)
    heard: list[str] = []
    factors = bigsvd.decompose(
        path, rank=10, center="none", route="krylov", progress=lambda event: heard.append(event.note or "")
    )
    attributes = factors.attributes
    assert attributes["pilot_predicted_sweeps"] == attributes["sweeps"] == sweeps
    # Below 64 MB nothing is probed, and no time is predicted.
    assert attributes["pilot_predicted_seconds"] is None
    assert any(f"{sweeps} sweep" in words and "expected" in words for words in heard)

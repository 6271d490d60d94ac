"""What a run may rest on, and when it ends: nothing outlives the ground it stood on."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

import bigsvd
from bigsvd.drive.proof import Proof


def proof_of(*, restarts: int) -> Proof:
    """A proof about a basis of 2 of 5 columns that leaves an energy of 25 − 16, after a whole spectrum said 0.5."""
    plan = SimpleNamespace(widths=SimpleNamespace(start=2))
    sweeps: Any = SimpleNamespace(energy=25.0, energy_rounding=0.0, plan=plan)
    state: Any = SimpleNamespace(width=2, across=5, chains=[], restarts=restarts)
    whole: Any = SimpleNamespace(missed=lambda width: 0.5)
    return Proof(sweeps, state, whole=whole)


def test_a_whole_spectrum_bounds_what_is_missed_until_the_basis_is_restarted() -> None:
    assert proof_of(restarts=0)._missed(np.array([4.0, 0.0]), 0.0)[0] == 0.5
    assert proof_of(restarts=1)._missed(np.array([4.0, 0.0]), 0.0)[0] == 3.0


def test_ends_proved_with_measured_rounding_are_forgotten_with_it() -> None:
    proof = proof_of(restarts=0)
    proof.measured, proof.tall_error, proof.proved_ends = True, 1e-3, np.array([4.5, 3.0])
    proof.begin_again()
    assert not proof.measured
    assert proof.tall_error == 0
    assert len(proof.proved_ends) == 0


@pytest.mark.parametrize("route", ["direct", "gram", "tsqr", "krylov"])
def test_a_matrix_without_variance_has_any_share_of_it(route: str) -> None:
    constant = np.tile(np.arange(6.0), (40, 1))
    factors = bigsvd.decompose(constant, variance=0.9, route=route, axis="rows", panel_lines=4, memory="1GiB")
    assert factors.rank == 1
    assert factors.certificate.null.all()
    assert factors.certificate.captured_share == 1
    assert factors.certificate.tolerance_met, factors.certificate.verdict


def test_single_as_asked_stays_single_and_ends_where_rounding_limits_it() -> None:
    random = np.random.default_rng(7)
    matrix = (random.standard_normal((1600, 40)) * 0.8 ** np.arange(40)).astype(np.float32)
    factors = bigsvd.decompose(
        matrix, rank=5, precision="single", tolerance=1e-12, route="krylov", axis="rows", panel_lines=40,
        memory="1GiB", max_sweeps=8,
    )  # fmt: skip
    assert factors.attributes["precision"] == "single"
    assert not factors.certificate.tolerance_met
    assert factors.certificate.rounding_how == "measured"
    assert factors.attributes["sweeps"] < 8, "no further sweep can help"
    true = np.linalg.svd(matrix.astype(float) - matrix.mean(axis=0, dtype=float), compute_uv=False)[:5]
    assert np.all(factors.certificate.lower <= true)
    assert np.all(true <= factors.certificate.upper)


@pytest.mark.parametrize(("precision", "found"), [("single", "single"), ("auto", "double")])
def test_without_a_pilot_the_precision_is_what_the_plan_says(precision: str, found: str) -> None:
    random = np.random.default_rng(8)
    matrix = (random.standard_normal((600, 40)) * 0.7 ** np.arange(40) + 1000).astype(np.float32)
    factors = bigsvd.decompose(
        matrix, rank=3, precision=precision, route="krylov", axis="rows", panel_lines=150, memory="1GiB"
    )
    assert factors.attributes["precision"] == found
    assert dict(factors.attributes["plan"]["reasons"])["precision"].startswith(found)
    true = np.linalg.svd(matrix.astype(float) - matrix.mean(axis=0, dtype=float), compute_uv=False)[:3]
    assert np.all(factors.certificate.lower <= true * (1 + 1e-13))
    assert np.all(true <= factors.certificate.upper * (1 + 1e-13))

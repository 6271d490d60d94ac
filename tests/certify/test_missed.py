"""The bound on what was missed: it holds, fails as rarely as it says, and the energy bounds deterministically."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.stats
from evidence_samples import cases, gaussian

from bigsvd.certify import CHAIN_FAILURE, ChainState, chain_bound, energy_bound, least_projection, missed


def outside_operator(seed: int, *, imaginary: bool, leading: float = 3.0) -> tuple[np.ndarray, float]:
    """M = (I−P)AᴴA(I−P) of a small matrix whose largest value outside P stands well apart, and ‖A(I−P)‖."""
    random = np.random.default_rng(seed)
    like = np.zeros(1, complex if imaginary else float)
    matrix = gaussian(random, 30, 12, like) / 6
    basis = np.linalg.qr(gaussian(random, 12, 4, like))[0]
    outside = np.eye(12) - basis @ basis.conj().T
    direction = outside @ gaussian(random, 12, 1, like)
    direction /= np.linalg.norm(direction)
    matrix = matrix @ outside
    matrix = matrix + leading * np.linalg.qr(gaussian(random, 30, 1, like))[0] @ direction.conj().T
    return matrix.conj().T @ matrix, float(np.linalg.norm(matrix, 2))


def chain(operator: np.ndarray, omega: np.ndarray, power: int, **parts: float) -> ChainState:
    """Apply the operator `power` times, with the scale kept apart as a logarithm."""
    logarithm = 0.0
    for _ in range(power):
        omega = operator @ omega
        norm = np.linalg.norm(omega, 2)
        omega, logarithm = omega / norm, logarithm + float(np.log(norm))
    return ChainState(power, logarithm, parts.pop("lost", 0.0), omega.shape[1], np.iscomplexobj(omega), **parts)


def failures(operator: np.ndarray, norm: float, power: int, vectors: int, trials: int) -> int:
    """How often the bound lies below ‖A(I−P)‖ over fresh test vectors."""
    random = np.random.default_rng(power)
    omega = _unit(random, trials * len(operator), vectors, operator).reshape(trials, len(operator), vectors)
    norms = np.linalg.svd(np.linalg.matrix_power(operator, power) @ omega, compute_uv=False)[:, 0]
    imaginary = np.iscomplexobj(operator)
    states = (ChainState(power, float(np.log(size)), 0.0, vectors, imaginary) for size in norms)
    return sum(chain_bound(state) < norm for state in states)


def _unit(random: np.random.Generator, rows: int, columns: int, like: np.ndarray) -> np.ndarray:
    """Test vectors as the engine draws them: entries of unit variance, real or complex."""
    block = gaussian(random, rows, columns, like)
    return block / np.sqrt(2) if np.iscomplexobj(block) else block


@pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("vectors", [1, 5, 20])
def test_least_projection_is_the_quantile_of_the_chi_square_law(vectors: int, imaginary: bool) -> None:
    law = scipy.stats.chi2(2 * vectors if imaginary else vectors)
    expected = np.sqrt(law.ppf(CHAIN_FAILURE) / (2 if imaginary else 1))
    assert least_projection(vectors, imaginary) == pytest.approx(expected, rel=1e-9)


def test_least_projection_of_ten_and_twenty_vectors_against_chi_square_tables(monkeypatch: pytest.MonkeyPatch) -> None:
    # Lower 0.5 % points of the chi-square law: 2.156 for 10, 7.434 for 20 degrees of freedom (Pearson and Hartley,
    # Biometrika Tables for Statisticians I, table 8; figures from memory).
    monkeypatch.setattr(missed, "CHAIN_FAILURE", 0.005)
    assert least_projection(10, False) ** 2 == pytest.approx(2.156, abs=5e-4)
    assert least_projection(20, False) ** 2 == pytest.approx(7.434, abs=5e-4)
    assert 2 * least_projection(10, True) ** 2 == pytest.approx(7.434, abs=5e-4)


@pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])
def test_chain_bound_holds_for_hundreds_of_bases(imaginary: bool) -> None:
    checked = 0
    for case in cases(repeats=1):
        if np.iscomplexobj(case.matrix) != imaginary:
            continue
        v = case.ritz_right
        part = case.matrix - (case.matrix @ v) @ v.conj().T
        norm, operator = float(np.linalg.norm(part, 2)), part.conj().T @ part
        if norm < 1e-10:
            continue
        random = np.random.default_rng(checked)
        for power in (1, 2, 3, 5):
            omega = _unit(random, len(operator), 20, operator)
            assert chain_bound(chain(operator, omega, power)) >= norm, f"{case.name}, power {power}"
            checked += 1
    assert checked > 100


@pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("power", [1, 2, 6])
def test_failures_are_no_more_frequent_than_stated(
    power: int, imaginary: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    probability, trials = 0.05, 3000
    monkeypatch.setattr(missed, "CHAIN_FAILURE", probability)
    operator, norm = outside_operator(5, imaginary=imaginary)
    count = failures(operator, norm, power, 3, trials)
    # Beyond this count a frequency of 5 % is refused at 1e-6 (binomial law).
    assert count <= scipy.stats.binom.ppf(1 - 1e-6, trials, probability)


@pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])
def test_failures_are_as_frequent_as_stated_once_one_direction_is_left(
    imaginary: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    # At a high power ‖T_s‖ is σ^{2s}‖vᴴΩ‖, so the bound fails exactly when the chi-square variable is below
    # its quantile: a wrong factor between real and complex, or a lost degree of freedom, shows here.
    probability, trials = 0.05, 3000
    monkeypatch.setattr(missed, "CHAIN_FAILURE", probability)
    operator, norm = outside_operator(6, imaginary=imaginary)
    count = failures(operator, norm, 12, 3, trials)
    low, high = scipy.stats.binom.ppf([1e-6, 1 - 1e-6], trials, probability)
    assert low <= count <= high


def test_higher_powers_tighten_the_bound() -> None:
    operator, norm = outside_operator(7, imaginary=False)
    omega = np.random.default_rng(8).standard_normal((len(operator), 20))
    bounds = [chain_bound(chain(operator, omega, power)) for power in (1, 2, 4, 8)]
    assert bounds == sorted(bounds, reverse=True)
    assert bounds[-1] < 1.2 * norm


def test_what_was_lost_on_the_way_widens_the_bound() -> None:
    operator, _ = outside_operator(9, imaginary=False)
    omega = np.random.default_rng(10).standard_normal((len(operator), 20))
    whole = chain_bound(chain(operator, omega, 2))
    assert chain_bound(chain(operator, omega, 2, lost=0.5)) == pytest.approx(whole * 1.5**0.25, rel=1e-12)
    assert chain_bound(chain(operator, omega, 2, shrink=0.25)) == pytest.approx(whole * 4**0.25, rel=1e-12)


def test_no_power_bounds_nothing_and_nothing_left_bounds_by_zero() -> None:
    assert chain_bound(ChainState(0, 0.0, 0.0, 20, False)) == np.inf
    assert chain_bound(ChainState(3, 0.0, 0.0, 0, False)) == np.inf
    assert chain_bound(ChainState(3, -np.inf, 0.0, 20, False)) == 0.0


def test_scale_of_the_matrix_is_no_obstacle_to_high_powers() -> None:
    operator, norm = outside_operator(11, imaginary=False)
    omega = np.random.default_rng(12).standard_normal((len(operator), 20))
    for scale in (1e-100, 1e100):
        bound = chain_bound(chain(operator * scale**2, omega, 6))
        assert bound / scale == pytest.approx(chain_bound(chain(operator, omega, 6)), rel=1e-9)
        assert bound >= norm * scale


def test_energy_left_bounds_what_is_outside() -> None:
    for case in cases(repeats=2):
        v = case.ritz_right
        norm = float(np.linalg.norm(case.matrix - (case.matrix @ v) @ v.conj().T, 2))
        bound = energy_bound(case.evidence.energy, case.evidence.theta, 1e-14 * case.evidence.energy, 0.0)
        assert bound >= norm * (1 - 1e-12) - 1e-14, case.name


def test_energy_bound_widens_by_the_rounding_of_both_sides() -> None:
    theta = np.array([3.0, 2.0])
    assert energy_bound(14.0, theta, 0.0, 0.0) == pytest.approx(1.0)
    assert energy_bound(14.0, theta, 3.0, 0.0) == pytest.approx(2.0)
    assert energy_bound(14.0, theta, 0.0, 0.5) == pytest.approx(np.sqrt(14 - 2.5**2 - 1.5**2))
    assert energy_bound(12.9, theta, 0.0, 0.0) == 0.0

"""Every bound of the certificate against brute force: hundreds of small matrices whose singular vectors are known."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from evidence_samples import BASES, SPECTRA, Case, cases, exact_evidence
from table import largest_angle, trap, unmatched_interval

from bigsvd.certify import certify
from bigsvd.certify.angles import bound_angles
from bigsvd.certify.intervals import choose_intervals
from bigsvd.certify.order import index_bounds

EXACT = list(cases())
DISTURBED = list(cases(disturbed=True))
ALL = [pytest.param(EXACT, id="exact"), pytest.param(DISTURBED, id="disturbed")]


def test_cases_are_many_and_their_ritz_step_is_one() -> None:
    assert len(EXACT) == len(SPECTRA) * len(BASES) * 2 * 3
    for case in EXACT:
        v, theta = case.ritz_right, case.evidence.theta
        assert np.linalg.norm(v.conj().T @ v - np.eye(case.width)) < 1e-12, case.name
        live = min(case.ritz_left.shape[1], case.width)
        assert np.linalg.norm(case.matrix @ v[:, :live] - case.ritz_left[:, :live] * theta[:live]) < 1e-12, case.name


@pytest.mark.parametrize("sample", ALL)
def test_index_bounds_lie_above_every_singular_value(sample: list[Case]) -> None:
    for case in sample:
        upper = index_bounds(case.evidence)
        assert upper.shape == (case.width + 1,)
        for g in range(case.width + 1):
            assert case.value(g) <= upper[g], f"{case.name}: σ_{g + 1} = {case.value(g)} > {upper[g]}"


@pytest.mark.parametrize("sample", ALL)
def test_ritz_values_lie_below_the_singular_values_of_their_index(sample: list[Case]) -> None:
    for case in sample:
        for i in range(case.width):
            assert case.evidence.theta[i] - case.evidence.value_rounding <= case.value(i), case.name


def test_index_bounds_are_quadratic_in_the_residual_where_a_gap_is_proved() -> None:
    # docs/method.md: with c_g < θ², the excess of λ_max over θ² is at most t²/(θ² − c_g).
    close = [case for case in EXACT if " near " in case.name and case.name.startswith(("exponential", "harmonic"))]
    checked = 0
    for case in close:
        upper, theta = index_bounds(case.evidence), case.evidence.theta
        residual = case.evidence.block_residual(0, case.width)
        gap = theta[0] ** 2 - upper[1] ** 2
        if gap > 10 * residual:
            checked += 1
            assert upper[0] ** 2 - theta[0] ** 2 <= 1.01 * residual**2 / gap + 1e-12
    assert checked >= 5


@pytest.mark.parametrize("tolerance", [1e-3, 0.1])
@pytest.mark.parametrize("sample", ALL)
def test_intervals_hold_distinct_values_and_proved_ones_their_own(sample: list[Case], tolerance: float) -> None:
    proved = 0
    for case in sample:
        upper = index_bounds(case.evidence)
        for rank in {1, 2, max(1, case.width // 2), case.width}:
            intervals = choose_intervals(case.evidence, upper, rank, tolerance)
            lost = unmatched_interval(intervals.lower, intervals.upper, case.values)
            # Beyond the last singular value there are zeros; an interval that reaches down to zero holds one of those.
            assert lost is None or intervals.lower[lost] <= 0, (
                f"{case.name}, rank {rank}: interval {lost} holds no value"
            )
            for i in range(intervals.proved):
                inside = intervals.lower[i] <= case.value(i) <= intervals.upper[i]
                assert inside, (
                    f"{case.name}: σ_{i + 1} = {case.value(i)} outside {intervals.lower[i], intervals.upper[i]}"
                )
            proved += intervals.proved
    assert proved > 500


@pytest.mark.parametrize("sample", ALL)
def test_angles_are_within_their_bounds_on_both_sides(sample: list[Case]) -> None:
    single, tied = 0, 0
    for case in sample:
        upper = index_bounds(case.evidence)
        for rank in {1, max(1, case.width // 2), min(case.width, len(case.values))}:
            angles = bound_angles(case.evidence, upper, rank)
            for first in np.unique(angles.first[np.isfinite(angles.bound)]):
                last = int(angles.last[first])
                stated = float(angles.bound[first])
                assert np.all(angles.bound[first : last + 1] == stated), case.name
                single, tied = single + (first == last), tied + (first < last)
                above = case.values[first - 1] - case.values[first] if first else np.inf
                gap = min(above, case.values[last] - case.value(last + 1))
                assert gap > 1e-13, f"{case.name}: components {first} … {last} cut a repeated value, yet have a bound"
                allowed = stated + 1e-13 * case.values[0] / gap + 1e-7 * (stated > 1e-7) + 1e-8
                group = slice(first, last + 1)
                for ritz, true in ((case.ritz_right, case.right), (case.ritz_left, case.left)):
                    angle = largest_angle(ritz[:, group], true[:, group])
                    assert angle <= allowed, f"{case.name}: components {first} … {last} at {angle} > {stated}"
    assert single > 300
    assert tied > 30


def test_vectors_that_share_one_residual_direction_are_joined() -> None:
    # Four Ritz values of one, all coupled to the same direction outside: only three singular values stay near one, the
    # others move away by √4·s/2. Intervals of each vector's own residual, s/√2, would be four about three.
    s = 1e-3
    normal = np.diag([1 + 1e-9, 1, 1 - 1e-9, 1 - 2e-9, 1.0])
    normal[4, :4] = normal[:4, 4] = s
    value, vector = np.linalg.eigh(normal)
    matrix = (vector * np.sqrt(value)) @ vector.T
    evidence, _, _ = exact_evidence(matrix, np.eye(5)[:, :4])
    evidence = replace(evidence, missed=5.0)  # no gap is known: only the statement by value says anything
    intervals = choose_intervals(evidence, index_bounds(evidence), 4, 1e-2)
    true = np.sqrt(value)
    alone = np.full(4, s / np.sqrt(2))
    assert unmatched_interval(evidence.theta - alone, evidence.theta + alone, true) is not None
    assert unmatched_interval(intervals.lower, intervals.upper, true) is None
    assert np.all(intervals.upper - intervals.lower < 4 * s)


def test_a_direction_that_the_basis_is_blind_to_leaves_no_order_proved() -> None:
    checked = 0
    for case in EXACT:
        theta, values = case.evidence.theta, case.values
        missing = [i for i in range(min(case.width, len(values))) if values[i] > theta[i] * (1 + 1e-3)]
        if " blind " not in case.name or not missing or missing[0] > 0:
            continue
        checked += 1
        certificate = certify(case.evidence, case.width, 10, 1e-3, strict=False)
        narrow = certificate.upper - certificate.lower <= 1e-3 * certificate.value
        assert not np.any((certificate.index_proved & narrow)[missing]), case.name
        assert np.isnan(certificate.angle_bound[0]), f"{case.name}: an angle bound for a vector that is not there"
    assert checked >= 20


def test_the_trap_is_not_proved_at_index_one() -> None:
    # docs/method.md: θ = 1 with residual zero, yet σ₁ = √(0.9² + 0.95²) = 1.309.
    evidence, _, _ = exact_evidence(trap().matrix, np.eye(3)[:, :2])
    np.testing.assert_allclose(evidence.theta, [1.0, 0.9], atol=1e-15)
    assert evidence.block_residual(0, 1) < 1e-12
    assert index_bounds(evidence)[0] >= np.hypot(0.9, 0.95)
    alone = certify(evidence, 1, 10, 1e-3, strict=False)
    assert alone.state_words == ("resolved",)  # 1 is a singular value, the second
    assert not alone.index_proved[0]
    assert np.isnan(alone.angle_bound[0])
    both = certify(evidence, 2, 10, 1e-3, strict=False)
    assert not both.index_proved[0] or both.upper[0] >= np.hypot(0.9, 0.95)
    assert np.isnan(both.angle_bound).all()


@pytest.mark.parametrize("sample", ALL)
def test_certificates_say_nothing_false(sample: list[Case]) -> None:
    words = {"resolved": 0, "open": 0, "bulk": 0}
    for case in sample:
        rank = max(1, min(case.width // 2, len(case.values)))
        certificate = certify(case.evidence, rank, 3, 1e-2, strict=False)
        lost = unmatched_interval(certificate.lower, certificate.upper, [*case.values, *[0.0] * rank])
        assert lost is None, f"{case.name}: interval {lost} of {certificate.lower, certificate.upper}"
        for i in range(rank):
            words[certificate.state_words[i]] += 1
            assert certificate.lower[i] <= certificate.value[i] <= certificate.upper[i], case.name
            if certificate.index_proved[i]:
                assert certificate.lower[i] <= case.value(i) <= certificate.upper[i], case.name
            if certificate.null[i]:
                assert case.value(i) <= certificate.upper[i], case.name
    assert min(words.values()) > 3, words

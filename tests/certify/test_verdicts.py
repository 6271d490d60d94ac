"""States, verdict and words for evidence written by hand."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from evidence_samples import by_hand

from bigsvd.certify import WholeSpectrum, certify, rounding_limited, spectrum_intervals

FLAT = [9.0, *np.linspace(1.0, 0.95, 24)]


def test_small_residuals_and_a_proved_gap_resolve() -> None:
    certificate = certify(by_hand([5, 3, 1], [1e-6, 1e-6, 1e-6], 0.5), 2, 10, 1e-3, strict=True)
    assert certificate.state_words == ("resolved", "resolved")
    assert certificate.index_proved.all()
    assert certificate.tolerance_met
    assert certificate.verdict == "2 of 2 components resolved to 0.001; order proved for all"
    assert certificate.captured_share == pytest.approx(34 / 35.25)
    assert np.all(certificate.angle_bound < 1e-6)
    np.testing.assert_allclose(certificate.residual, [1e-6 / 5, 1e-6 / 3], rtol=1e-5)


def test_a_large_residual_leaves_a_component_open() -> None:
    certificate = certify(by_hand([5, 3, 1], [1e-6, 2.0, 2.0], 2.9), 2, 10, 1e-3, strict=False)
    assert certificate.state_words == ("resolved", "open")
    assert not certificate.tolerance_met
    assert "1 of 2 components resolved to 0.001; 1 open, values known to" in certificate.verdict


def test_a_missed_bound_above_the_values_leaves_the_order_unproved() -> None:
    certificate = certify(by_hand([5, 3, 1], [1e-6, 1e-6, 1e-6], 7.0), 2, 10, 1e-3, strict=False)
    assert certificate.state_words == ("resolved", "resolved")  # they are singular values, whichever
    assert not certificate.index_proved.any()
    assert np.isnan(certificate.angle_bound).all()
    assert certificate.verdict.endswith("order not proved")


def test_crowded_components_of_moderate_width_lie_in_the_bulk() -> None:
    evidence = by_hand(FLAT, [1e-6, *[0.08] * 24], 1.05)
    certificate = certify(evidence, 5, 10, 1e-3, strict=False)
    assert certificate.state_words == ("resolved", "bulk", "bulk", "bulk", "bulk")
    assert certificate.tolerance_met
    assert "4 lie in the bulk, values known to" in certificate.verdict
    assert "vectors not to be read singly" in certificate.verdict


def test_strict_counts_the_bulk_as_unmet() -> None:
    certificate = certify(by_hand(FLAT, [1e-6, *[0.08] * 24], 1.05), 5, 10, 1e-3, strict=True)
    assert not certificate.tolerance_met
    assert certificate.verdict.endswith("(strict: the bulk counts as unmet)")


def test_crowding_must_be_seen_not_supposed() -> None:
    # Only nine further values are known: whether the tenth neighbour is near cannot be said.
    short = by_hand(FLAT[:14], [1e-6, *[0.08] * 13], 1.05)
    assert certify(short, 5, 10, 1e-3, strict=False).state_words[4] == "open"
    # 1/√i falls by a third over ten places: no bulk.
    falling = by_hand(list(np.arange(1, 30) ** -0.5), [0.02] * 29, 0.19)
    assert "bulk" not in certify(falling, 5, 10, 1e-3, strict=False).state_words


def test_wide_intervals_are_open_even_where_values_crowd() -> None:
    certificate = certify(by_hand(FLAT, [1e-6, *[0.5] * 24], 3.0), 5, 10, 1e-3, strict=False)
    assert certificate.state_words[1:] == ("open",) * 4


def test_a_value_of_rounding_is_null_and_says_how_large_it_could_be() -> None:
    certificate = certify(by_hand([5, 3, 1e-16, 0], [1e-9, 1e-9, 0, 0], 1e-12), 4, 10, 1e-3, strict=False)
    np.testing.assert_array_equal(certificate.null, [False, False, True, True])
    np.testing.assert_array_equal(certificate.value[2:], 0)
    np.testing.assert_array_equal(certificate.lower[2:], 0)
    assert np.all(certificate.upper[2:] < 1e-6)  # √ of the rounding of products, 1e-13
    assert certificate.state_words == ("resolved",) * 4
    assert np.isnan(certificate.angle_bound[2:]).all()
    assert "2 zero to rounding" in certificate.verdict


@pytest.mark.parametrize("size", [1e-60, 1e8, 1e60])
def test_null_components_of_matrices_of_any_size_say_the_same(size: float) -> None:
    rounding = {"value_rounding": 1e-13 * size, "product_rounding": np.full(3, 1e-13 * size**2)}
    evidence = by_hand([5 * size, 3 * size, 0], [1e-9 * size**2, 1e-9 * size**2, 0], 1e-12 * size, **rounding)
    certificate = certify(evidence, 3, 10, 1e-3, strict=False)
    np.testing.assert_array_equal(certificate.null, [False, False, True])
    assert certificate.state_words == ("resolved",) * 3
    np.testing.assert_allclose(certificate.residual / size, [2e-10, 3.33e-10, 2e-14], rtol=0.01)


def test_a_null_component_is_open_while_the_missed_bound_is_large() -> None:
    certificate = certify(by_hand([5, 3, 0], [1e-9, 1e-9, 0], 2.0), 3, 10, 1e-3, strict=False)
    assert certificate.null[2]
    assert certificate.state_words[2] == "open"
    assert certificate.upper[2] >= 2.0


def test_a_value_above_noise_but_within_its_rounding_term_is_marked() -> None:
    evidence = by_hand([5, 1e-9], [1e-12, 0], 0.0, value_rounding=1e-8)
    certificate = certify(evidence, 2, 10, 1e-3, strict=False)
    np.testing.assert_array_equal(certificate.below_noise, [False, True])
    assert certificate.lower[1] == 0


def test_an_empty_matrix_of_zeros_is_resolved() -> None:
    certificate = certify(by_hand([0, 0, 0], [0, 0, 0], 0.0), 2, 10, 1e-3, strict=False)
    assert certificate.null.all()
    assert certificate.captured_share == 1.0


def test_a_whole_spectrum_narrows_values_and_proves_the_order() -> None:
    theta = [5.0, 3.0, 1.0]
    loose = by_hand(theta, [9.0, 9.0, 9.0], 4.0)
    whole = WholeSpectrum(np.array([5.0, 3.0, 1.0, 0.5]), np.full(4, 1e-9), 1e-9)
    without, within = (certify(e, 2, 10, 1e-3, strict=False) for e in (loose, replace(loose, whole=whole)))
    assert without.state_words == ("open", "open")
    assert within.state_words == ("resolved", "resolved")
    assert within.index_proved.all()
    assert np.all(within.upper <= np.array([5.0, 3.0]) + 1e-9 + 1e-12)
    # Wedin on the fold: 2√2·error/gap with a gap of 2 on both sides.
    np.testing.assert_allclose(within.angle_bound, 2 * np.sqrt(2) * 1e-9 / 2, rtol=1e-3, atol=1e-13)


def test_a_gram_error_gives_no_angles() -> None:
    loose = by_hand([5, 3, 1], [9.0, 9.0, 9.0], 4.0)
    whole = WholeSpectrum(np.array([5.0, 3.0, 1.0, 0.5]), np.full(4, 1e-9), np.inf)
    assert np.isnan(certify(replace(loose, whole=whole), 2, 10, 1e-3, strict=False).angle_bound).all()


def test_tied_components_are_bounded_as_one_subspace() -> None:
    evidence = by_hand([5, 5 - 1e-9, 2, 1], [1e-6] * 4, 0.5)
    certificate = certify(evidence, 3, 10, 1e-3, strict=False)
    np.testing.assert_array_equal(certificate.tied_first, [0, 0, 2])
    np.testing.assert_array_equal(certificate.tied_last, [1, 1, 2])
    assert certificate.angle_bound[0] == certificate.angle_bound[1] < 1e-6


def test_a_tie_across_the_rank_has_no_bound() -> None:
    certificate = certify(by_hand([5, 2, 2 - 1e-9, 1], [1e-6] * 4, 0.5), 2, 10, 1e-3, strict=False)
    assert np.isfinite(certificate.angle_bound[0])
    assert np.isnan(certificate.angle_bound[1])


def test_spectrum_ends_by_index_enclose_all_computed_values() -> None:
    evidence = by_hand([5, 3, 1], [0.1, 0.2, 0.3], 1.5)
    lower, upper = spectrum_intervals(evidence)
    assert lower.shape == upper.shape == (3,)
    assert np.all(lower <= evidence.theta)
    assert np.all(upper >= evidence.theta)
    assert upper[2] >= 1.5
    whole = WholeSpectrum(evidence.theta, np.full(3, 1e-6), 1e-6)
    np.testing.assert_allclose(spectrum_intervals(replace(evidence, whole=whole))[1], evidence.theta, rtol=1e-5)


def test_rounding_that_alone_exceeds_the_tolerance_is_recognised() -> None:
    rounded = by_hand([5, 3, 1], [0, 0, 0], 2.9, product_rounding=np.full(3, 0.2))
    certificate = certify(rounded, 2, 10, 1e-3, strict=False)
    assert "open" in certificate.state_words
    assert rounding_limited(rounded, certificate)
    sweepable = by_hand([5, 3, 1], [0.2, 0.2, 0.2], 2.9, product_rounding=np.full(3, 1e-12))
    assert not rounding_limited(sweepable, certify(sweepable, 2, 10, 1e-3, strict=False))
    done = by_hand([5, 3, 1], [0, 0, 0], 0.5)
    assert not rounding_limited(done, certify(done, 2, 10, 1e-3, strict=False))


def test_a_certificate_survives_storing() -> None:
    from bigsvd.certify import Certificate, SliceCheck

    certificate = certify(by_hand(FLAT, [1e-6, *[0.08] * 24], 1.05), 5, 10, 1e-3, strict=False)
    certificate = replace(certificate, slices=(SliceCheck((0, 5), (2, 9), 3, 1e-15, 1e-9, True),))
    again = Certificate.restore(certificate.arrays(), certificate.facts())
    assert again.slices == certificate.slices
    assert again.verdict == certificate.verdict
    for name, part in certificate.arrays().items():
        np.testing.assert_array_equal(again.arrays()[name], part)

"""Comparing found with planted: angles, what noise lets one expect, and errors."""

from types import SimpleNamespace

import numpy as np
import pytest

from bigsvd.demo import compare_with_planted, write_demo
from bigsvd.demo.__main__ import table_text
from bigsvd.demo.compare import _expected
from bigsvd.errors import OptionError, SourceError


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    path = tmp_path_factory.mktemp("demo")
    write_demo(path, scale=0.001)
    return path


def planted_factors(folder, which="night_watch") -> SimpleNamespace:
    with np.load(folder / "planted.npz") as arrays:
        parts = ("left_vectors", "singular_values", "right_vectors")
        return SimpleNamespace(**{part: arrays[f"{which}_{part}"] for part in parts})


def test_planted_factors_agree_with_themselves_whatever_their_signs(folder):
    factors = planted_factors(folder)
    factors.right_vectors = -factors.right_vectors
    for row in compare_with_planted(factors, folder, "night_watch"):
        assert row.found_value == row.planted_value
        assert row.angle < 1e-6


def test_a_vector_turned_by_three_degrees_is_told(folder):
    factors = planted_factors(folder)
    turn = np.radians(3)
    first, second = factors.right_vectors[:, 0], factors.right_vectors[:, 1]
    turned = factors.right_vectors.copy()
    turned[:, 0] = np.cos(turn) * first + np.sin(turn) * second
    factors.right_vectors = turned
    rows = compare_with_planted(factors, folder, "night_watch")
    assert rows[0].angle == pytest.approx(3, abs=1e-9)
    assert rows[1].angle < 1e-6


def test_fewer_factors_than_planted_compare_what_there_is(folder):
    factors = planted_factors(folder)
    short = SimpleNamespace(
        left_vectors=factors.left_vectors[:, :2],
        singular_values=factors.singular_values[:2],
        right_vectors=factors.right_vectors[:, :2],
    )
    assert [row.component for row in compare_with_planted(short, folder, "night_watch")] == [1, 2]


def test_wrong_vectors_are_not_as_expected(folder):
    factors = planted_factors(folder)
    factors.left_vectors = np.roll(factors.left_vectors, 1, axis=1)
    assert not any(row.as_expected for row in compare_with_planted(factors, folder, "night_watch"))


def test_value_off_by_more_than_tolerance_and_chance_is_not_as_expected(folder):
    row = compare_with_planted(planted_factors(folder), folder, "night_watch")[0]
    assert row._replace(found_value=row.expected_value, angle=row.expected_angle).as_expected
    allowed = 5 * row.spread + 1e-3 * row.expected_value
    assert row._replace(found_value=row.expected_value - 0.99 * allowed, angle=row.expected_angle).as_expected
    assert not row._replace(found_value=row.expected_value - 1.01 * allowed, angle=row.expected_angle).as_expected


@pytest.mark.parametrize("shape", [(300, 1500), (1500, 300)])
def test_expected_value_and_angle_hold_for_a_planted_direction(shape):
    """Benaych-Georges, Nadakuditi, J. Multivariate Anal. 111 (2012), formulas from memory, against LAPACK."""
    m, n = shape
    random = np.random.default_rng(7)
    left, right = random.standard_normal(m), random.standard_normal(n)
    left, right = left / np.linalg.norm(left), right / np.linalg.norm(right)
    value, noise = 150.0, 1.5
    u, s, vt = np.linalg.svd(value * np.outer(left, right) + noise * random.standard_normal(shape), full_matrices=False)
    angle = np.degrees(np.arccos(min(abs(u[:, 0] @ left), abs(vt[0] @ right))))
    expected_value, expected_angle = _expected(value, noise, m, n)
    assert s[0] == pytest.approx(expected_value, rel=0.01)
    assert angle == pytest.approx(expected_angle, rel=0.08)


def test_direction_below_the_noise_is_not_expected_to_be_seen():
    value, angle = _expected(10.0, 1.0, 400, 900)
    assert value == 50.0
    assert angle == 90.0


def test_missing_demo_and_unknown_matrix_and_other_shape_are_named(folder, tmp_path):
    factors = planted_factors(folder)
    with pytest.raises(SourceError, match=r"planted\.npz cannot be read"):
        compare_with_planted(factors, tmp_path, "night_watch")
    with pytest.raises(OptionError, match="no matrix 'low_water'"):
        compare_with_planted(factors, folder, "low_water")
    with pytest.raises(OptionError, match="factors are of a matrix 20 × 40960, but tide_water is 50 × 8192"):
        compare_with_planted(factors, folder, "tide_water")


def test_table_has_a_line_for_every_component(folder):
    lines = table_text(compare_with_planted(planted_factors(folder), folder, "night_watch")).splitlines()
    assert len(lines) == 8
    assert [line.split()[0] for line in lines[1:7]] == list("123456")

"""Printed numbers: no interval is printed smaller than it is, no bound rounded to its good side."""

from __future__ import annotations

import math

from hypothesis import example, given
from hypothesis import strategies as st

from bigsvd.report.numbers import show_captured, show_down, show_figures, show_interval, show_share, show_up

values = st.floats(1e-300, 1e300)


@given(values, st.floats(0, 0.9), st.floats(0, 0.9))
@example(8.282381595e299, 1.192092896e-07, 0.0)
def test_what_is_printed_holds_the_whole_interval(value: float, below: float, above: float) -> None:
    lower, upper = value * (1 - below), min(value * (1 + above), 1e304)
    text, interval = show_interval(value, lower, upper)
    if "…" in interval:
        low, high = interval.split("…")
        assert float(low) <= lower
        assert upper <= float(high)
        return
    printed, half = float(text), float(interval.removeprefix("± "))
    # Values stop at nine figures; below that the ± is of the value itself.
    slack = 1e-8 * value
    assert printed - half <= lower + slack
    assert upper <= printed + half + slack
    if half > 1e-7 * value:
        assert printed - half <= lower * (1 + 1e-15)
        assert upper * (1 - 1e-15) <= printed + half


@given(values, st.integers(1, 6))
def test_bounds_are_rounded_away_from_their_good_side_and_hardly(value: float, figures: int) -> None:
    up, down = float(show_up(value, figures)), float(show_down(value, figures))
    assert down <= value <= up
    assert up - down <= 10.0 ** (math.floor(math.log10(value)) - figures + 1) * (1 + 1e-9)


def test_figures_end_where_the_interval_begins_to_tell() -> None:
    assert show_interval(1234.5678, 1234.5478, 1234.5878)[0] == "1234.568"
    assert show_interval(0.012345678, 0.0122, 0.0125) == ("0.01235", "± 0.00016")


def test_a_value_of_zero_shows_how_large_it_may_be() -> None:
    assert show_interval(0.0, 0.0, 1e-12) == ("0", "≤ 1e-12")


def test_a_wide_interval_is_printed_by_its_ends() -> None:
    assert show_interval(10.0, 10.0, 25.04) == ("10.0", "10…25.1")


def test_an_end_that_is_not_known_is_a_question_mark() -> None:
    assert show_interval(1.0, 0.5, math.inf) == ("1.000", "0.5…∞")
    assert "nan" not in " ".join(show_interval(1.0, math.nan, math.nan))


def test_a_small_share_is_not_printed_as_none() -> None:
    assert show_share(1e-9) == "<0.01 %"
    assert show_share(0.0) == "0.00 %"


def test_nearly_all_is_not_printed_as_all() -> None:
    assert "100" not in show_captured(1 - 1e-9)
    assert show_captured(1.0) == "100 %"


def test_numbers_out_of_the_usual_range_are_printed_with_their_power() -> None:
    assert show_figures(6.02214076e23, 4) == "6.022e+23"
    assert show_up(1.01e-30) == "1.1e-30"

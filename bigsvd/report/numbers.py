"""Numbers as people read them: as many figures as their intervals allow, bounds rounded away from the good side."""

from __future__ import annotations

import math
from decimal import ROUND_CEILING, ROUND_FLOOR, Decimal

# Most figures of a printed value; all of them are in the result and in --json.
MOST_FIGURES = 9
# Wider than this share of the value, an interval is printed by its two ends.
WIDE = 0.1


def show_interval(value: float, lower: float, upper: float) -> tuple[str, str]:
    """Print a value and the interval it is known to.

    Parameters
    ----------
    value, lower, upper : float
        With lower ≤ value ≤ upper.

    Returns
    -------
    value, interval : str
        Figures end where the interval begins to tell. The interval is never printed smaller than it is: ``± x`` holds
        the farther end, and its rounding goes up.

    Examples
    --------
    >>> show_interval(1234.56784, 1234.5671, 1234.5689)
    ('1234.5678', '± 0.0011')
    >>> show_interval(2.5, 1.9, 3.1)
    ('2.50', '1.9…3.1')
    >>> show_interval(0.0, 0.0, 3.21e-13)
    ('0', '≤ 3.3e-13')
    >>> show_interval(1.0, 1.0, 1.0)
    ('1.00000000', '± 0')
    """
    if not all(map(math.isfinite, (value, lower, upper))):
        low, high = ("?" if math.isnan(lower) else show_down(lower)), ("?" if math.isnan(upper) else show_up(upper))
        return show_figures(value, 4), f"{low}…{high}"
    if value == 0:
        return "0", f"≤ {show_up(upper)}"
    half = max(value - lower, upper - value)
    if half > WIDE * value:
        return show_figures(value, 3), f"{show_down(lower, 3)}…{show_up(upper, 3)}"
    if half <= 0:
        return show_figures(value, MOST_FIGURES), "± 0"
    figures = max(3, math.floor(math.log10(value)) - math.floor(math.log10(half)) + 2)
    if figures > MOST_FIGURES:
        return show_figures(value, MOST_FIGURES), f"± {show_up(half)}"
    text = show_figures(value, figures)
    # Measured from the value as printed, so that what is printed holds the whole interval.
    return text, f"± {show_up(max(float(text) - lower, upper - float(text)))}"


def show_figures(value: float, figures: int) -> str:
    """Print a number with so many figures, plain between 0.0001 and a thousand million.

    >>> show_figures(1234.5678, 6), show_figures(0.00001234, 2), show_figures(123.4, 2)
    ('1234.57', '1.2e-05', '123')
    """
    if value == 0 or not math.isfinite(value):
        return "0" if value == 0 else "?"
    if not 1e-4 <= abs(value) < 1e9:
        return f"{value:.{figures - 1}e}"
    return f"{value:.{max(0, figures - 1 - math.floor(math.log10(abs(value))))}f}"


def show_up(value: float, figures: int = 2) -> str:
    """Print an upper bound, rounded up.

    >>> show_up(0.00121), show_up(1.2e-7), show_up(0.0), show_up(123.0)
    ('0.0013', '1.2e-07', '0', '130')
    """
    return _rounded(value, figures, ROUND_CEILING)


def show_down(value: float, figures: int = 2) -> str:
    """Print a lower bound, rounded down.

    >>> show_down(0.00129)
    '0.0012'
    """
    return _rounded(value, figures, ROUND_FLOOR)


def show_angle(radians: float) -> str:
    """Print an upper bound of an angle in degrees, rounded up.

    >>> show_angle(0.001)
    '0.058°'
    """
    return f"{show_up(math.degrees(radians))}°"


def show_share(share: float) -> str:
    """Print a share in per cent.

    >>> show_share(0.45231), show_share(3e-6), show_share(0.0)
    ('45.23 %', '<0.01 %', '0.00 %')
    """
    if not math.isfinite(share):
        return "?"
    return "<0.01 %" if 0 < share < 5e-5 else f"{100 * share:.2f} %"


def show_captured(share: float) -> str:
    """Print how much was captured, with enough figures to tell it from all.

    >>> show_captured(0.9531), show_captured(1 - 3e-7), show_captured(1.0)
    ('95.31 %', 'all but 3.0e-05 %', '100 %')
    """
    if 0 < 1 - share < 1e-4:
        return f"all but {100 * (1 - share):.1e} %"
    return "100 %" if share == 1 else show_share(share)


def show_probability(probability: float) -> str:
    """Print the probability that a statement is wrong.

    >>> show_probability(0.0), show_probability(2e-10)
    ('certain', 'wrong with a probability of at most 2e-10')
    """
    return "certain" if probability == 0 else f"wrong with a probability of at most {show_up(probability)}"


def _rounded(value: float, figures: int, how: str) -> str:
    """Round to so many figures in a direction, and print without needless zeros."""
    if value == 0 or not math.isfinite(value):
        return "0" if value == 0 else "∞"
    exact = Decimal(repr(float(value)))
    rounded = exact.quantize(Decimal((0, (1,), exact.adjusted() - figures + 1)), rounding=how)
    if Decimal("1e-4") <= abs(rounded) < Decimal("1e9"):
        text = f"{rounded:f}"
        return text.rstrip("0").rstrip(".") if "." in text else text
    mantissa, _, exponent = f"{rounded:.{figures - 1}e}".partition("e")
    mantissa = mantissa.rstrip("0").rstrip(".") if "." in mantissa else mantissa
    return f"{mantissa}e{int(exponent):+03d}"

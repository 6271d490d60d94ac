"""Random numbers as a contract: entry (i, j) of a Gaussian block is a function of seed, stream and position alone.

Raw Philox bits (a published counter-based generator, Salmon et al., SC 2011) are mapped to normals by our own code,
built from additions, multiplications, divisions and square roots only, so that neither panels, workers nor library
versions move a bit.
"""

from __future__ import annotations

import numpy as np

# Wichura, Algorithm AS 241 (PPND16), Applied Statistics 37 (1988), 477–484: coefficients, highest power first. From
# memory, checked in the tests against scipy.special.ndtri to 1e-14.
_CENTRE_TOP = (
    2509.0809287301226727,
    33430.575583588128105,
    67265.770927008700853,
    45921.953931549871457,
    13731.693765509461125,
    1971.5909503065514427,
    133.14166789178437745,
    3.387132872796366608,
)
_CENTRE_BOTTOM = (
    5226.495278852854561,
    28729.085735721942674,
    39307.89580009271061,
    21213.794301586595867,
    5394.1960214247511077,
    687.1870074920579083,
    42.313330701600911252,
    1.0,
)
_TAIL_TOP = (
    7.7454501427834140764e-4,
    0.0227238449892691845833,
    0.24178072517745061177,
    1.27045825245236838258,
    3.64784832476320460504,
    5.7694972214606914055,
    4.6303378461565452959,
    1.42343711074968357734,
)
_TAIL_BOTTOM = (
    1.05075007164441684324e-9,
    5.475938084995344946e-4,
    0.0151986665636164571966,
    0.14810397642748007459,
    0.68976733498510000455,
    1.6763848301838038494,
    2.05319162663775882187,
    1.0,
)
_FAR_TOP = (
    2.01033439929228813265e-7,
    2.71155556874348757815e-5,
    0.0012426609473880784386,
    0.026532189526576123093,
    0.29656057182850489123,
    1.7848265399172913358,
    5.4637849111641143699,
    6.6579046435011037772,
)
_FAR_BOTTOM = (
    2.04426310338993978564e-15,
    1.4215117583164458887e-7,
    1.8463183175100546818e-5,
    7.868691311456132591e-4,
    0.0148753612908506148525,
    0.13692988092273580531,
    0.59983220655588793769,
    1.0,
)
_LN2 = 0.6931471805599453094


def gaussian_block(
    seed: int, stream: int, rows: int, columns: int, *, first_row: int = 0, complex_entries: bool = False
) -> np.ndarray:
    """Standard normal entries, keyed by position.

    Parameters
    ----------
    seed : int
        Seed of the run.
    stream : int
        Which block of the run this is; blocks of different streams are independent.
    rows, columns : int
        Shape; entry (i, j) depends on `columns`, not on `rows`.
    first_row : int
        Row of the whole block that the first returned row is.
    complex_entries : bool
        Complex entries of unit variance, real and imaginary parts each N(0, ½).

    Returns
    -------
    ndarray, shape (rows, columns), float64 or complex128

    Examples
    --------
    >>> whole = gaussian_block(7, 1, 100, 3)
    >>> bool((gaussian_block(7, 1, 10, 3, first_row=90) == whole[90:]).all())
    True
    """
    words = columns * (2 if complex_entries else 1)
    # The key is two 64-bit words: seed and stream never meet another pair. Each counter value yields four words.
    generator = np.random.Philox(key=np.array([seed & (2**64 - 1), stream], dtype=np.uint64))
    skipped, extra = divmod(first_row * words, 4)
    generator.advance(skipped)
    bits = generator.random_raw(extra + rows * words)[extra:]
    uniform = (bits >> np.uint64(11)).astype(np.float64) * 2.0**-53 + 2.0**-54
    # The largest word would round to one, whose normal is infinite.
    normals = _normal(np.minimum(uniform, 1.0 - 2.0**-53))
    if complex_entries:
        return (normals.view(np.complex128) * np.sqrt(0.5)).reshape(rows, columns)
    return normals.reshape(rows, columns)


def draw_without_repeat(seed: int, stream: int, population: int, count: int) -> list[int]:
    """Pick `count` of `population` items by seed, in increasing order, spread over the whole range.

    One item is drawn from each of `count` equal stretches, so that an ordered file is sampled everywhere.
    """
    edges = [population * part // count for part in range(count + 1)]
    bits = np.random.Philox(key=np.array([seed & (2**64 - 1), stream], dtype=np.uint64)).random_raw(count)
    return [low + int(word) % (high - low) for low, high, word in zip(edges, edges[1:], bits, strict=False)]


def _normal(uniform: np.ndarray) -> np.ndarray:
    """Inverse of the normal distribution function on (0, 1)."""
    q = uniform - 0.5
    result = np.empty_like(q)
    centre = np.abs(q) <= 0.425
    r = 0.180625 - q[centre] ** 2
    result[centre] = q[centre] * _ratio(r, _CENTRE_TOP, _CENTRE_BOTTOM)
    outer = ~centre
    r = np.sqrt(-_logarithm(np.minimum(uniform[outer], 1.0 - uniform[outer])))
    tail = np.where(r <= 5.0, _ratio(r - 1.6, _TAIL_TOP, _TAIL_BOTTOM), _ratio(r - 5.0, _FAR_TOP, _FAR_BOTTOM))
    result[outer] = np.where(q[outer] < 0, -tail, tail)
    return result


def _ratio(x: np.ndarray, top: tuple[float, ...], bottom: tuple[float, ...]) -> np.ndarray:
    """Quotient of two polynomials by Horner's rule."""
    numerator = np.full_like(x, top[0])
    denominator = np.full_like(x, bottom[0])
    for upper, lower in zip(top[1:], bottom[1:], strict=True):
        numerator = numerator * x + upper
        denominator = denominator * x + lower
    return numerator / denominator


def _logarithm(x: np.ndarray) -> np.ndarray:
    """Natural logarithm by exponent and the series of 2·artanh: np.log differs between builds."""
    mantissa, exponent = np.frexp(x)
    low = mantissa < np.sqrt(0.5)
    mantissa = np.where(low, mantissa * 2.0, mantissa)
    exponent = np.where(low, exponent - 1, exponent)
    z = (mantissa - 1.0) / (mantissa + 1.0)
    square = z * z
    # |z| ≤ 0.1716, so 11 terms leave less than 1e-17.
    series = np.zeros_like(z)
    for power in range(21, 0, -2):
        series = series * square + 1.0 / power
    return exponent * _LN2 + 2.0 * z * series

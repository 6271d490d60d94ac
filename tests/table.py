"""The shared table of test matrices with their true singular values, and the checks that hold for every run.

Matrices are stored as samples × features unless a test turns them round. `raw` and `centred` are singular values
known from the construction (exact up to the rounding of the entries); LAPACK gives the truth in all other cases.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import scipy.linalg

Preparation = tuple[str, str]
PLAIN: Preparation = ("none", "none")
CENTRED: Preparation = ("features", "none")
SCALED: Preparation = ("features", "unit")
EPS = float(np.finfo(np.float64).eps)


@dataclass(frozen=True, eq=False)
class Entry:
    """One matrix of the table, the rank to ask for, and the preparations that make sense for it."""

    matrix: np.ndarray
    rank: int = 12
    raw: np.ndarray | None = None
    centred: np.ndarray | None = None
    preparations: tuple[Preparation, ...] = (PLAIN, CENTRED, SCALED)


# ---------------------------------------------------------------------------------------------- how they are made
def orthonormal(seed: int, rows: int, columns: int, *, imaginary: bool = False, mean_free: bool = False) -> np.ndarray:
    """Random orthonormal columns; `mean_free` ones have no component along the vector of ones."""
    random = np.random.default_rng(seed)
    block = random.standard_normal((rows, columns + mean_free))
    if imaginary:
        block = block + 1j * random.standard_normal(block.shape)
    if mean_free:
        block[:, 0] = 1
    return np.linalg.qr(block)[0][:, int(mean_free) :]


def planted(values: np.ndarray, shape: tuple[int, int], seed: int, **options: bool) -> np.ndarray:
    """U·diag(values)·Vᴴ with random factors; the columns have mean zero where the rows allow it."""
    k = len(values)
    left = orthonormal(seed, shape[0], k, mean_free=k < shape[0], **options)
    right = orthonormal(seed + 1, shape[1], k, **options)
    return (left * values) @ right.conj().T


def known(values: np.ndarray, shape: tuple[int, int], seed: int, rank: int = 12, **options: bool) -> Entry:
    """A planted matrix whose values are known with and without centring."""
    full = np.zeros(min(shape))
    full[: len(values)] = np.sort(values)[::-1]
    return Entry(planted(values, shape, seed, **options), rank, raw=full, centred=full)


def exponential() -> Entry:
    """σ_i = 0.85^i: 3e-11 of the first at the end."""
    return known(0.85 ** np.arange(150), (640, 150), 1)


def harmonic() -> Entry:
    """σ_i = 1/i."""
    return known(1 / np.arange(1, 161), (640, 160), 3)


def root_harmonic() -> Entry:
    """σ_i = 1/√i: a heavy tail."""
    return known(np.arange(1, 161) ** -0.5, (640, 160), 5)


def clustered() -> Entry:
    """Clusters of four whose members differ by 1e-9 of their value."""
    return known((0.7 ** np.arange(12)[:, None] * (1 - 1e-9 * np.arange(4))).ravel(), (640, 160), 7)


def repeated() -> Entry:
    """Exact multiplicities 3, 4 and 2 over a decaying tail."""
    return known(np.r_[[5.0] * 3, [3.0] * 4, [2.0] * 2, 0.8 ** np.arange(60)], (640, 160), 9, rank=9)


def spiked() -> Entry:
    """Fifteen spikes of 2 to 5 over a perfectly flat bulk of 1."""
    return known(np.r_[np.linspace(5, 2, 15), np.ones(185)], (800, 200), 11, rank=15)


def rank_deficient() -> Entry:
    """Seven values, then exact zeros: five null components among the twelve asked for."""
    return known(np.array([9.0, 7, 5, 4, 3, 2, 1]), (640, 160), 13)


def graded() -> Entry:
    """Values from 1 down to 1e-12 in equal steps of the logarithm."""
    return known(np.logspace(0, -12, 49), (480, 120), 15, rank=24)


def offset() -> Entry:
    """Standard deviation about 1 on an offset of 1e4, a different one in every feature."""
    values = np.r_[np.linspace(80, 40, 8), np.full(112, 24.0)]
    matrix = planted(values, (600, 120), 17) + np.linspace(0.9e4, 1.1e4, 120)
    return Entry(matrix, 8, centred=values, preparations=(CENTRED, SCALED, PLAIN))


def rare_direction() -> Entry:
    """Rows ordered in blocks, a direction to each; the second strongest is carried by the last 1 % of the rows only."""
    random = np.random.default_rng(19)
    rows, columns, blocks = 800, 120, 8
    directions = orthonormal(20, columns, blocks + 1).T
    strength = np.repeat(np.linspace(3, 1, blocks), rows // blocks)
    matrix = (strength * random.standard_normal(rows))[:, None] * np.repeat(directions[:blocks], rows // blocks, axis=0)
    matrix += 0.02 * random.standard_normal(matrix.shape)
    matrix[-8:] += np.outer(random.choice([-10.0, 10.0], 8), directions[-1])
    return Entry(matrix, 9)


def trap() -> Entry:
    """2 × 3 with orthogonal rows of length 1 and √1.7125: a zero residual at 1 proves nothing of σ₁."""
    matrix = np.array([[1.0, 0, 0], [0, 0.9, 0.95]])
    return Entry(matrix, 2, raw=np.array([np.hypot(0.9, 0.95), 1.0]), preparations=(PLAIN,))


def all_zero() -> Entry:
    return Entry(np.zeros((240, 60)), 5, raw=np.zeros(60), centred=np.zeros(60))


def constant() -> Entry:
    values = np.zeros(60)
    values[0] = 3.25 * np.sqrt(240 * 60)
    return Entry(np.full((240, 60), 3.25), 5, raw=values, centred=np.zeros(60))


def single_row() -> Entry:
    row = np.arange(1.0, 151)[None]
    return Entry(row, 1, raw=np.array([np.linalg.norm(row)]), centred=np.zeros(1))


def single_column() -> Entry:
    column = np.random.default_rng(23).standard_normal((150, 1))
    return Entry(column, 1, raw=np.array([np.linalg.norm(column)]))


def constant_features() -> Entry:
    """Every tenth feature is constant, one of them zero: they stay at zero under centring and scaling."""
    matrix = planted(0.9 ** np.arange(80), (480, 120), 25) * np.linspace(1, 50, 120) + np.linspace(-5, 5, 120)
    matrix[:, ::10] = np.arange(12) * 1.1
    return Entry(matrix)


def noisy() -> Entry:
    """Ten components over Gaussian noise: the tail is a bulk in which neighbours cannot be told apart."""
    noise = np.random.default_rng(27).standard_normal((900, 200)) / np.sqrt(900)
    return Entry(planted(np.linspace(9, 3, 10), noise.shape, 28) + noise, 20)


def wide() -> Entry:
    """More features than samples."""
    return Entry(planted(1 / np.arange(1, 120), (120, 520), 31) * 7, 10)


def square() -> Entry:
    return Entry(planted(0.9 ** np.arange(150), (200, 200), 33), 10)


def float32() -> Entry:
    return Entry(planted(50 / np.arange(1, 161), (640, 160), 35).astype(np.float32))


def float32_offset() -> Entry:
    """The offset matrix in single precision: squares about zero lose everything, squares about the mean nothing."""
    return Entry(offset().matrix.astype(np.float32), 8, preparations=(CENTRED, SCALED))


def float32_huge() -> Entry:
    """Entries near 1e30: their squares overflow in single precision."""
    return Entry((planted(0.8 ** np.arange(60), (320, 80), 37) * 1e31).astype(np.float32), 8)


def float32_tiny() -> Entry:
    """Entries near 1e-30: their squares vanish in single precision."""
    return Entry((planted(0.8 ** np.arange(60), (320, 80), 39) * 1e-29).astype(np.float32), 8)


def counts() -> Entry:
    """uint16 up to its end: products and differences wrap unless they are converted first."""
    smooth = planted(0.8 ** np.arange(40), (480, 120), 41)
    return Entry(np.round(65535 * (smooth - smooth.min()) / np.ptp(smooth)).astype(np.uint16), 10)


def int16() -> Entry:
    smooth = planted(0.8 ** np.arange(40), (120, 480), 43)
    return Entry(np.round(32767 * smooth / np.abs(smooth).max()).astype(np.int16), 10)


def complex128() -> Entry:
    return known(1 / np.arange(1, 121), (480, 120), 45, imaginary=True)


def complex128_offset() -> Entry:
    """Complex means: a transpose in place of the conjugate transpose shows at once."""
    values = np.r_[np.linspace(60, 30, 8), np.full(92, 10.0)]
    means = np.linspace(-40, 60, 100) + 1j * np.linspace(90, -30, 100)
    return Entry(planted(values, (400, 100), 47, imaginary=True) + means, 8, centred=values)


def complex64() -> Entry:
    return Entry(planted(0.85 ** np.arange(100), (120, 400), 49, imaginary=True).astype(np.complex64), 8)


TABLE: dict[str, Callable[[], Entry]] = {
    build.__name__: build
    for build in (
        *(exponential, harmonic, root_harmonic, clustered, repeated, spiked, rank_deficient, graded, offset),
        *(rare_direction, trap, all_zero, constant, single_row, single_column, constant_features, noisy, wide, square),
        *(float32, float32_offset, float32_huge, float32_tiny, counts, int16),
        *(complex128, complex128_offset, complex64),
    )
}


@cache
def entry(name: str) -> Entry:
    """The matrix of that name, made once and never written to."""
    made = TABLE[name]()
    made.matrix.setflags(write=False)
    return made


# ------------------------------------------------------------------------------------------------------- the truth
@dataclass(frozen=True, eq=False)
class Truth:
    """LAPACK's factors of a prepared matrix, how far its values may be off, and ‖·‖_F before centring."""

    prepared: np.ndarray
    left: np.ndarray
    values: np.ndarray
    right: np.ndarray
    slack: float
    stored_norm: float


def prepare(matrix: np.ndarray, preparation: Preparation) -> np.ndarray:
    """Centre and scale the columns of samples × features in extended precision; rounded to double at the end."""
    imaginary = np.iscomplexobj(matrix)
    exact = matrix.astype(np.clongdouble if imaginary else np.longdouble)
    still = (matrix == matrix[:1]).all(axis=0)
    mean = np.where(still, exact[0], exact.mean(axis=0))
    center, scale = preparation
    prepared = exact - mean if center == "features" else exact
    if scale == "unit":
        spread = np.sqrt((np.abs(exact - mean) ** 2).sum(axis=0) / max(len(exact) - 1, 1))
        prepared = prepared / np.where(still, 1, spread)
    return prepared.astype(np.complex128 if imaginary else np.float64)


def truth_of(matrix: np.ndarray, preparation: Preparation = PLAIN) -> Truth:
    """Decompose the prepared samples × features with LAPACK's QR iteration."""
    prepared = prepare(matrix, preparation)
    left, values, right = scipy.linalg.svd(prepared, full_matrices=False, lapack_driver="gesvd")
    # LAPACK Users' Guide §4.9: |σ̂ − σ| ≤ p(m, n)·ε·σ₁ with p growing modestly; the longer side is taken for p.
    slack = max(prepared.shape) * EPS * float(values[0])
    norm = float(np.linalg.norm(prepare(matrix, ("none", preparation[1]))))
    return Truth(prepared, left, values, right.conj().T, slack, norm)


@cache
def truth(name: str, preparation: Preparation) -> Truth:
    """The truth about a matrix of the table."""
    return truth_of(entry(name).matrix, preparation)


# ------------------------------------------------------------------------------------------- checks on certificates
def unmatched_interval(lower: Iterable[float], upper: Iterable[float], values: Iterable[float]) -> int | None:
    """Index of an interval that no distinct value is left for, or None: over rising values, earliest end first."""
    low, high = np.asarray(lower, float), np.asarray(upper, float)
    waiting = sorted(range(len(low)), key=lambda i: low[i])
    entered: list[int] = []
    for value in sorted(values):
        while waiting and low[waiting[0]] <= value:
            entered.append(waiting.pop(0))
        entered.sort(key=lambda i: high[i])
        if entered:
            if high[entered[0]] < value:
                return entered[0]
            entered.pop(0)
    return entered[0] if entered else waiting[0] if waiting else None


def assert_intervals_hold(certificate: Any, values: np.ndarray, slack: float = 0.0) -> None:
    """Distinct true values can be matched with the intervals; where the order is proved, interval i holds σ_i."""
    lower, upper, value = (np.asarray(part) for part in (certificate.lower, certificate.upper, certificate.value))
    assert (lower <= value).all(), f"value below its interval: {value[lower > value]} < {lower[lower > value]}"
    assert (value <= upper).all(), f"value above its interval: {value[value > upper]} > {upper[value > upper]}"
    assert (np.diff(value) <= 0).all(), "values are not in decreasing order"
    lost = unmatched_interval(lower - slack, upper + slack, values)
    assert lost is None, f"no true value is left for interval {lost}: {lower[lost]!r} … {upper[lost]!r}"
    for i in np.flatnonzero(certificate.index_proved):
        place = f"σ_{i + 1} = {values[i]!r} outside its proved interval {lower[i]!r} … {upper[i]!r}"
        assert lower[i] - slack <= values[i] <= upper[i] + slack, place


def largest_angle(computed: np.ndarray, true: np.ndarray) -> float:
    """Largest principal angle between the spans of two blocks with orthonormal columns, of equal width."""
    outside = computed - true @ (true.conj().T @ computed)
    return float(np.arcsin(min(1.0, np.linalg.norm(outside, 2))))


def gap_of(values: np.ndarray, first: int, last: int, *, zero_outside: bool) -> float:
    """Distance of values first … last from all others; 0 counts as one where the space has further dimensions."""
    others = np.r_[values[:first], values[last + 1 :], [0.0] * zero_outside]
    return float(np.abs(values[first : last + 1, None] - others).min(initial=np.inf))


def assert_angles_hold(factors: Any, truth: Truth) -> None:
    """Each vector, or the subspace of each tie, is within its bound of the true one of the same indices."""
    certificate = factors.certificate
    bound, proved = np.asarray(certificate.angle_bound), np.asarray(certificate.index_proved)
    assert proved[np.isfinite(bound)].all(), f"angle bounds where the order is not proved: {bound[~proved]}"
    for i in np.flatnonzero(np.isfinite(bound)):
        first, last = int(certificate.tied_first[i]), int(certificate.tied_last[i])
        assert first <= i <= last < certificate.rank, f"component {i} is said to be tied with {first} … {last}"
        for stored, true in ((factors.left_vectors, truth.left), (factors.right_vectors, truth.right)):
            vectors = np.asarray(stored[:])
            outside = gap_of(truth.values, first, last, zero_outside=vectors.shape[0] > len(truth.values))
            # The reference itself is only known to slack/gap (Wedin); storing rounds a unit vector by half an ε.
            allowed = truth.slack / outside if outside > 0 else np.inf
            if allowed > 0.5:
                assert bound[i] >= np.pi / 2, f"components {first} … {last} are not determined, yet bounded: {bound[i]}"
                continue
            allowed += 4 * np.finfo(vectors.dtype).eps
            angle = largest_angle(vectors[:, first : last + 1].astype(true.dtype), true[:, first : last + 1])
            assert angle <= bound[i] + allowed, f"components {first} … {last}: angle {angle} > bound {bound[i]}"


def assert_missed_holds(factors: Any, values: np.ndarray, slack: float = 0.0) -> None:
    """The largest value that any subspace of the basis' width must leave outside is below the missed bound."""
    width, bound = factors.attributes["width"], factors.certificate.missed_bound
    assert width >= factors.certificate.rank
    outside = values[width] if width < len(values) else 0.0
    assert outside <= bound + slack, f"σ_{width + 1} = {outside} > missed bound {bound}"


# --------------------------------------------------------------------------------------------- checks on the factors
def samples_are_swept(factors: Any) -> bool:
    """Whether panels are ranges of samples: then A·V = U·Σ holds to rounding, else Aᴴ·U = V·Σ."""
    return bool(factors.attributes["plan"]["axis"] == factors.attributes["request"]["samples"])


def stored_epsilon(factors: Any) -> float:
    """ε of the stored vectors where it is coarser than double, else 0."""
    stored = max(float(np.finfo(part.dtype).eps) for part in (factors.left_vectors, factors.right_vectors))
    return stored if stored > EPS else 0.0


def working_epsilon(factors: Any) -> float:
    """ε of the coarsest arithmetic in the run: of the products, or of the stored vectors."""
    single = factors.attributes["precision"] == "single"
    return max(stored_epsilon(factors), float(np.finfo(np.float32).eps) if single else EPS)


def assert_factors_true(factors: Any, truth: Truth, *, share: float = 0.0) -> None:
    """All that every run must satisfy, whatever its matrix, route and axis; `share` of the variance was asked for."""
    certificate = factors.certificate
    kind = truth.left.dtype
    left, right = (np.asarray(part[:]).astype(kind) for part in (factors.left_vectors, factors.right_vectors))
    values = np.asarray(factors.singular_values[:])
    matrix, slack = truth.prepared, truth.slack
    k = len(values)
    assert left.shape == (matrix.shape[0], k)
    assert right.shape == (matrix.shape[1], k)
    np.testing.assert_array_equal(values, certificate.value)

    assert_intervals_hold(certificate, truth.values, slack)
    assert_angles_hold(factors, truth)
    assert_missed_holds(factors, truth.values, slack)

    # Higham & Mary, SIAM J. Sci. Comput. 41 (2019): |fl(xᵀy) − xᵀy| ≤ λ√N·u·|x|ᵀ|y| but for 2N·exp(−λ²/2); λ = 8.
    depth, size = 8 * np.sqrt(max(matrix.shape)), float(np.linalg.norm(matrix))
    relative, checking = depth * working_epsilon(factors), depth * EPS * truth.stored_norm
    rounding = relative * size + checking
    for side, defect in ((left, certificate.left_defect), (right, certificate.right_defect)):
        found = np.linalg.norm(side.conj().T @ side - np.eye(k))
        assert found <= relative * k, f"columns are not orthonormal: {found}"
        assert found <= defect + depth * EPS * k, f"stated defect {defect}, found {found}"
    # The product of the side that the panels hold whole is exact; what is left of the other is the residual.
    sides = [
        np.linalg.norm(matrix @ right - left * values, axis=0),
        np.linalg.norm(matrix.conj().T @ left - right * values, axis=0),
    ]
    product, residual = sides if samples_are_swept(factors) else reversed(sides)
    assert (product <= rounding).all(), f"the product A·B is not U·Σ to rounding: {product}"
    storing = stored_epsilon(factors) * truth.values[0]
    stated = np.asarray(certificate.residual) + checking + storing
    assert (residual <= stated).all(), f"residuals {residual} > stated {stated}"
    # ‖A − UΣVᴴ‖²_F = ‖A‖²_F − Σσ² where one product is exact and both sides are orthonormal (Pythagoras).
    captured = float((values**2).sum())
    remainder = np.linalg.norm(matrix - (left * values) @ right.conj().T) ** 2
    assert abs(remainder - (size**2 - captured)) <= 4 * rounding * (size + rounding)
    assert abs(certificate.total_energy - size**2) <= 2 * rounding * (size + rounding)
    if certificate.total_energy:
        assert abs(certificate.captured_share - captured / certificate.total_energy) <= 4 * k * EPS
    assert_signs_follow_the_rule(factors.right_vectors[:])

    words, unmet = certificate.state_words, [state == "open" for state in certificate.state_words]
    assert set(words) <= {"resolved", "open", "bulk"}
    width = np.asarray(certificate.upper) - np.asarray(certificate.lower)
    for i in range(k):
        if words[i] == "resolved" and not (certificate.null[i] or certificate.below_noise[i]):
            assert width[i] <= certificate.tolerance * values[i] * (1 + 4 * EPS), f"component {i} is not resolved"
    if not certificate.strict:
        reached = certificate.captured_share >= share
        assert certificate.tolerance_met == (reached and not any(unmet)), f"{certificate.verdict}: {words}"


def assert_signs_follow_the_rule(vectors: np.ndarray) -> None:
    """The entry of largest modulus (one of those that rounding cannot tell apart) is real and positive."""
    grain = 16 * np.finfo(vectors.dtype).eps
    for j, vector in enumerate(np.asarray(vectors).T):
        size = np.abs(vector)
        leading = vector[size >= size.max() * (1 - grain)]
        good = (leading.real > 0) & (np.abs(leading.imag) <= grain * size.max())
        assert good.any(), f"vector {j}: entries of largest modulus {leading}"

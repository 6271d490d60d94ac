"""Whole runs against the outside: published examples, known singular values, a reference library, common practice."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import table
from table import CENTRED, EPS, PLAIN, SCALED

import bigsvd
from bigsvd.errors import NonFiniteError

CEILING = "1GiB"


def pca(matrix: np.ndarray, *, scale: str = "none", **options: Any) -> Any:
    """Centred decomposition of samples × features, all components unless told otherwise."""
    return bigsvd.decompose(matrix, **{"rank": min(matrix.shape), "scale": scale, "memory": CEILING} | options)


def variances(factors: Any) -> np.ndarray:
    """Variance along each component: σ²/(n − 1)."""
    return np.asarray(factors.singular_values[:]) ** 2 / (factors.left_vectors.shape[0] - 1)


def assert_same_up_to_sign(found: np.ndarray, published: np.ndarray, atol: float) -> None:
    """Columns agree once each is given the sign of its partner."""
    found = np.asarray(found)
    signs = np.sign((found * published).sum(axis=0))
    np.testing.assert_allclose(found * signs, published, rtol=0, atol=atol)


# ----------------------------------------------------------------------------------------------- published examples
# NIST/SEMATECH e-Handbook of Statistical Methods, §6.5.5.2 (pmc552), "Numerical example": data, R, λ, V, communalities.
HANDBOOK = np.array(
    [[7, 4, 3], [4, 1, 8], [6, 3, 5], [8, 6, 1], [8, 5, 7], [7, 2, 9], [5, 3, 3], [9, 5, 8], [7, 4, 5], [8, 2, 2]]
)


def test_handbook_example_gives_the_published_eigenvalues() -> None:
    factors = pca(HANDBOOK, scale="unit")
    found = variances(factors)
    np.testing.assert_allclose(found, [1.769, 0.927, 0.304], atol=5e-4, rtol=0)  # as printed
    np.testing.assert_allclose(np.cumsum(found) / found.sum(), [0.590, 0.899, 1.0], atol=5e-4, rtol=0)  # as printed
    np.testing.assert_allclose(found.prod(), 0.499, atol=5e-4, rtol=0)  # as printed: the determinant of R
    # the same to ten digits, recomputed from the data
    np.testing.assert_allclose(found, [1.7687741361, 0.9270759169, 0.3041499470], atol=1e-10, rtol=0)
    values = [3.9898580457, 2.8885434482, 1.6544937362]
    np.testing.assert_allclose(factors.singular_values[:], values, atol=1e-10, rtol=0)


def test_handbook_example_gives_the_published_vectors_and_communalities() -> None:
    factors = pca(HANDBOOK, scale="unit")
    vectors, lambdas = np.asarray(factors.right_vectors[:]), variances(factors)
    printed = np.array([[0.64, 0.38, -0.66], [0.69, 0.10, 0.72], [-0.34, 0.91, 0.20]])
    # two decimals, cut rather than rounded in the second column (.3847 and .9179): one unit of the last
    assert_same_up_to_sign(vectors, printed, atol=0.01)
    exact = np.array(
        [
            [0.6420045763, 0.3846722917, -0.6632174243],
            [0.6863616414, 0.0971303301, 0.7207450286],
            [-0.3416691692, 0.9179286067, 0.2016661891],
        ]
    )
    assert_same_up_to_sign(vectors, exact, atol=1e-10)
    loadings = vectors * np.sqrt(lambdas)
    communalities = (loadings[:, :2] ** 2).sum(axis=1)
    np.testing.assert_allclose(communalities, [0.8662, 0.8420, 0.9876], atol=1e-4, rtol=0)  # as printed
    assert abs(loadings[1, 0]) == pytest.approx(
        0.91, abs=5e-3
    )  # as printed: correlation of variable 2 with component 1


def test_handbook_example_gives_the_scores_of_unit_variance() -> None:
    # recomputed from the handbook's data: standardised with n − 1, divided by √λ
    factors = pca(HANDBOOK, scale="unit")
    scores = np.asarray(factors.left_vectors[:]) * np.sqrt(len(HANDBOOK) - 1)
    first = np.array(
        [[0.3871, -0.6552, 0.0608], [-2.0001, 0.0652, 0.6], [-0.4391, -0.3018, 0.2839], [1.5397, -0.9447, 0.6641]]
    )
    signs = np.sign((scores[:4] * first).sum(axis=0))
    np.testing.assert_allclose(scores[:4] * signs, first, rtol=0, atol=5.1e-5)


def test_covariance_example_gives_the_published_results() -> None:
    # NAG Library, example of routine g03aa (covariance PCA of the handbook's ten rows), results page.
    factors = pca(HANDBOOK)
    found = variances(factors)
    np.testing.assert_allclose(found, [8.2739, 3.6761, 0.7499], atol=5.1e-5, rtol=0)
    np.testing.assert_allclose(found / found.sum(), [0.6515, 0.2895, 0.0590], atol=5.1e-5, rtol=0)
    printed = np.array([[-0.1376, -0.2505, 0.9583], [0.6990, 0.6609, 0.2731], [-0.7017, 0.7075, 0.0842]]).T
    assert_same_up_to_sign(factors.right_vectors[:], printed, atol=5.1e-5)
    first = np.asarray(factors.scores()[:])[0]
    np.testing.assert_allclose(np.abs(first), [2.151, 0.173, 0.107], atol=5.1e-4, rtol=0)


def test_handbook_rows_without_centring_give_the_values_of_the_plain_matrix() -> None:
    # recomputed from the handbook's data; the squares of its entries add up to 973
    factors = pca(HANDBOOK, center="none")
    values = np.asarray(factors.singular_values[:])
    np.testing.assert_allclose(values, [29.9232047201, 8.3460187505, 2.8188278225], atol=1e-10, rtol=0)
    assert factors.certificate.total_energy == pytest.approx(973, rel=1e-14)


# Violent crime arrests per 100,000 in 50 states, 1973 (McNeil, Interactive Data Analysis, Wiley 1977): murder, assault,
# urban population in per cent, rape. The PCA is a worked example in James, Witten, Hastie, Tibshirani, An Introduction
# to Statistical Learning, and its lab. Data from memory, confirmed by every mean, variance and loading printed there.
ARRESTS_TEXT = (
    "13.2 236 58 21.2; 10 263 48 44.5; 8.1 294 80 31; 8.8 190 50 19.5; 9 276 91 40.6; 7.9 204 78 38.7;"
    "3.3 110 77 11.1; 5.9 238 72 15.8; 15.4 335 80 31.9; 17.4 211 60 25.8; 5.3 46 83 20.2; 2.6 120 54 14.2;"
    "10.4 249 83 24; 7.2 113 65 21; 2.2 56 57 11.3; 6 115 66 18; 9.7 109 52 16.3; 15.4 249 66 22.2; 2.1 83 51 7.8;"
    "11.3 300 67 27.8; 4.4 149 85 16.3; 12.1 255 74 35.1; 2.7 72 66 14.9; 16.1 259 44 17.1; 9 178 70 28.2;"
    "6 109 53 16.4; 4.3 102 62 16.5; 12.2 252 81 46; 2.1 57 56 9.5; 7.4 159 89 18.8; 11.4 285 70 32.1;"
    "11.1 254 86 26.1; 13 337 45 16.1; 0.8 45 44 7.3; 7.3 120 75 21.4; 6.6 151 68 20; 4.9 159 67 29.3;"
    "6.3 106 72 14.9; 3.4 174 87 8.3; 14.4 279 48 22.5; 3.8 86 45 12.8; 13.2 188 59 26.9; 12.7 201 80 25.5;"
    "3.2 120 80 22.9; 2.2 48 32 11.2; 8.5 156 63 20.7; 4 145 73 26.2; 5.7 81 39 9.3; 2.6 53 66 10.8;"
    "6.8 161 60 15.6"
)
ARRESTS = np.loadtxt(ARRESTS_TEXT.split(";"))


def test_arrests_example_gives_the_published_scaled_components() -> None:
    factors = pca(ARRESTS, scale="unit")
    np.testing.assert_allclose(np.asarray(factors.column_mean[:]), [7.788, 170.76, 65.54, 21.232], rtol=1e-14)
    spread = np.asarray(factors.column_scale[:]) ** 2
    np.testing.assert_allclose(spread, [18.97047, 6945.16571, 209.51878, 87.72916], atol=5.1e-6, rtol=0)
    deviations = np.sqrt(variances(factors))
    np.testing.assert_allclose(deviations, [1.5748783, 0.9948694, 0.5971291, 0.4164494], atol=5.1e-8, rtol=0)
    share = deviations**2 / (deviations**2).sum()
    np.testing.assert_allclose(share, [0.62006039, 0.24744129, 0.08914080, 0.04335752], atol=5.1e-9, rtol=0)
    printed = np.array(
        [
            [-0.5358995, -0.5831836, -0.2781909, -0.5434321],
            [0.4181809, 0.1879856, -0.8728062, -0.1673186],
            [-0.3412327, -0.2681484, -0.3780158, 0.8177779],
            [0.6492278, -0.7434075, 0.1338777, 0.0890243],
        ]
    ).T
    assert_same_up_to_sign(factors.right_vectors[:], printed, atol=5.1e-8)
    alabama = np.abs(np.asarray(factors.scores()[:])[0])
    np.testing.assert_allclose(alabama, [0.9756604, 1.1220012, 0.4398037, 0.1546966], atol=5.1e-8, rtol=0)


def test_arrests_example_without_scaling_is_led_by_the_largest_variance() -> None:
    found = variances(pca(ARRESTS))
    np.testing.assert_allclose(found, [7011.114851, 201.992366, 42.112651, 6.164246], atol=5.1e-7, rtol=0)


def test_iris_gives_the_published_variances() -> None:
    # Fisher, Annals of Eugenics 7 (1936); data from scikit-learn. Variances as printed in the PCA page of Maple's help.
    from sklearn.datasets import load_iris

    iris = load_iris().data
    factors = pca(iris)
    found = variances(factors)
    np.testing.assert_allclose(found, [4.2282, 0.2427, 0.0782, 0.0238], atol=5.1e-5, rtol=0)
    np.testing.assert_allclose(np.sqrt(found), [2.0563, 0.4926, 0.2797, 0.1544], atol=5.1e-5, rtol=0)
    assert found[0] / found.sum() == pytest.approx(0.9246, abs=5e-5)
    first = np.array([[0.36138659], [-0.08452251], [0.85667061], [0.3582892]])  # recomputed from the data
    assert_same_up_to_sign(factors.right_vectors[:, :1], first, atol=5.1e-9)
    scaled = variances(pca(iris, scale="unit"))
    exact = [2.918497816532, 0.914030471468, 0.146756875571, 0.020714836429]  # recomputed from the data
    np.testing.assert_allclose(scaled, exact, atol=1e-11, rtol=0)


# ------------------------------------------------------------------------------- matrices with known singular values
N = 37
J = np.arange(1, N + 1)


def band(*diagonals: tuple[int, float], size: int = N) -> np.ndarray:
    return sum((value * np.eye(size, k=place) for place, value in diagonals), np.zeros((size, size)))


def first_difference() -> np.ndarray:
    """(N + 1) × N: row i holds x_i − x_{i−1}, zero beyond both ends."""
    return np.eye(N + 1, N) - np.eye(N + 1, N, k=-1)


def path_laplacian() -> np.ndarray:
    steps = np.diff(np.eye(N), axis=0)
    return steps.T @ steps


def circulant(first_column: np.ndarray) -> np.ndarray:
    size = len(first_column)
    return first_column[(np.arange(size)[:, None] - np.arange(size)) % size]


def complex_column() -> np.ndarray:
    random = np.random.default_rng(71)
    return random.standard_normal(N) + 1j * random.standard_normal(N)


def kahan(size: int, theta: float) -> np.ndarray:
    sine, cosine = np.sin(theta), np.cos(theta)
    return np.diag(sine ** np.arange(size)) @ (np.eye(size) - cosine * np.triu(np.ones((size, size)), 1))


def rank_one_update() -> tuple[np.ndarray, np.ndarray]:
    """I + uvᴴ: all ones but two values, the roots of x² − tx + d (squared values)."""
    random = np.random.default_rng(73)
    u, v = random.standard_normal((2, N)) + 1j * random.standard_normal((2, N))
    inner = np.vdot(v, u)
    t = 2 + 2 * inner.real + np.linalg.norm(u) ** 2 * np.linalg.norm(v) ** 2
    d = abs(1 + inner) ** 2
    large = (t + np.sqrt(t * t - 4 * d)) / 2
    return np.eye(N) + np.outer(u, v.conj()), np.sqrt([large, d / large, *np.ones(N - 2)])


def laplacian_2d(p: int = 6, q: int = 7) -> tuple[np.ndarray, np.ndarray]:
    lines = [band((0, 2), (1, -1), (-1, -1), size=size) for size in (p, q)]
    parts = [4 * np.sin(np.arange(1, size + 1) * np.pi / (2 * (size + 1))) ** 2 for size in (p, q)]
    matrix = np.kron(lines[0], np.eye(q)) + np.kron(np.eye(p), lines[1])
    return matrix, np.add.outer(*parts).ravel()


def kac(size: int = 21) -> tuple[np.ndarray, np.ndarray]:
    """Symmetrised Kac matrix: eigenvalues ±(n − 1), ±(n − 3), … to the last bit."""
    i = np.arange(1, size)
    side = np.sqrt(i * (size - i))
    return np.diag(side, 1) + np.diag(side, -1), np.abs(np.arange(size) * 2.0 - (size - 1))


def kronecker() -> tuple[np.ndarray, np.ndarray]:
    parts = [band((0, 1), (1, -1), size=size) for size in (5, 7)]
    values = [2 * np.cos(np.arange(1, size + 1) * np.pi / (2 * size + 1)) for size in (5, 7)]
    return np.kron(*parts), np.multiply.outer(*values).ravel()


def hadamard() -> np.ndarray:
    matrix = np.ones((1, 1))
    for _ in range(5):
        matrix = np.block([[matrix, matrix], [matrix, -matrix]])
    return matrix


# Wilkinson, The Algebraic Eigenvalue Problem (1965), p. 309; absolute eigenvalues recomputed with 60 digits.
WILKINSON = [
    *(10.7461941829033934, 10.7461941829033218, 9.21067864736133211, 9.21067864730491859, 8.03894112282902324),
    *(8.03894111581427331, 7.00395220952867567, 7.00395179861637497, 6.00023403158416702, 6.00021752225709814),
    *(5.00024442500191301, 4.99978247774290186, 4.00435402344085674, 3.99604820138362503, 3.04309929257882374),
    *(2.96105888418572669, 2.13020921936250599, 1.78932135269508141, 1.12544152211998422, 0.947534367529293279),
    0.253805817096678168,
]
# Hilbert matrix of order 10, recomputed with 60 digits; cf. Fettis & Caslin, Math. Comp. 21 (1967). The stored entries
# are rounded, so the small ones agree to ε of the first only.
HILBERT = [
    *(1.7519196702651775, 0.34292954848350910, 0.035741816271639236, 0.0025308907686700381, 1.2874961427637708e-4),
    *(4.7296892931823475e-6, 1.2289677387511750e-7, 2.1474388173504786e-9, 2.2667467477629255e-11),
    1.0931538193796658e-13,
]
CLOSED_FORMS: dict[str, Callable[[], tuple[np.ndarray, Any]]] = {
    "second difference": lambda: (band((0, 2), (1, -1), (-1, -1)), 4 * np.sin(J * np.pi / (2 * (N + 1))) ** 2),
    "first difference": lambda: (first_difference(), 2 * np.sin(J * np.pi / (2 * (N + 1)))),
    "first difference, wide": lambda: (first_difference().T, 2 * np.sin(J * np.pi / (2 * (N + 1)))),
    "bidiagonal": lambda: (band((0, 1), (1, -1)), 2 * np.cos(J * np.pi / (2 * N + 1))),
    "running sum": lambda: (np.tri(N), 1 / (2 * np.sin((2 * J - 1) * np.pi / (4 * N + 2)))),
    "min(i, j)": lambda: (np.minimum.outer(J, J), 1 / (4 * np.sin((2 * J - 1) * np.pi / (4 * N + 2)) ** 2)),
    "path": lambda: (path_laplacian(), 4 * np.sin((J - 1) * np.pi / (2 * N)) ** 2),
    "cycle": lambda: (circulant(np.r_[2.0, -1, np.zeros(N - 3), -1]), 4 * np.sin(np.pi * J / N) ** 2),
    "Toeplitz": lambda: (band((0, 1), (1, 3), (-1, 3)), np.abs(1 + 6 * np.cos(J * np.pi / (N + 1)))),
    "circulant, complex": lambda: (circulant(complex_column()), np.abs(np.fft.fft(complex_column()))),
    "Fourier": lambda: (np.fft.fft(np.eye(N)), np.full(N, np.sqrt(N))),
    "Hadamard": lambda: (hadamard(), np.full(32, np.sqrt(32))),
    "equicorrelation": lambda: (0.7 * np.eye(N) + 0.3, np.r_[0.7 + 0.3 * N, np.full(N - 1, 0.7)]),
    "identity plus rank one, complex": rank_one_update,
    "grid": laplacian_2d,
    "Kac": kac,
    "Kronecker": kronecker,
    "Wilkinson": lambda: (np.diag(np.abs(np.arange(-10.0, 11))) + band((1, 1), (-1, 1), size=21), WILKINSON),
    "Hilbert": lambda: (1 / (np.add.outer(np.arange(10), np.arange(10)) + 1.0), HILBERT),
}


@pytest.mark.parametrize("route", ["direct", "gram", "tsqr", "krylov"])
@pytest.mark.parametrize("name", CLOSED_FORMS)
def test_closed_forms_are_met(name: str, route: str) -> None:
    matrix, values = CLOSED_FORMS[name]()
    exact = np.sort(np.asarray(values, float))[::-1]
    factors = pca(matrix, center="none", route=route, axis="rows", panel_lines=2)
    found, count = np.asarray(factors.singular_values[:]), len(exact)
    rounding = 8 * count * EPS * exact[0]
    allowed = np.full(count, rounding)
    if route == "gram":  # math: |σ̂ − σ| ≤ ‖E‖/(σ̂ + σ) with ‖E‖ ≤ γ‖A‖²_F; the root of it where σ is lost
        squared = 8 * count * EPS * (exact**2).sum()
        allowed = squared / np.maximum(exact, np.sqrt(squared))
    clear = ~np.asarray(factors.certificate.null)  # a null one is 0 by rule; its interval is checked below
    assert (np.abs(found - exact) <= allowed)[clear].all(), np.abs(found - exact) / allowed
    table.assert_intervals_hold(factors.certificate, exact, rounding)
    table.assert_angles_hold(factors, table.truth_of(matrix))


@pytest.mark.parametrize("name", ["first difference", "running sum", "circulant, complex", "grid", "Kac", "Fourier"])
def test_closed_forms_lie_in_the_intervals_of_a_few_components(name: str) -> None:
    matrix, values = CLOSED_FORMS[name]()
    exact = np.sort(np.asarray(values, float))[::-1]
    factors = pca(matrix, center="none", route="krylov", rank=4, axis="rows", panel_lines=2)
    table.assert_intervals_hold(factors.certificate, exact, 8 * len(exact) * EPS * exact[0])


def test_first_difference_has_sines_and_cosines_for_vectors() -> None:
    # Strang, The discrete cosine transform, SIAM Review 41 (1999): sines on the right, shifted cosines on the left.
    factors = pca(first_difference(), center="none")
    order = J[::-1]
    right = np.sqrt(2 / (N + 1)) * np.sin(np.outer(J, order) * np.pi / (N + 1))
    left = np.sqrt(2 / (N + 1)) * np.cos(np.outer(np.arange(N + 1) + 0.5, order) * np.pi / (N + 1))
    gap = np.diff(2 * np.sin(J * np.pi / (2 * (N + 1)))).min()
    atol = 16 * N * EPS * 2 / gap
    assert_same_up_to_sign(factors.right_vectors[:], right, atol)
    signs = np.sign((np.asarray(factors.right_vectors[:]) * right).sum(axis=0))
    np.testing.assert_allclose(np.asarray(factors.left_vectors[:]) * signs, left, rtol=0, atol=atol)


def test_kahan_matrix_has_its_norm_and_its_known_second_smallest_value() -> None:
    # Kahan, Canad. Math. Bull. 9 (1966): ‖A‖²_F = n, and σ_{n−1} = s^{n−2}·√(1 + c)
    size, theta = 20, 1.2
    factors = pca(kahan(size, theta), center="none")
    values = np.asarray(factors.singular_values[:])
    assert factors.certificate.total_energy == pytest.approx(size, rel=size * EPS)
    exact = np.sin(theta) ** (size - 2) * np.sqrt(1 + np.cos(theta))
    assert exact == pytest.approx(0.3288212223, abs=5e-11)
    assert values[-2] == pytest.approx(exact, abs=8 * size * EPS * values[0])


def test_a_complex_matrix_written_as_real_blocks_has_every_value_twice() -> None:
    matrix = circulant(complex_column())
    doubled = np.block([[matrix.real, -matrix.imag], [matrix.imag, matrix.real]])
    once, twice = (np.asarray(pca(part, center="none").singular_values[:]) for part in (matrix, doubled))
    np.testing.assert_allclose(twice, np.repeat(once, 2), rtol=0, atol=16 * N * EPS * once[0])


# -------------------------------------------------------------------------------------------------- reference library
DATA_SETS = ("digits", "breast_cancer", "wine", "diabetes")


def data_set(name: str) -> np.ndarray:
    """One of the data sets that come with scikit-learn."""
    import sklearn.datasets

    return np.asarray(getattr(sklearn.datasets, f"load_{name}")().data)


@pytest.mark.parametrize("route", ["direct", "gram", "tsqr", "krylov"])
@pytest.mark.parametrize("name", DATA_SETS)
def test_full_solver_pca_of_scikit_learn_agrees(name: str, route: str) -> None:
    from sklearn.decomposition import PCA

    matrix = data_set(name)
    k = min(10, matrix.shape[1])
    reference = PCA(svd_solver="full").fit(matrix)
    factors = pca(matrix, rank=k, route=route, axis="rows", panel_lines=-(-len(matrix) // 12), tolerance=1e-6)
    found, total = variances(factors), reference.explained_variance_.sum()
    # the certified width where it is wider than rounding; breast_cancer spans 1e-12 in variance
    width = np.asarray(factors.certificate.upper) ** 2 - np.asarray(factors.certificate.lower) ** 2
    allowed = width / (len(matrix) - 1) + len(matrix) * EPS * total
    assert (np.abs(found - reference.explained_variance_[:k]) <= allowed).all()
    np.testing.assert_allclose(found, reference.explained_variance_[:k], rtol=1e-6, atol=len(matrix) * EPS * total)
    np.testing.assert_allclose(
        found / total, reference.explained_variance_ratio_[:k], rtol=1e-6, atol=len(matrix) * EPS
    )
    np.testing.assert_allclose(np.asarray(factors.column_mean[:]), reference.mean_, rtol=1e-13, atol=1e-15)
    table.assert_factors_true(factors, table.truth_of(matrix, CENTRED))


@pytest.mark.parametrize("name", DATA_SETS)
def test_components_agree_with_scikit_learn_up_to_sign(name: str) -> None:
    from sklearn.decomposition import PCA

    matrix = data_set(name)
    reference = PCA(svd_solver="full").fit(matrix)
    values = reference.singular_values_
    k = min(10, len(values))
    vectors = np.asarray(pca(matrix, rank=k).right_vectors[:])
    for i in range(k):
        gap = table.gap_of(values, i, i, zero_outside=False)
        angle = table.largest_angle(vectors[:, i : i + 1], reference.components_[i : i + 1].T)
        assert angle <= 4 * max(matrix.shape) * EPS * values[0] / gap, f"component {i}"


# ---------------------------------------------------------------------------------------------------- common practice
@pytest.mark.parametrize("scale", ["none", "unit"])
def test_right_vectors_are_eigenvectors_of_the_covariance(scale: str) -> None:
    # Common practice: the SVD of centred data and the eigenvectors of its covariance (correlation) are the same PCA.
    matrix = data_set("wine")
    second_moment = np.cov(matrix.T) if scale == "none" else np.corrcoef(matrix.T)
    factors = pca(matrix, scale=scale)
    vectors, lambdas = np.asarray(factors.right_vectors[:]), variances(factors)
    rounding = 8 * len(matrix) * EPS * lambdas[0]
    assert np.abs(second_moment @ vectors - vectors * lambdas).max() <= rounding
    np.testing.assert_allclose(lambdas, np.linalg.eigvalsh(second_moment)[::-1], rtol=0, atol=rounding)


def test_scores_are_left_vectors_times_values_and_the_data_times_right_vectors() -> None:
    # Common practice: scores = U·Σ = X·V with X centred and scaled.
    matrix = data_set("wine")
    factors = pca(matrix, scale="unit", rank=5)
    scores = np.asarray(factors.scores()[:])
    prepared = (matrix - matrix.mean(axis=0)) / matrix.std(axis=0, ddof=1)
    rounding = 8 * len(matrix) * EPS * float(factors.singular_values[0])
    product = np.asarray(factors.left_vectors[:]) * np.asarray(factors.singular_values[:])
    np.testing.assert_allclose(scores, product, rtol=4 * EPS, atol=0)
    np.testing.assert_allclose(scores, prepared @ np.asarray(factors.right_vectors[:]), rtol=0, atol=rounding)
    # the scores of a component have variance σ²/(n − 1) and are uncorrelated
    np.testing.assert_allclose(np.cov(scores.T), np.diag(variances(factors)), rtol=0, atol=rounding)


def test_all_components_rebuild_the_data_in_its_own_units() -> None:
    matrix = data_set("wine")
    factors = pca(matrix, scale="unit")
    rebuilt = np.asarray(factors.rebuild(slice(3, 9)))
    np.testing.assert_allclose(rebuilt, matrix[3:9], rtol=0, atol=64 * len(matrix) * EPS * matrix.std(axis=0).max())


def test_cumulative_share_crosses_the_95_per_cent_line_where_variance_says() -> None:
    # Common practice: keep the components up to 95 % of the variance (a scree plot's dashed line).
    matrix = data_set("digits")
    share = np.cumsum(variances(pca(matrix))) / matrix.var(axis=0, ddof=1).sum()
    kept = int(np.searchsorted(share, 0.95)) + 1
    factors = bigsvd.decompose(matrix, variance=0.95, memory=CEILING)
    assert factors.certificate.rank == kept
    assert share[kept - 2] < 0.95 <= factors.certificate.captured_share


def test_total_variance_is_the_sum_of_the_features_variances() -> None:
    matrix = data_set("breast_cancer")
    factors = pca(matrix, rank=3)
    total = matrix.var(axis=0, ddof=1).sum() * (len(matrix) - 1)
    assert factors.certificate.total_energy == pytest.approx(total, rel=len(matrix) * EPS)


# ------------------------------------------------------------------------------------ real matrices beside the checkout
# Values recomputed by others with LAPACK in double, in references.json beside the matrices.
REAL = ("gasoline_60x401", "golub_3051x38", "metabolite_complete_154x52", "nutrimouse_gene_40x120")
REAL += ("climate_A1B_240x1813", "nib_functional_1071x20")
STATED = {PLAIN: "sv_raw", CENTRED: "sv_centered", SCALED: "sv_scaled_ddof1_nonconst"}


@pytest.mark.parametrize("preparation", STATED, ids=["plain", "centred", "scaled"])
@pytest.mark.parametrize("name", REAL)
def test_real_matrices_have_the_stated_values(name: str, preparation: table.Preparation, shared_data: Path) -> None:
    matrix = np.load(shared_data / "matrices" / f"{name}.npy")
    facts = json.loads((shared_data / "matrices" / "references.json").read_text())[name]
    stated = np.array(facts[STATED[preparation]])
    center, scale = preparation
    rank = min(20, len(stated))
    truth = table.truth_of(matrix, preparation)
    for route in ("direct", "krylov"):
        factors = bigsvd.decompose(matrix, rank=rank, center=center, scale=scale, route=route, memory=CEILING)
        table.assert_factors_true(factors, truth)
        proved = np.asarray(factors.certificate.index_proved)
        lower, upper = np.asarray(factors.certificate.lower), np.asarray(factors.certificate.upper)
        inside = (lower - truth.slack <= stated[:rank]) & (stated[:rank] <= upper + truth.slack)
        assert inside[proved].all()
        if route == "direct":
            assert proved.all()
            np.testing.assert_allclose(factors.singular_values[:], stated[:rank], rtol=0, atol=truth.slack)


def test_real_matrix_with_missing_values_is_refused_with_their_number(shared_data: Path) -> None:
    matrix = np.load(shared_data / "matrices" / "metabolite_NA_154x52.npy")
    with pytest.raises(NonFiniteError, match="419"):
        bigsvd.decompose(matrix, rank=3, memory=CEILING)

"""Rounding terms against the errors they bound: sums in single, with u = 2⁻²⁴ in the terms, beside those in double."""

from __future__ import annotations

import numpy as np
import pytest

from bigsvd.certify import (
    SumDepth,
    fold_rounding,
    gamma,
    gram_rounding,
    measured_rounding,
    product_rounding,
    rounding,
    tall_rounding,
    triangle_rounding,
)

LINES, ACROSS, WIDTH, UNIT = 640, 90, 7, 64


@pytest.fixture
def single_roundoff(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let the terms speak of single precision, so that double serves as the exact result."""
    monkeypatch.setattr(rounding, "UNIT_ROUNDOFF", 2.0**-24)


def sample(seed: int, *, imaginary: bool) -> tuple[np.ndarray, np.ndarray]:
    """A matrix of widely varied rows and orthonormal columns, exactly representable in single."""
    random = np.random.default_rng(seed)
    matrix = random.standard_normal((LINES, ACROSS)) * 10 ** random.uniform(-2, 2, (LINES, 1))
    block = np.linalg.qr(random.standard_normal((ACROSS, WIDTH)))[0]
    if imaginary:
        matrix = matrix * np.exp(1j * random.uniform(0, 6, matrix.shape))
        block = block * np.exp(1j * random.uniform(0, 6, (ACROSS, 1)))
    kind = np.complex64 if imaginary else np.float32
    return matrix.astype(kind), block.astype(kind)


def depth(columns: int, *, imaginary: bool) -> SumDepth:
    units = LINES // UNIT
    return SumDepth(ACROSS, UNIT, units, UNIT, columns, 0, units, imaginary)


def folded(blocks: list[np.ndarray]) -> np.ndarray:
    """Fold block by block, in the precision of the blocks."""
    triangle = np.zeros((0, blocks[0].shape[1]), blocks[0].dtype)
    for block in blocks:
        triangle = np.linalg.qr(np.concatenate([triangle, block]), mode="r")
    return triangle


def units_of(matrix: np.ndarray) -> list[np.ndarray]:
    return [matrix[start : start + UNIT] for start in range(0, LINES, UNIT)]


def exact(matrix: np.ndarray) -> np.ndarray:
    return matrix.astype(np.complex128 if matrix.dtype.kind == "c" else np.float64)


@pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("seed", range(5))
@pytest.mark.usefixtures("single_roundoff")
def test_tall_rounding_covers_the_singular_values_of_r(seed: int, imaginary: bool) -> None:
    matrix, block = sample(seed, imaginary=imaginary)
    found = np.linalg.svd(exact(folded([unit @ block for unit in units_of(matrix)])), compute_uv=False)
    true = np.linalg.svd(exact(matrix) @ exact(block), compute_uv=False)
    norm = float(np.linalg.norm(exact(matrix)))
    nested = depth(WIDTH, imaginary=imaginary)
    bound = tall_rounding(nested, norm, WIDTH) + triangle_rounding(nested, norm)
    error = np.abs(found - true).max()
    assert 0 < error <= bound
    assert bound < np.inf


@pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("seed", range(5))
@pytest.mark.usefixtures("single_roundoff")
def test_product_rounding_covers_every_column_of_z(seed: int, imaginary: bool) -> None:
    matrix, block = sample(seed, imaginary=imaginary)
    found = np.zeros((ACROSS, WIDTH), matrix.dtype)
    for unit in units_of(matrix):
        found += unit.conj().T @ (unit @ block)
    tall = exact(matrix) @ exact(block)
    error = np.linalg.norm(exact(found) - exact(matrix).conj().T @ tall, axis=0)
    norm = float(np.linalg.norm(exact(matrix)))
    bound = product_rounding(depth(WIDTH, imaginary=imaginary), norm, np.linalg.norm(tall, axis=0))
    assert np.all(error > 0)
    assert np.all(error <= bound)


@pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])
@pytest.mark.usefixtures("single_roundoff")
def test_fold_and_gram_rounding_cover_the_whole_spectrum(imaginary: bool) -> None:
    matrix, _ = sample(11, imaginary=imaginary)
    norm = float(np.linalg.norm(exact(matrix)))
    true = np.linalg.svd(exact(matrix), compute_uv=False)
    found = np.linalg.svd(exact(folded(units_of(matrix))), compute_uv=False)
    assert 0 < np.abs(found - true).max() <= fold_rounding(depth(ACROSS, imaginary=imaginary), norm)
    gram = np.zeros((ACROSS, ACROSS), matrix.dtype)
    for unit in units_of(matrix):
        gram += unit.conj().T @ unit
    error = np.linalg.norm(exact(gram) - exact(matrix).conj().T @ exact(matrix), 2)
    assert 0 < error <= gram_rounding(depth(ACROSS, imaginary=imaginary), norm)


def test_gamma_is_highams_constant() -> None:
    # Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed. (2002), lemma 3.1: γ_n = nu/(1 − nu).
    u = 2.0**-53
    assert gamma(1000) == 1000 * u / (1 - 1000 * u)
    assert gamma(1000, complex_entries=True) == pytest.approx(np.sqrt(2) * 2000 * u, rel=1e-9)


@pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("offset", [0.0, 30.0])
def test_measured_rounding_covers_the_errors_of_single_precision(offset: float, imaginary: bool) -> None:
    covered = []
    for seed in range(8):
        matrix, block = sample(seed, imaginary=imaginary)
        matrix = (matrix + offset).astype(matrix.dtype)
        blocks = units_of(matrix)
        tall_error = np.zeros(WIDTH)
        product_error = np.zeros((ACROSS, WIDTH), exact(matrix).dtype)
        each = []
        for unit in blocks:
            narrow, wide = unit @ block, exact(unit) @ exact(block)
            difference = unit.conj().T @ narrow - exact(unit).conj().T @ wide
            each.append((np.sum(np.abs(narrow - wide) ** 2, axis=0), np.sum(np.abs(difference) ** 2, axis=0)))
            tall_error += each[-1][0]
            product_error += difference
        chosen = [each[i] for i in np.random.default_rng(seed).choice(len(each), 5, replace=False)]
        sums = np.array([[len(chosen)] * WIDTH, sum(a for a, _ in chosen), sum(b for _, b in chosen)])
        tall, product = measured_rounding(sums, len(blocks))
        covered.append(np.sqrt(tall_error.sum()) <= tall and np.all(np.linalg.norm(product_error, axis=0) <= product))
    assert all(covered)


def test_measured_rounding_covers_units_that_all_err_alike() -> None:
    # 400 units whose errors point the same way add up to 400, not to √400.
    sums = np.array([[8.0, 8.0], [8.0, 8.0], [8.0, 32.0]])
    tall, product = measured_rounding(sums, 400)
    assert tall == pytest.approx(10 * np.sqrt(16.0 * 400 / 8))
    np.testing.assert_allclose(product, [400.0, 800.0])


def test_no_sample_measures_nothing() -> None:
    tall, product = measured_rounding(np.zeros((3, 4)), 100)
    assert tall == np.inf
    assert np.all(product == np.inf)

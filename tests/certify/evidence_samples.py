"""Evidence built exactly from small dense matrices of known singular vectors, and the truth it speaks of."""

from __future__ import annotations

import zlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from table import orthonormal

from bigsvd.certify import Evidence

EPS = float(np.finfo(float).eps)


def _clusters(n: int) -> np.ndarray:
    return (0.6 ** (np.arange(n) // 3)) * (1 - 1e-7 * (np.arange(n) % 3))


SPECTRA: dict[str, Callable[[int], np.ndarray]] = {
    "exponential": lambda n: 0.7 ** np.arange(n),
    "harmonic": lambda n: 1 / np.arange(1, n + 1),
    "root_harmonic": lambda n: np.arange(1, n + 1) ** -0.5,
    "clustered": _clusters,
    "repeated": lambda n: np.repeat([5.0, 3.0, 2.0, 1.0, 0.5], [3, 4, 2, 1, n])[:n],
    "spikes_over_flat": lambda n: np.r_[[4.0, 3.0, 2.5, 1.4], np.ones(n)][:n],
    "rank_deficient": lambda n: np.r_[[3.0, 2.0, 1.0, 0.5], np.zeros(n)][:n],
    "flat": lambda n: np.ones(n),
}
BASES = ("random", "krylov", "ritz", "near", "blind", "blended")


@dataclass(frozen=True, eq=False)
class Case:
    """A matrix with its true factors, a basis, and the Ritz vectors on it."""

    name: str
    matrix: np.ndarray
    values: np.ndarray
    left: np.ndarray
    right: np.ndarray
    ritz_left: np.ndarray
    ritz_right: np.ndarray
    evidence: Evidence

    @property
    def width(self) -> int:
        return len(self.evidence.theta)

    def value(self, index: int) -> float:
        """σ_{index+1}, zero beyond the last."""
        return float(self.values[index]) if index < len(self.values) else 0.0


def cases(repeats: int = 3, *, disturbed: bool = False) -> Iterator[Case]:
    """Every spectrum on every kind of basis, real and complex, tall and wide."""
    for spectrum in SPECTRA:
        for kind in BASES:
            for imaginary in (False, True):
                for repeat in range(repeats):
                    yield make_case(spectrum, kind, repeat, imaginary=imaginary, disturbed=disturbed)


def make_case(spectrum: str, kind: str, repeat: int, *, imaginary: bool, disturbed: bool) -> Case:
    """One case; `disturbed` moves θ and S as far as the stated rounding allows, and states twice the missed norm."""
    name = f"{spectrum} {kind} {repeat} {'complex' if imaginary else 'real'}"
    seed = zlib.crc32(name.encode())
    random = np.random.default_rng(seed)
    lines, across = [(40, 24), (24, 36), (30, 30)][repeat % 3]
    least = min(lines, across)
    values = SPECTRA[spectrum](least)
    left = orthonormal(seed, lines, least, imaginary=imaginary)
    right = orthonormal(seed + 1, across, across, imaginary=imaginary)
    matrix = (left * values) @ right[:, :least].conj().T
    width = int(random.integers(4, 18))
    basis = _basis(kind, matrix, right, width, random)
    evidence, ritz_left, ritz_right = exact_evidence(matrix, basis)
    if disturbed:
        evidence = _disturb(evidence, matrix, ritz_right, random)
    return Case(name, matrix, values, left, right[:, :least], ritz_left, ritz_right, evidence)


def gaussian(random: np.random.Generator, rows: int, columns: int, like: np.ndarray) -> np.ndarray:
    """Gaussian entries, complex where `like` is."""
    block = random.standard_normal((rows, columns))
    return block + 1j * random.standard_normal(block.shape) if np.iscomplexobj(like) else block


def _basis(kind: str, matrix: np.ndarray, right: np.ndarray, width: int, random: np.random.Generator) -> np.ndarray:
    """Orthonormal columns of one kind."""
    across = matrix.shape[1]
    normal = matrix.conj().T @ matrix
    start = gaussian(random, across, width, matrix)
    if kind == "random":
        return np.linalg.qr(start)[0]
    if kind == "krylov":
        block = start[:, : max(1, width // 2)]
        return np.linalg.qr(np.hstack([block, normal @ block]))[0]
    if kind == "ritz":
        wide = np.linalg.qr(np.hstack([start, normal @ start])[:, : min(across, 2 * width)])[0]
        turned = np.linalg.svd(matrix @ wide, full_matrices=False)[2].conj().T
        return np.linalg.qr(wide @ turned[:, :width])[0]
    if kind == "near":
        return np.linalg.qr(right[:, :width] + 10.0 ** -random.integers(1, 9) * start)[0]
    if kind == "blind":  # leading directions are wholly absent: residuals of zero, and the order is wrong
        skipped = int(random.integers(1, 4))
        return right[:, skipped : skipped + width]
    skipped = int(random.integers(1, 4))
    mixed = right[:, skipped : skipped + width] + 0.05 * right[:, :1]
    return np.linalg.qr(mixed)[0]


def exact_evidence(matrix: np.ndarray, basis: np.ndarray) -> tuple[Evidence, np.ndarray, np.ndarray]:
    """Evidence in double, the Ritz vectors on both sides; rounding terms are those of dense products of this size."""
    top = float(np.linalg.norm(matrix, 2))
    width = basis.shape[1]
    left, theta, turned = np.linalg.svd(matrix @ basis, full_matrices=False)
    if len(theta) < width:
        turned = np.linalg.svd(matrix @ basis, full_matrices=True)[2]
        theta = np.r_[theta, np.zeros(width - len(theta))]
    ritz = basis @ turned.conj().T
    residual = matrix.conj().T @ (matrix @ ritz) - ritz * theta**2
    missed = float(np.linalg.norm(matrix - (matrix @ ritz) @ ritz.conj().T, 2))
    evidence = Evidence(
        theta=theta,
        residual_gram=residual.conj().T @ residual,
        value_rounding=100 * EPS * top,
        product_rounding=np.full(width, 100 * EPS * top**2),
        rounding_how="proved",
        missed=missed + 100 * EPS * top,
        missed_how="computed",
        failure_probability=0.0,
        energy=float(np.linalg.norm(matrix) ** 2),
    )
    return evidence, left, ritz


def _disturb(evidence: Evidence, matrix: np.ndarray, ritz: np.ndarray, random: np.random.Generator) -> Evidence:
    """Move θ and S to the ends of what the rounding terms allow."""
    top = float(np.linalg.norm(matrix, 2))
    size = 10.0 ** -float(random.integers(3, 9))
    theta = evidence.theta + size * top * random.choice([-1.0, 1.0], len(evidence.theta))
    residual = matrix.conj().T @ (matrix @ ritz) - ritz * evidence.theta**2
    noise = gaussian(random, *residual.shape, residual)
    residual = residual + size * top**2 * noise / np.linalg.norm(noise, axis=0)
    return Evidence(
        theta=np.sort(np.maximum(theta, 0))[::-1],
        residual_gram=residual.conj().T @ residual,
        value_rounding=(size + 100 * EPS) * top,
        product_rounding=np.full(len(theta), (size + 100 * EPS) * top**2),
        rounding_how="proved",
        missed=2 * evidence.missed,
        missed_how="doubled",
        failure_probability=0.0,
        energy=evidence.energy,
    )


def by_hand(theta: list[float], norms: list[float], missed: float, **parts: object) -> Evidence:
    """Evidence with orthogonal residuals of the given norms."""
    values = np.array(theta, float)
    facts: dict[str, object] = {
        "theta": values,
        "residual_gram": np.diag(np.array(norms, float) ** 2),
        "value_rounding": 1e-13,
        "product_rounding": np.full(len(values), 1e-13),
        "rounding_how": "proved",
        "missed": missed,
        "missed_how": "given",
        "failure_probability": 0.0,
        "energy": float(np.sum(values**2) + missed**2),
    }
    return Evidence(**(facts | parts))  # type: ignore[arg-type]

"""The tall vectors U = Y W Θ⁻¹, taken from scratch by ranges of lines and made orthonormal by CholeskyQR."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from bigsvd.plan import TALL_LINES
from bigsvd.randomness import gaussian_block
from bigsvd.solve.state import Ritz, State
from bigsvd.sweep import Scratch

STREAM_NULL = 8


class TallVectors:
    """Left vectors of the swept matrix, one column per component.

    Parameters
    ----------
    scratch : Scratch
    state : State
    ritz : Ritz
    null : ndarray of bool, shape (k,)
        Components of value zero; their vectors are completed from Gaussians, keyed by line.
    seed : int

    Notes
    -----
    Cost: each pass reads the scratch once. Method: Yamamoto, Nakatsukasa, Yanagisawa, Fukaya, ETNA 44 (2015); a second
    round is made where the first finds a defect above √ε.
    """

    def __init__(self, scratch: Scratch, state: State, ritz: Ritz, null: np.ndarray, seed: int) -> None:
        rank = len(null)
        self.scratch, self.seed, self.null = scratch, seed, null
        # Memory is planned for twice the basis; a run of many sweeps has stored more columns, and takes fewer lines.
        self.step = max(1, min(TALL_LINES, TALL_LINES * 2 * state.basis.shape[1] // max(1, scratch.stored)))
        self.complex = scratch.dtype.kind == "c"
        safe = np.where(null, 1.0, np.maximum(ritz.theta[:rank], np.finfo(float).tiny))
        self.coefficients = ritz.rotation[:, :rank] / safe
        self.mean_row = state.mean_row
        self.mixing = np.eye(rank, dtype=scratch.dtype)
        self.peak_lines = np.zeros(rank, int)
        self.phase = np.ones(rank, scratch.dtype)
        for _ in range(3):
            gram, self.peak_lines = self._inspect()
            defect = float(np.linalg.norm(gram - np.eye(rank)))
            self.mixing = self.mixing @ _inverse_root(gram)
            if defect < 1e-8:
                break

    def fix_phase(self) -> None:
        """Make the entry of largest modulus of every column real and positive."""
        # Entries of small components depend on how many lines are multiplied at once: by the blocks that are written.
        entries = np.zeros(len(self.peak_lines), self.scratch.dtype)
        for start in np.unique(self.peak_lines // self.step * self.step):
            block = self.rows(int(start), min(int(start) + self.step, self.scratch.lines))
            inside = np.flatnonzero(self.peak_lines // self.step * self.step == start)
            entries[inside] = block[self.peak_lines[inside] - start, inside]
        self.phase = _phases(entries)

    def rows(self, start: int, stop: int) -> np.ndarray:
        """Lines start … stop of U, shape (lines, k)."""
        tall = self.scratch.read(start, stop) @ self.scratch.map
        tall -= self.mean_row
        vectors = tall @ self.coefficients
        missing = int(self.null.sum())
        if missing:
            gauss = gaussian_block(
                self.seed, STREAM_NULL, stop - start, missing, first_row=start, complex_entries=self.complex
            )
            vectors[:, self.null] = gauss / np.sqrt(self.scratch.lines)
        return (vectors @ self.mixing) * self.phase

    def blocks(self) -> Iterator[tuple[int, np.ndarray]]:
        """Yield (first line, lines of U) over all lines."""
        for start in range(0, self.scratch.lines, self.step):
            yield start, self.rows(start, min(start + self.step, self.scratch.lines))

    def _inspect(self) -> tuple[np.ndarray, np.ndarray]:
        """UᴴU, and the line of the entry of largest modulus of every column."""
        rank = len(self.null)
        gram = np.zeros((rank, rank), self.scratch.dtype)
        peak, at = np.full(rank, -1.0), np.zeros(rank, int)
        for start, block in self.blocks():
            gram += block.conj().T @ block
            modulus = np.abs(block)
            best = modulus.argmax(axis=0)
            value = modulus[best, np.arange(rank)]
            better = value > peak
            peak[better], at[better] = value[better], start + best[better]
        return gram, at


def _inverse_root(gram: np.ndarray) -> np.ndarray:
    """C with (UC)ᴴ(UC) = I: the inverse of the Cholesky factor, or of the symmetric root where that fails."""
    try:
        lower = np.linalg.cholesky(gram)
        return np.linalg.inv(lower.conj().T)
    except np.linalg.LinAlgError:
        value, vector = np.linalg.eigh(gram)
        return vector / np.sqrt(np.maximum(value, value[-1] * 1e-14))


def _phases(entries: np.ndarray) -> np.ndarray:
    """Factors that make entries real and positive."""
    modulus = np.abs(entries)
    return np.where(modulus > 0, entries.conj() / np.where(modulus > 0, modulus, 1.0), 1.0)


def column_phases(vectors: np.ndarray) -> np.ndarray:
    """Factors that make the entry of largest modulus of every column real and positive (ties: lowest index)."""
    at = np.abs(vectors).argmax(axis=0)
    return _phases(vectors[at, np.arange(vectors.shape[1])])

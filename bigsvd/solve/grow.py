"""Directions of the next sweep: residuals of leading Ritz vectors, test vectors carried on, fresh test vectors."""

from __future__ import annotations

import numpy as np

from bigsvd.randomness import gaussian_block
from bigsvd.solve.dense import orthonormalise
from bigsvd.solve.state import Chain, Ritz, State

# Residuals below this share of θ₁² are rounding; their directions would be noise.
NEGLIGIBLE = 1e-14
STREAM_START, STREAM_TEST = 16, 32


def start_block(directions: np.ndarray, state: State, tests: int, seed: int, sweep: int = 0) -> np.ndarray:
    """The first block: directions from a pilot (or Gaussian), then test vectors made orthogonal to them.

    Parameters
    ----------
    directions : ndarray, shape (across, start)
        Must not depend on the test vectors.
    state : State
        Empty; receives the first chain.
    tests : int
        Test vectors.
    seed, sweep : int
        Choose the stream of the test vectors.

    Returns
    -------
    ndarray, shape (across, start + tests)
        Orthonormal columns.
    """
    across = state.across
    start = min(directions.shape[1], across)
    first = orthonormalise(directions[:, :start].copy(), np.zeros((across, 0), state.basis.dtype))
    tests = min(tests, across - start)
    if not tests:
        return first
    chain = Chain(prefix=start, stream=STREAM_TEST + sweep, vectors=tests)
    state.chains.append(chain)
    return np.hstack([first, orthonormalise(test_vectors(chain, state, seed), first)])


def gaussian_directions(across: int, count: int, seed: int, dtype: np.dtype) -> np.ndarray:
    """Gaussian start directions, shape (across, count)."""
    return gaussian_block(seed, STREAM_START, across, count, complex_entries=dtype.kind == "c")


def test_vectors(chain: Chain, state: State, seed: int) -> np.ndarray:
    """The Gaussian block Ω of a chain, shape (across, vectors)."""
    return gaussian_block(
        seed, chain.stream, state.across, chain.vectors, complex_entries=state.basis.dtype.kind == "c"
    )


def grow_block(state: State, ritz: Ritz, *, count: int, tests: int, limit: int, seed: int, sweep: int) -> np.ndarray:
    """Directions of the next sweep, orthonormal and orthogonal to the basis.

    Parameters
    ----------
    state : State
        Its chains are extended by a fresh one whose P is everything but the fresh vectors.
    ritz : Ritz
        The present step.
    count : int
        Ritz vectors whose residuals join.
    tests : int
        Test vectors; none where the order is already proved and the basis was not restarted.
    limit : int
        Most columns of the basis.
    seed, sweep : int

    Returns
    -------
    ndarray, shape (across, b)
        With b = 0 when the basis already spans the whole space or nothing is left to add.
    """
    room = min(limit, state.across) - state.width
    norms = np.sqrt(np.clip(np.diag(ritz.residual_gram).real, 0, None))[:count]
    which = np.flatnonzero(norms > NEGLIGIBLE * max(ritz.theta[0], np.finfo(float).tiny) ** 2)[: max(0, room - tests)]
    parts = [state.residuals(ritz, which)]
    old = next((chain for chain in reversed(state.chains) if chain.power and chain.tau is not None), None)
    if tests and old is not None and old.tau is not None and len(which) + old.vectors + tests <= room:
        parts.append(old.tau)
    planned = sum(part.shape[1] for part in parts)
    block = orthonormalise(np.hstack(parts), state.used) if planned else np.zeros((state.across, 0), state.basis.dtype)
    fresh = min(tests, room - planned)
    if fresh <= 0:
        return block
    chain = Chain(prefix=state.width + planned, stream=STREAM_TEST + sweep, vectors=fresh)
    state.chains.append(chain)
    beside = np.hstack([state.used, block])
    return np.hstack([block, orthonormalise(test_vectors(chain, state, seed), beside)])


def carry_chains(
    state: State, energy: float, seed: int, column_scale: np.ndarray | None, *, measured: bool = False
) -> None:
    """Apply (I−P)AᴴA once more to every chain whose vectors lie in the basis.

    Parameters
    ----------
    state : State
        After the sweep that multiplied the block holding the vectors.
    energy : float
        ‖A‖²_F.
    seed : int
    column_scale : ndarray, shape (across,), or None
        Factors by which the first sweep's coordinates were changed (scaling learnt in it).
    measured : bool
        Rounding of the products was measured, and is independent from column to column.
    """
    for chain in state.chains:
        outside = state.basis[:, : chain.prefix]
        if chain.power == 0:
            omega = test_vectors(chain, state, seed)
            if column_scale is not None:
                omega *= column_scale[:, None]
                chain.shrink = float(column_scale.min())
            chain.tau = omega - outside @ (outside.conj().T @ omega)
            chain.log_norm = 0.0
        assert chain.tau is not None
        coefficients = state.used.conj().T @ chain.tau
        missing = float(np.linalg.norm(chain.tau - state.used @ coefficients, 2))
        if chain.power and missing > 1e-3:
            # The vectors did not join the basis (a newer chain took their room): the chain ends here.
            continue
        tau = state.used_products @ coefficients
        tau -= outside @ (outside.conj().T @ tau)
        captured = float(np.linalg.norm(state.triangle[:, : chain.prefix]) ** 2)
        left = max(0.0, energy - captured) + 1e-13 * energy
        # Each column of Z errs by its own bound; test vectors hardly touch the columns of large values.
        weights = np.abs(coefficients)
        if measured:
            rounding = float(np.linalg.norm(state.product_error[:, None] * weights))
        else:
            rounding = float(np.linalg.norm(state.product_error @ weights))
        lost = left * (chain.lost + missing) + rounding
        norm = float(np.linalg.norm(tau, 2))
        chain.power += 1
        chain.tau = tau / norm if norm > 0 else tau
        chain.lost = lost / norm if norm > 0 else 0.0
        chain.log_norm += float(np.log(max(norm, lost))) if max(norm, lost) > 0 else -np.inf
        if norm < lost:
            # Nothing but rounding is left: the bound rests on what may have been lost.
            chain.lost = 1.0

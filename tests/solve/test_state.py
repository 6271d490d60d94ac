"""The basis, its products and its triangle stay what they are through rounding, rescaling, restarts and growth."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from solve_samples import (
    add_columns,
    assert_consistent,
    dense_prepared,
    empty,
    orthonormal_block,
    samples,
)

from bigsvd.certify import ChainState, chain_bound
from bigsvd.prepare import Preparation
from bigsvd.randomness import gaussian_block
from bigsvd.solve import Ritz, State, carry_chains, grow_block, start_block
from bigsvd.solve.dense import orthonormalise, split, triangle_svd
from bigsvd.sweep import Scratch

both = pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])


def learnt_preparation(matrix: np.ndarray, *, scale: bool) -> Preparation:
    """The preparation of a sweep after the first: the true mean and deviations."""
    mean = matrix.mean(axis=0)
    spread = np.sqrt((np.abs(matrix - mean) ** 2).sum(axis=0) / (len(matrix) - 1))
    return Preparation(True, True, False).learnt(mean, 1 / spread if scale else None, matrix.dtype)


# ------------------------------------------------------------------------------------------------------------ absorb
@both
def test_exact_blocks_are_taken_as_they_are(imaginary: bool, tmp_path: Path) -> None:
    matrix = samples(90, 20, imaginary=imaginary)
    state, scratch = empty(tmp_path, matrix, 12)
    block = orthonormal_block(20, 8, imaginary=imaginary)
    later = learnt_preparation(matrix, scale=False)
    for columns in (block[:, :5], block[:, 5:]):
        add_columns(state, scratch, matrix, columns, later, centred=True, exact=True)
    np.testing.assert_array_equal(state.used, block)
    assert_consistent(state, scratch, dense_prepared(matrix, center=True, scale=False))
    scratch.close()


@both
def test_rounded_blocks_are_re_expressed_exactly(imaginary: bool, tmp_path: Path) -> None:
    matrix = samples(90, 20, imaginary=imaginary)
    state, scratch = empty(tmp_path, matrix, 12)
    narrow = np.complex64 if imaginary else np.float32
    later = learnt_preparation(matrix, scale=False)
    for start in (0, 5):
        rest = orthonormal_block(20, 4, imaginary=imaginary, seed=start)
        block = orthonormalise(rest, state.used).astype(narrow).astype(matrix.dtype)
        assert np.linalg.norm(block.conj().T @ block - np.eye(4)) > 1e-9, (
            "rounding must show for this test to say something"
        )
        add_columns(state, scratch, matrix, block, later, centred=True, exact=False)
    assert_consistent(state, scratch, dense_prepared(matrix, center=True, scale=False))
    scratch.close()


@both
def test_a_block_swept_with_wrong_scales_is_re_expressed_for_the_right_ones(imaginary: bool, tmp_path: Path) -> None:
    matrix = samples(90, 20, imaginary=imaginary)
    state, scratch = empty(tmp_path, matrix, 16)
    wrong = Preparation(True, True, True).learnt(matrix.mean(axis=0) * 1.2, np.linspace(0.3, 3, 20), matrix.dtype)
    first = orthonormal_block(20, 6, imaginary=imaginary)
    scale = add_columns(state, scratch, matrix, first, wrong, centred=True, exact=False)
    assert scale is not None
    prepared = dense_prepared(matrix, center=True, scale=True)
    assert_consistent(state, scratch, prepared)
    more = orthonormalise(orthonormal_block(20, 5, imaginary=imaginary, seed=8), state.used)
    add_columns(state, scratch, matrix, more, learnt_preparation(matrix, scale=True), centred=True, exact=True)
    assert_consistent(state, scratch, prepared)
    scratch.close()


def test_errors_of_products_grow_by_what_re_expresses_them(tmp_path: Path) -> None:
    matrix = samples(90, 20)
    state, scratch = empty(tmp_path, matrix, 12)
    block = orthonormal_block(20, 4) * np.array([1.0, 0.1, 1.0, 0.01])
    add_columns(state, scratch, matrix, block, learnt_preparation(matrix, scale=False), centred=True, exact=False)
    np.testing.assert_allclose(state.product_error, [1e-12, 1e-11, 1e-12, 1e-10], rtol=1e-6)
    scratch.close()


# ------------------------------------------------------------------------------------------------- Ritz step, restart
@both
def test_the_ritz_step_is_that_of_the_dense_matrix(imaginary: bool, tmp_path: Path) -> None:
    matrix = samples(90, 20, imaginary=imaginary)
    prepared = dense_prepared(matrix, center=True, scale=False)
    state, scratch = empty(tmp_path, matrix, 12)
    block = orthonormal_block(20, 9, imaginary=imaginary)
    add_columns(state, scratch, matrix, block, learnt_preparation(matrix, scale=False), centred=True, exact=True)
    ritz = state.ritz()
    np.testing.assert_allclose(ritz.theta, np.linalg.svd(prepared @ block, compute_uv=False), rtol=1e-11)
    vectors = state.used @ ritz.rotation
    residual = prepared.conj().T @ (prepared @ vectors) - vectors * ritz.theta**2
    size = np.linalg.norm(prepared) ** 2
    np.testing.assert_allclose(ritz.residual_gram, residual.conj().T @ residual, rtol=0, atol=1e-11 * size**2)
    np.testing.assert_allclose(state.residuals(ritz, np.array([4, 1])), residual[:, [4, 1]], rtol=0, atol=1e-11 * size)
    assert np.linalg.norm(vectors.conj().T @ residual) < 1e-10 * size
    scratch.close()


@both
def test_a_restart_keeps_leading_ritz_values_and_everything_about_them(imaginary: bool, tmp_path: Path) -> None:
    matrix = samples(90, 20, imaginary=imaginary)
    prepared = dense_prepared(matrix, center=True, scale=False)
    later = learnt_preparation(matrix, scale=False)
    state, scratch = empty(tmp_path, matrix, 12)
    add_columns(state, scratch, matrix, orthonormal_block(20, 10, imaginary=imaginary), later, centred=True, exact=True)
    before = state.ritz()
    state.restart(4, before, scratch)
    assert (state.width, state.restarts, state.chains) == (4, 1, [])
    assert_consistent(state, scratch, prepared)
    after = state.ritz()
    np.testing.assert_allclose(after.theta, before.theta[:4], rtol=1e-12)
    kept = before.residual_gram[:4, :4]
    turned = after.rotation.conj().T @ kept @ after.rotation
    np.testing.assert_allclose(after.residual_gram, turned, rtol=0, atol=1e-10 * np.linalg.norm(prepared) ** 4)
    # And the files written before serve the columns that follow.
    more = orthonormalise(orthonormal_block(20, 5, imaginary=imaginary, seed=9), state.used)
    add_columns(state, scratch, matrix, more, later, centred=True, exact=True)
    assert_consistent(state, scratch, prepared)
    scratch.close()


def test_forgetting_leaves_stored_columns_unused(tmp_path: Path) -> None:
    matrix = samples(90, 20)
    later = learnt_preparation(matrix, scale=False)
    state, scratch = empty(tmp_path, matrix, 12)
    add_columns(state, scratch, matrix, orthonormal_block(20, 6), later, centred=True, exact=True)
    state.forget(scratch)
    assert (state.width, scratch.map.shape, state.chains) == (0, (6, 0), [])
    add_columns(state, scratch, matrix, orthonormal_block(20, 7, seed=4), later, centred=True, exact=True)
    assert_consistent(state, scratch, dense_prepared(matrix, center=True, scale=False))
    scratch.close()


# ----------------------------------------------------------------------------------------------------- growth, chains
def grown(state: State, ritz: Ritz, **options: int) -> np.ndarray:
    return grow_block(state, ritz, **({"count": 4, "tests": 3, "limit": 30, "seed": 5, "sweep": 1} | options))


@both
def test_growth_is_orthonormal_to_the_basis_and_holds_the_residuals(imaginary: bool, tmp_path: Path) -> None:
    matrix = samples(120, 40, imaginary=imaginary)
    later = learnt_preparation(matrix, scale=False)
    state, scratch = empty(tmp_path, matrix, 30)
    block = start_block(orthonormal_block(40, 5, imaginary=imaginary), state, 3, 5)
    assert block.shape == (40, 8)
    add_columns(state, scratch, matrix, block, later, centred=True, exact=True)
    carry_chains(state, float(np.linalg.norm(matrix) ** 2), 5, None)
    ritz = state.ritz()
    more = grown(state, ritz)
    assert more.shape[1] == 4 + 3 + 3  # residuals, the old test vectors carried on, fresh ones
    whole = np.hstack([state.used, more])
    assert np.linalg.norm(whole.conj().T @ whole - np.eye(18)) < 1e-12
    residual = state.residuals(ritz, np.arange(4))
    assert np.linalg.norm(residual - whole @ (whole.conj().T @ residual)) < 1e-10 * np.linalg.norm(residual)
    scratch.close()


def test_growth_stops_at_the_limit_and_at_the_whole_space(tmp_path: Path) -> None:
    matrix = samples(60, 12)
    later = learnt_preparation(matrix, scale=False)
    state, scratch = empty(tmp_path, matrix, 12)
    add_columns(state, scratch, matrix, orthonormal_block(12, 9), later, centred=True, exact=True)
    ritz = state.ritz()
    assert grown(state, ritz, limit=11).shape[1] == 2
    assert grown(state, ritz).shape[1] == 3
    state.chains = []
    add_columns(state, scratch, matrix, grown(state, ritz), later, centred=True, exact=True)
    assert grown(state, state.ritz()).shape == (12, 0)
    scratch.close()


def test_residuals_of_rounding_are_no_directions(tmp_path: Path) -> None:
    matrix = samples(60, 12)
    prepared = dense_prepared(matrix, center=True, scale=False)
    state, scratch = empty(tmp_path, matrix, 12)
    exact = np.linalg.svd(prepared)[2].T[:, :6]
    add_columns(state, scratch, matrix, exact, learnt_preparation(matrix, scale=False), centred=True, exact=True)
    assert grown(state, state.ritz(), tests=0).shape[1] == 0
    assert grown(state, state.ritz(), tests=2).shape[1] == 2
    scratch.close()


@both
@pytest.mark.parametrize("scaled", [False, True], ids=["known", "rescaled"])
def test_chains_are_powers_of_the_outside_operator_on_the_test_vectors(
    scaled: bool, imaginary: bool, tmp_path: Path
) -> None:
    matrix = samples(120, 40, imaginary=imaginary)
    prepared = dense_prepared(matrix, center=True, scale=scaled)
    later = learnt_preparation(matrix, scale=scaled)
    first = later
    if scaled:
        first = Preparation(True, True, True).learnt(matrix.mean(axis=0), np.linspace(0.4, 2, 40), matrix.dtype)
    energy = float(np.linalg.norm(prepared) ** 2)
    state, scratch = empty(tmp_path, matrix, 40)
    block = start_block(orthonormal_block(40, 5, imaginary=imaginary), state, 3, 5)
    scale = add_columns(state, scratch, matrix, block, first, centred=True, exact=not scaled)
    assert (scale is not None) == scaled
    carry_chains(state, energy, 5, scale)
    (chain,) = state.chains
    omega = gaussian_block(5, chain.stream, 40, 3, complex_entries=imaginary)
    if scale is not None:
        omega = omega * scale[:, None]
        assert chain.shrink == scale.min()
    outside = np.eye(40) - state.basis[:, :5] @ state.basis[:, :5].conj().T
    operator = outside @ prepared.conj().T @ prepared @ outside
    wanted = operator @ omega
    for sweep in (1, 2):
        assert chain.tau is not None
        assert chain.power == sweep
        norm = np.linalg.norm(wanted, 2)
        assert chain.log_norm == pytest.approx(np.log(norm), abs=1e-9)
        np.testing.assert_allclose(chain.tau, wanted / norm, rtol=0, atol=1e-9)
        assert chain.lost < 1e-6
        bound = chain_bound(ChainState(chain.power, chain.log_norm, chain.lost, 3, imaginary, chain.shrink))
        assert bound >= np.linalg.norm(prepared @ outside, 2)
        more = grown(state, state.ritz())
        add_columns(state, scratch, matrix, more, later, centred=True, exact=True)
        carry_chains(state, energy, 5, None)
        wanted = operator @ wanted
    assert_consistent(state, scratch, prepared)
    scratch.close()


def test_vectors_that_did_not_join_end_their_chain(tmp_path: Path) -> None:
    matrix = samples(120, 40)
    later = learnt_preparation(matrix, scale=False)
    energy = float(np.linalg.norm(matrix) ** 2)
    state, scratch = empty(tmp_path, matrix, 40)
    add_columns(
        state, scratch, matrix, start_block(orthonormal_block(40, 5), state, 3, 5), later, centred=True, exact=True
    )
    carry_chains(state, energy, 5, None)
    foreign = orthonormalise(orthonormal_block(40, 2, seed=9), state.used)
    add_columns(state, scratch, matrix, foreign, later, centred=True, exact=True)
    carry_chains(state, energy, 5, None)
    assert state.chains[0].power == 1
    scratch.close()


def test_what_is_not_in_the_basis_is_counted_as_lost(tmp_path: Path) -> None:
    matrix = samples(120, 40)
    prepared = dense_prepared(matrix, center=True, scale=False)
    state, scratch = empty(tmp_path, matrix, 40)
    later = learnt_preparation(matrix, scale=False)
    add_columns(
        state, scratch, matrix, start_block(orthonormal_block(40, 5), state, 3, 5), later, centred=True, exact=True
    )
    energy = float(np.linalg.norm(prepared) ** 2)
    carry_chains(state, energy, 5, None)
    (chain,) = state.chains
    assert chain.tau is not None
    # Join the carried vectors but for a part of 1e-4 of their size.
    nudge = orthonormalise(orthonormal_block(40, 3, seed=11), np.hstack([state.used, np.linalg.qr(chain.tau)[0]]))
    near = orthonormalise(chain.tau + 1e-4 * nudge, state.used)
    add_columns(state, scratch, matrix, near, later, centred=True, exact=True)
    true = chain.tau.copy()
    carry_chains(state, energy, 5, None)
    outside = np.eye(40) - state.basis[:, :5] @ state.basis[:, :5].T
    exact = outside @ prepared.T @ prepared @ outside @ true
    assert chain.power == 2
    difference = np.linalg.norm(exact / np.linalg.norm(exact, 2) - chain.tau, 2)
    assert 1e-9 < difference <= chain.lost


# ------------------------------------------------------------------------------------------------------ dense kernels
@both
def test_orthonormalise_survives_dependent_and_zero_columns(imaginary: bool) -> None:
    basis = orthonormal_block(30, 6, imaginary=imaginary)
    columns = orthonormal_block(30, 5, imaginary=imaginary, seed=4).copy()
    columns[:, 1] = 0
    columns[:, 2] = columns[:, 0] * 1e-200
    columns[:, 3] = basis[:, 2]
    whole = np.hstack([basis, orthonormalise(columns, basis)])
    assert np.linalg.norm(whole.conj().T @ whole - np.eye(11)) < 1e-13


@both
def test_split_writes_columns_by_the_basis_and_new_directions(imaginary: bool) -> None:
    basis = orthonormal_block(30, 6, imaginary=imaginary)
    columns = orthonormal_block(30, 4, imaginary=imaginary, seed=4) + basis[:, :4]
    q, inside, t = split(columns, basis)
    np.testing.assert_allclose(basis @ inside + q @ t, columns, rtol=0, atol=1e-13)
    assert np.array_equal(t, np.triu(t))
    assert np.linalg.norm(basis.conj().T @ q) < 1e-13


def test_triangle_svd_falls_back_where_gesdd_fails(monkeypatch: pytest.MonkeyPatch) -> None:
    import scipy.linalg

    real, asked = scipy.linalg.svd, []

    def failing(matrix: np.ndarray, **options: str) -> object:
        asked.append(options["lapack_driver"])
        if options["lapack_driver"] == "gesdd":
            raise scipy.linalg.LinAlgError("SVD did not converge")
        return real(matrix, **options)

    triangle = np.triu(np.random.default_rng(1).standard_normal((6, 6)))
    monkeypatch.setattr(scipy.linalg, "svd", failing)
    theta, right = triangle_svd(triangle)
    assert asked == ["gesdd", "gesvd"]
    np.testing.assert_allclose(np.linalg.norm(triangle @ right, axis=0), theta, rtol=1e-12)


def test_scratch_type_follows_the_matrix(tmp_path: Path) -> None:
    scratch = Scratch(tmp_path, 3, np.dtype(np.complex128))
    assert scratch.map.dtype == np.complex128
    scratch.close()


def test_a_chain_of_which_nothing_is_left_keeps_what_may_have_been_lost(tmp_path: Path) -> None:
    # The columns that hold the test vectors come out as exact zeros, but may be wrong by 1e-3 each: that is no proof
    # that nothing is left, neither at the first power nor at the second.
    matrix = samples(120, 40)
    later = learnt_preparation(matrix, scale=False)
    state, scratch = empty(tmp_path, matrix, 40)
    block = start_block(orthonormal_block(40, 5), state, 3, 5)
    add_columns(state, scratch, matrix, block, later, centred=True, exact=True)
    state.products[:] = 0
    state.product_error[:] = 1e-3
    for power in (1, 2):
        carry_chains(state, float(np.linalg.norm(matrix) ** 2), 5, None)
        (chain,) = state.chains
        assert chain.power == power
        assert chain_bound(ChainState(power, chain.log_norm, chain.lost, 3, False, chain.shrink)) > 1e-2
    scratch.close()

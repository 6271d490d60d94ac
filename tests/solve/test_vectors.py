"""Tall vectors from scratch, whole spectra, and the sample that gives the first directions."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from solve_samples import add_columns, dense_prepared, empty, orthonormal_block, samples
from table import largest_angle

from bigsvd.plan import Geometry
from bigsvd.prepare import Preparation
from bigsvd.solve import (
    TallVectors,
    column_phases,
    from_gram,
    from_triangle,
    learn,
    take_pilot,
    tall,
)
from bigsvd.source import open_source
from bigsvd.sweep import Control, Engine, PanelReader, Partial, fold

both = pytest.mark.parametrize("imaginary", [False, True], ids=["real", "complex"])


# -------------------------------------------------------------------------------------------------------- tall vectors
@both
@pytest.mark.parametrize("lines", [4096, 50])
def test_tall_vectors_are_orthonormal_and_satisfy_their_equation(
    lines: int, imaginary: bool, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(tall, "TALL_LINES", lines)
    matrix = samples(230, 20, imaginary=imaginary)
    prepared = dense_prepared(matrix, center=True, scale=False)
    state, scratch = empty(tmp_path, matrix, 20)
    later = Preparation(True, True, False).learnt(matrix.mean(axis=0), None, matrix.dtype)
    add_columns(state, scratch, matrix, orthonormal_block(20, 12, imaginary=imaginary), later, centred=True, exact=True)
    ritz = state.ritz()
    vectors = TallVectors(scratch, state, ritz, np.zeros(7, bool), 1)
    vectors.fix_phase()
    u = np.concatenate([block for _, block in vectors.blocks()])
    assert [start for start, _ in vectors.blocks()] == list(range(0, 230, lines))
    assert np.linalg.norm(u.conj().T @ u - np.eye(7)) < 1e-13
    turned = (state.used @ ritz.rotation[:, :7]) * vectors.phase
    np.testing.assert_allclose(u * ritz.theta[:7], prepared @ turned, rtol=0, atol=1e-11 * ritz.theta[0])
    largest = u[np.abs(u).argmax(axis=0), np.arange(7)]
    assert np.all(largest.real > 0)
    assert np.all(np.abs(largest.imag) < 1e-14)
    np.testing.assert_array_equal(vectors.rows(113, 171), u[113:171])
    scratch.close()


def test_largest_entries_of_small_components_are_real_in_the_blocks_that_are_written(tmp_path: Path) -> None:
    # A component of 1e-7 keeps nine figures; entries computed line by line differ from those of a block in the others.
    matrix = samples(230, 12, imaginary=True)
    matrix[:, 3:] *= 1e-7
    state, scratch = empty(tmp_path, matrix, 12)
    add_columns(
        state, scratch, matrix, orthonormal_block(12, 12, imaginary=True), Preparation(True, False, False),
        centred=False, exact=True,
    )  # fmt: skip
    vectors = TallVectors(scratch, state, state.ritz(), np.zeros(8, bool), 1)
    vectors.fix_phase()
    u = np.concatenate([block for _, block in vectors.blocks()])
    largest = u[np.abs(u).argmax(axis=0), np.arange(8)]
    assert np.all(largest.real > 0)
    assert np.all(np.abs(largest.imag) < 1e-15)
    scratch.close()


def test_fewer_lines_are_taken_at_a_time_where_many_columns_were_stored(tmp_path: Path) -> None:
    matrix = samples(230, 20)
    state, scratch = empty(tmp_path, matrix, 20)
    for _ in range(3):
        state.forget(scratch)
        block = orthonormal_block(20, 20)
        add_columns(state, scratch, matrix, block, Preparation(True, False, False), centred=False, exact=True)
    assert TallVectors(scratch, state, state.ritz(), np.zeros(7, bool), 1).step == tall.TALL_LINES * 2 // 3
    scratch.close()


@both
def test_null_columns_are_completed_orthonormally_and_keyed_by_line(imaginary: bool, tmp_path: Path) -> None:
    matrix = samples(120, 12, imaginary=imaginary)
    left, values, right = np.linalg.svd(matrix - matrix.mean(axis=0), full_matrices=False)
    low = (left[:, :4] * values[:4]) @ right[:4]
    state, scratch = empty(tmp_path, low, 12)
    later = Preparation(True, True, False).learnt(low.mean(axis=0), None, low.dtype)
    add_columns(state, scratch, low, orthonormal_block(12, 12, imaginary=imaginary), later, centred=True, exact=True)
    ritz = state.ritz()
    assert ritz.theta[4] < 1e-12 * ritz.theta[0]
    null = np.arange(7) >= 4
    found = [TallVectors(scratch, state, ritz, null, seed) for seed in (1, 1, 2)]
    blocks = [np.concatenate([block for _, block in vectors.blocks()]) for vectors in found]
    assert np.linalg.norm(blocks[0].conj().T @ blocks[0] - np.eye(7)) < 1e-12
    np.testing.assert_array_equal(blocks[0], blocks[1])
    assert np.linalg.norm(blocks[0][:, 4:] - blocks[2][:, 4:]) > 0.1
    assert largest_angle(blocks[0][:, :4], left[:, :4]) < 1e-7
    scratch.close()


def test_vectors_that_lean_on_each_other_are_straightened(tmp_path: Path) -> None:
    # Values down to 1e-15 of the first: the last columns of Y·W·Θ⁻¹ are rounding and lean on the others.
    matrix = samples(200, 12)
    left, _, right = np.linalg.svd(matrix - matrix.mean(axis=0), full_matrices=False)
    graded = (left * np.logspace(0, -15, 12)) @ right
    state, scratch = empty(tmp_path, graded, 12)
    later = Preparation(True, False, False)
    add_columns(state, scratch, graded, orthonormal_block(12, 12), later, centred=False, exact=True)
    ritz = state.ritz()
    raw = scratch.read(0, 200) @ scratch.map @ ritz.rotation / ritz.theta
    assert np.linalg.norm(raw.T @ raw - np.eye(12)) > 1e-3, "rounding must show for this test to say something"
    u = np.concatenate([block for _, block in TallVectors(scratch, state, ritz, np.zeros(12, bool), 1).blocks()])
    assert np.linalg.norm(u.T @ u - np.eye(12)) < 1e-13
    scratch.close()


def test_phases_follow_the_largest_entry_and_ties_the_lowest_index() -> None:
    vectors = np.array([[0.6, 0.5j, -0.5, 0], [-0.8, 0.1, 0.5, 0]], complex)
    turned = vectors * column_phases(vectors)
    np.testing.assert_allclose(turned, [[-0.6, 0.5, 0.5, 0], [0.8, -0.1j, -0.5, 0]], atol=1e-15)


# ------------------------------------------------------------------------------------------------------ whole spectra
@both
def test_whole_spectra_from_sums_and_from_a_fold_agree_with_lapack(imaginary: bool) -> None:
    matrix = samples(90, 15, imaginary=imaginary)
    prepared = dense_prepared(matrix, center=True, scale=False)
    _, true, right = np.linalg.svd(prepared, full_matrices=False)
    value, vectors = from_gram(prepared.conj().T @ prepared)
    np.testing.assert_allclose(value[:8], true[:8], rtol=1e-9)
    assert np.all(np.diff(value) <= 0)
    assert largest_angle(vectors[:, :3], right[:3].conj().T) < 1e-7
    folded = fold([np.hstack([np.ones((90, 1)), matrix])])
    value, vectors = from_triangle(folded, None, centred=True)
    np.testing.assert_allclose(value, true, rtol=0, atol=1e-13 * true[0] * 10)
    assert largest_angle(vectors[:, :3], right[:3].conj().T) < 1e-9
    value, _ = from_triangle(fold([prepared]), None, centred=False)
    np.testing.assert_allclose(value, true, rtol=0, atol=1e-13 * true[0] * 10)


def test_scales_learnt_in_the_fold_divide_its_columns() -> None:
    matrix = samples(90, 15)
    preparation = Preparation(True, True, True)
    parts = np.abs(matrix) ** 2
    sums = Partial(
        lines=90, energy=float(parts.sum()), line_sum=matrix.sum(axis=0), square_sum=parts.sum(axis=0),
        lowest=matrix.min(axis=0), highest=matrix.max(axis=0),
    )  # fmt: skip
    learnt = learn(sums, preparation)
    value, _ = from_triangle(fold([np.hstack([np.ones((90, 1)), matrix])]), learnt, centred=True)
    true = np.linalg.svd(dense_prepared(matrix, center=True, scale=True), compute_uv=False)
    np.testing.assert_allclose(value, true, rtol=0, atol=1e-10 * true[0])


def test_negative_eigenvalues_of_rounding_are_clipped() -> None:
    value, _ = from_gram(np.diag([1.0, -1e-17]))
    np.testing.assert_array_equal(value, [1.0, 0.0])


# -------------------------------------------------------------------------------------------------------------- pilot
def steep(imaginary: bool) -> np.ndarray:
    """200 × 30 on means of 5, of values that halve, so that five directions and four iterations find the first."""
    random = np.random.default_rng(4)
    left, right = (
        random.standard_normal((200, 30)) * 0.5 ** np.arange(30),
        orthonormal_block(30, 30, imaginary=imaginary),
    )
    return np.asarray(left @ right.conj().T + 5 + random.standard_normal(30))


def pilot_of(
    matrix: np.ndarray, panels: tuple[int, ...], *, by_lines: bool = False, center: bool = True, **options: object
):  # type: ignore[no-untyped-def]
    """Take a pilot of the given panels of ten lines."""
    edges = (*range(0, len(matrix), 10), len(matrix))
    geometry = Geometry(0, len(matrix), matrix.shape[1], not by_lines, edges, 1.0, 10 * matrix[0].nbytes)
    reader = PanelReader(open_source(matrix), geometry, Control(), keep=True)
    engine = Engine(2)
    try:
        preparation = Preparation(not by_lines, center, False)
        settings = {"directions": 5, "may_be_single": False, "seed": 3} | options
        return take_pilot(reader, engine, panels, 2, preparation, **settings), reader  # type: ignore[arg-type]
    finally:
        engine.close()


@both
def test_the_pilot_finds_the_leading_directions_of_its_sample_in_one_read(imaginary: bool) -> None:
    matrix = steep(imaginary)
    panels = (1, 4, 7, 12, 19)
    pilot, reader = pilot_of(matrix, panels)
    sample = np.concatenate([matrix[10 * panel : 10 * panel + 10] for panel in panels])
    _, values, right = np.linalg.svd(sample - sample.mean(axis=0), full_matrices=False)
    assert pilot.directions is not None
    assert largest_angle(pilot.directions[:, :3], right[:3].conj().T) < 1e-3
    np.testing.assert_allclose(pilot.theta[:3], values[:3] * np.sqrt(200 / 50), rtol=1e-6)
    np.testing.assert_allclose(pilot.preparation.shift, sample.mean(axis=0), rtol=1e-12)
    assert pilot.energy == pytest.approx(np.linalg.norm(sample - sample.mean(axis=0)) ** 2 * 4, rel=1e-9)
    assert reader.control.bytes_read == sample.nbytes
    assert pilot.rounding is None


def test_a_pilot_in_single_measures_its_rounding() -> None:
    matrix = samples(200, 30).astype("f4")
    pilot, _ = pilot_of(matrix, (1, 4, 7), may_be_single=True)
    assert pilot.single_fits
    assert pilot.rounding is not None
    np.testing.assert_array_equal(pilot.rounding[0], 3)
    assert np.all(pilot.rounding[1:] > 0)


@pytest.mark.parametrize("size", [1e-30, 1e30])
def test_entries_whose_squares_leave_single_are_noticed(size: float) -> None:
    pilot, _ = pilot_of((samples(200, 30) * size).astype("f4"), (1, 4, 7), may_be_single=True)
    assert not pilot.single_fits
    assert pilot.directions is not None


def test_a_pilot_of_lines_that_are_features_centres_each_by_itself() -> None:
    matrix = steep(False) - 5
    pilot, _ = pilot_of(matrix, (2, 9), by_lines=True)
    sample = np.concatenate([matrix[20:30], matrix[90:100]])
    right = np.linalg.svd(sample - sample.mean(axis=1, keepdims=True), full_matrices=False)[2]
    assert pilot.directions is not None
    assert largest_angle(pilot.directions[:, :2], right[:2].T) < 1e-3


def test_a_pilot_that_meets_nan_gives_no_directions() -> None:
    matrix = samples(200, 30)
    matrix[45, 3] = np.nan
    pilot, _ = pilot_of(matrix, (1, 4, 7))
    assert pilot.directions is None


def test_a_pilot_for_a_mean_only_makes_no_products() -> None:
    matrix = samples(200, 30)
    pilot, _ = pilot_of(matrix, (1, 4), directions=0)
    assert pilot.directions is None
    np.testing.assert_allclose(pilot.preparation.shift, np.concatenate([matrix[10:20], matrix[40:50]]).mean(axis=0))

"""Segments against NumPy: every kind, both axes, every stored type, single and double, one tile and several."""

from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace
from typing import cast

import numpy as np
import pytest
from sweep_samples import (
    assert_close,
    assert_same_gram,
    geometry_of,
    prepared,
    reader_of,
    stored_matrix,
    sweep,
    wide_type,
)

from bigsvd.prepare import Preparation
from bigsvd.source import MatrixSpec, Source
from bigsvd.sweep import PanelReader, Scratch, SweepTask, mirror, segment
from bigsvd.sweep.events import Control, Progress, StoppedError

EPS, SINGLE = 2.0**-52, 2.0**-23
CODES = ("f4", "f8", "c8", "c16", "u2", "i8", "b1", "f2")
SHAPE, PANEL = (61, 23), 9


@pytest.fixture(params=[False, True], ids=["one_tile", "several_tiles"])
def tiles(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    """Cut units of 23 columns into tiles of 7, and panels into units of 4 lines; or leave them whole."""
    if request.param:
        monkeypatch.setattr(segment, "tile_columns", lambda across: min(across, 7))
        monkeypatch.setattr(segment, "UNIT_LINES", 4)
        monkeypatch.setattr(segment, "SINGLE_TERMS", 5)


def preparation(kind: str, matrix: np.ndarray, axis: int) -> Preparation:
    """None, centring and scaling across the sweep, or by lines."""
    if kind == "plain":
        return Preparation(True, center=False, scale=False)
    if kind == "lines":
        return Preparation(False, center=True, scale=True)
    lines = matrix if axis == 0 else matrix.T
    shift = lines.mean(axis=0).astype(np.complex64 if matrix.dtype.kind == "c" else np.float32)
    scale = 1 / np.linspace(1, 2, lines.shape[1])
    return Preparation(
        True, center=True, scale=True, shift=shift.astype(wide_type(matrix.dtype.str[1:])), inverse_scale=scale
    )


@pytest.mark.usefixtures("tiles")
@pytest.mark.parametrize("kind", ["plain", "across", "lines"])
@pytest.mark.parametrize("axis", [0, 1])
@pytest.mark.parametrize("code", CODES)
@pytest.mark.parametrize("single", [False, True], ids=["double", "single"])
def test_basis_sweeps_agree_with_numpy(code: str, axis: int, kind: str, single: bool, tmp_path: Path) -> None:
    matrix = stored_matrix(code, SHAPE)
    reader = reader_of(matrix, axis, PANEL)
    wide = wide_type(code)
    work = np.dtype({"f": np.float32, "c": np.complex64}[wide.kind]) if single else wide
    made = preparation(kind, matrix, axis)
    exact = prepared(matrix, axis, made)
    across = exact.shape[1]
    block = np.linalg.qr(stored_matrix("c16" if wide.kind == "c" else "f8", (across, 5), seed=2))[0].astype(work)
    scratch = Scratch(tmp_path, len(exact), wide)
    target = scratch.add_block(5)
    done = sweep(
        SweepTask(
            reader, made, work, "basis", block, scratch=scratch, target=target, ones=made.across_features,
            add_lines=made.across_features, line_features=not made.across_features,
        ),
        scratch=scratch,
    )  # fmt: skip
    epsilon = SINGLE if single else EPS
    tall = exact @ block.astype(wide)
    sums = done.sums
    assert sums.lines == len(exact)
    assert sums.energy == pytest.approx(np.linalg.norm(exact) ** 2, rel=40 * epsilon)
    assert done.tall is not None
    assert_close(done.tall, tall, across, epsilon)
    assert sums.products is not None
    assert sums.products.dtype == wide
    assert_close(sums.products, (exact.conj().T @ tall).conj().T, exact.size, epsilon)
    assert sums.triangle is not None
    folded = np.hstack([np.ones((len(exact), 1)), done.tall]) if made.across_features else done.tall
    assert_same_gram(sums.triangle, folded, EPS)
    if made.across_features:
        assert sums.line_sum is not None
        # What is left of the mean is small beside the sum of moduli.
        scale = np.abs(exact).sum(axis=0).max()
        np.testing.assert_allclose(sums.line_sum, exact.sum(axis=0), rtol=0, atol=20 * epsilon * scale)
    else:
        lines = (matrix if axis == 0 else matrix.T).astype(wide)
        assert sums.line_mean is not None
        assert_close(np.concatenate(sums.line_mean), lines.mean(axis=1), across, EPS)
    scratch.close()


@pytest.mark.usefixtures("tiles")
@pytest.mark.parametrize("kind", ["plain", "across", "lines"])
@pytest.mark.parametrize("axis", [0, 1])
@pytest.mark.parametrize("code", CODES)
def test_gram_and_fold_sweeps_agree_with_numpy(code: str, axis: int, kind: str) -> None:
    matrix = stored_matrix(code, SHAPE)
    made = preparation(kind, matrix, axis)
    exact = prepared(matrix, axis, made)
    reader, wide = reader_of(matrix, axis, PANEL), wide_type(code)
    by_lines = not made.across_features
    gram = sweep(SweepTask(reader, made, wide, "gram", line_features=by_lines)).sums
    assert gram.gram is not None
    mirror(gram.gram)
    assert_close(gram.gram, exact.conj().T @ exact, len(exact), EPS)
    folded = sweep(SweepTask(reader, made, wide, "fold", ones=not by_lines, line_features=by_lines)).sums
    assert folded.triangle is not None
    assert_same_gram(folded.triangle, exact if by_lines else np.hstack([np.ones((len(exact), 1)), exact]), EPS)


@pytest.mark.usefixtures("tiles")
@pytest.mark.parametrize("axis", [0, 1])
@pytest.mark.parametrize("code", ["f4", "c8", "u2"])
def test_squares_and_extremes_are_learnt_per_feature(code: str, axis: int) -> None:
    matrix = stored_matrix(code, SHAPE)
    made = preparation("across", matrix, axis)
    exact, lines = prepared(matrix, axis, made), matrix if axis == 0 else matrix.T
    block = np.eye(exact.shape[1], 2, dtype=wide_type(code))
    task = SweepTask(reader_of(matrix, axis, PANEL), made, wide_type(code), "basis", block, add_lines=True, learn=True)
    sums = sweep(task).sums
    assert sums.square_sum is not None
    assert_close(sums.square_sum, (np.abs(exact) ** 2).sum(axis=0), len(exact), EPS)
    parts = np.hstack([lines.real, lines.imag]) if code == "c8" else lines
    np.testing.assert_array_equal(sums.lowest, parts.min(axis=0))
    np.testing.assert_array_equal(sums.highest, parts.max(axis=0))


def test_earlier_columns_come_from_scratch_through_the_map(tmp_path: Path) -> None:
    matrix = stored_matrix("f8", (300, 20))
    reader, plain = reader_of(matrix, 0, 37), Preparation(True, center=False, scale=False)
    wide = np.dtype(np.float64)
    scratch = Scratch(tmp_path, 300, wide)
    random = np.random.default_rng(1)
    first, second = random.standard_normal((20, 4)), random.standard_normal((20, 3))
    sweep(SweepTask(reader, plain, wide, "basis", first, scratch=scratch, target=scratch.add_block(4)))
    scratch.map = random.standard_normal((4, 2))
    done = sweep(
        SweepTask(reader, plain, wide, "basis", second, scratch=scratch, target=scratch.add_block(3), ones=True),
        scratch=scratch,
    )
    stack = np.hstack([np.ones((300, 1)), matrix @ first @ scratch.map, matrix @ second])
    assert done.sums.triangle is not None
    assert_same_gram(done.sums.triangle, stack, EPS)
    assert done.tall is not None
    assert_close(done.tall, np.hstack([matrix @ first, matrix @ second]), 20, EPS)
    scratch.close()


def test_more_lines_than_a_fold_gathers_are_folded_on_the_way(tmp_path: Path) -> None:
    matrix = stored_matrix("f8", (2600, 6))  # the fold gathers 1,024 and its own triangle
    wide = np.dtype(np.float64)
    for panel in (2600, 900, 130):
        scratch = Scratch(tmp_path, 2600, wide)
        task = SweepTask(
            reader_of(matrix, 0, panel), Preparation(True, center=False, scale=False), wide, "basis", np.eye(6),
            scratch=scratch, target=scratch.add_block(6), ones=True,
        )  # fmt: skip
        triangle = sweep(task, segments=1).sums.triangle
        assert triangle is not None
        assert_same_gram(triangle, np.hstack([np.ones((2600, 1)), matrix]), EPS)
        scratch.close()


def test_rounding_of_single_is_measured_on_the_sampled_panels() -> None:
    matrix = stored_matrix("f4", (90, 40))
    block = np.linalg.qr(np.random.default_rng(1).standard_normal((40, 3)))[0].astype(np.float32)
    plain, single = Preparation(True, center=False, scale=False), np.dtype(np.float32)
    task = SweepTask(reader_of(matrix, 0, 10), plain, single, "basis", block, sampled=frozenset({1, 4, 7}))
    measured = sweep(task).sums.rounding
    assert measured is not None
    np.testing.assert_array_equal(measured[0], 3)
    exact_block = block.astype(float)
    tall, product = np.zeros(3), np.zeros(3)
    for panel in (1, 4, 7):
        part = matrix[10 * panel : 10 * panel + 10]
        narrow = (part @ block).astype(float)
        tall += np.sum((narrow - part.astype(float) @ exact_block) ** 2, axis=0)
        double = part.astype(float).T @ (part.astype(float) @ exact_block)
        product += np.sum((part.T @ narrow.astype(np.float32) - double) ** 2, axis=0)
    assert np.all(measured[1] > 0)
    # Sums in another order round otherwise: the size agrees, not the figures.
    np.testing.assert_allclose(np.sqrt(measured[1]), np.sqrt(tall), rtol=1.0)
    np.testing.assert_allclose(np.sqrt(measured[2]), np.sqrt(product), rtol=1.0)


def test_the_ledger_is_the_sum_of_the_stored_words_whatever_the_panel() -> None:
    matrix = stored_matrix("u2", (50, 31))
    for axis, panel in ((0, 7), (1, 4)):
        plain = Preparation(True, center=False, scale=False)
        sums = sweep(SweepTask(reader_of(matrix, axis, panel), plain, np.dtype(float), "gram")).sums
        expected = []
        for start in range(0, matrix.shape[axis], panel):
            part = matrix[start : start + panel] if axis == 0 else matrix[:, start : start + panel]
            raw = part.tobytes()
            words = [int.from_bytes(raw[i : i + 8], "little") for i in range(0, len(raw), 8)]
            expected.append(sum(words) % 2**64)
        assert sums.ledger == expected


def test_one_changed_value_changes_the_word_of_its_panel_alone() -> None:
    matrix = stored_matrix("f4", (40, 10))
    other = matrix.copy()
    other[25, 3] = np.nextafter(other[25, 3], np.float32(9))
    plain = Preparation(True, center=False, scale=False)
    words = [
        sweep(SweepTask(reader_of(m, 0, 10), plain, np.dtype(float), "gram")).sums.ledger or [] for m in (matrix, other)
    ]
    assert [a == b for a, b in zip(*words, strict=True)] == [True, True, False, True]


@pytest.mark.parametrize("axis", [0, 1])
def test_nan_and_infinity_are_counted_exactly_and_the_first_is_placed(axis: int) -> None:
    matrix = stored_matrix("f4", (200, 30))
    bad = [(150, 3), (31, 7), (31, 2), (199, 29), (60, 0)]
    for index, place in enumerate(bad):
        matrix[place] = [np.nan, np.inf, -np.inf][index % 3]
    for segments in (1, 4):
        task = SweepTask(reader_of(matrix, axis, 13), Preparation(True, True, False), np.dtype(float), "gram")
        sums = sweep(task, segments=segments).sums
        assert sums.bad == 5
        assert sums.first_bad == (31, 2)
        assert not sums.overflow


def test_finite_entries_whose_squares_overflow_single_are_told_from_infinity() -> None:
    matrix = np.full((20, 5), 1e25, np.float32)
    plain, block = Preparation(True, center=False, scale=False), np.eye(5, 2)
    narrow = sweep(SweepTask(reader_of(matrix, 0, 6), plain, np.dtype(np.float32), "basis", block.astype("f4"))).sums
    assert narrow.overflow
    assert narrow.bad == 0
    assert not sweep(SweepTask(reader_of(matrix, 0, 6), plain, np.dtype(float), "basis", block)).sums.overflow


def test_integers_beyond_double_are_noticed() -> None:
    plain = Preparation(True, center=False, scale=False)
    for largest, beyond in ((2**53, False), (2**53 + 1, True), (-(2**53) - 1, True)):
        matrix = np.ones((20, 5), np.int64)
        matrix[13, 2] = largest
        assert sweep(SweepTask(reader_of(matrix, 0, 6), plain, np.dtype(float), "gram")).sums.beyond is beyond


# ---------------------------------------------------------------------------------------------------- panels, engine
def test_kept_panels_are_read_once_and_a_held_one_until_it_is_fetched() -> None:
    matrix = stored_matrix("f8", (40, 6))
    keeper = reader_of(matrix, 0, 10, keep=True)
    assert keeper.buffer().size == 0
    for _ in range(3):
        np.testing.assert_array_equal(keeper.fetch(2, keeper.buffer()), matrix[20:30])
    assert keeper.control.bytes_read == matrix[20:30].nbytes
    holder = reader_of(matrix, 0, 10)
    holder.hold(1)
    np.testing.assert_array_equal(holder.peek(1), matrix[10:20])
    np.testing.assert_array_equal(holder.fetch(1, holder.buffer()), matrix[10:20])
    assert holder.control.bytes_read == matrix[10:20].nbytes
    holder.fetch(1, holder.buffer())
    assert holder.control.bytes_read == 2 * matrix[10:20].nbytes


def test_parts_of_chunks_count_the_chunks_that_are_decoded() -> None:
    spec = MatrixSpec("counts", (50, 4), np.dtype(float), (15, 4), "compressed")
    geometry = geometry_of(np.zeros((50, 4)), 0, 10)
    reader = PanelReader(cast(Source, SimpleNamespace(spec=spec)), geometry, Control())
    # Of chunks of 15 lines, lines 10–19 touch two; lines 40–49 touch two of which the last is cut at 50.
    assert [reader.decoded(panel) // (4 * 8) for panel in range(5)] == [15, 30, 15, 15, 20]


def test_a_stop_is_raised_inside_the_sweep_and_ends_all_workers() -> None:
    matrix = stored_matrix("f8", (400, 6))
    seen: list[Progress] = []
    reader = reader_of(matrix, 0, 10)
    control = Control(seen.append)
    reader.control = control
    control.begin("sweep", matrix.nbytes, 1)
    control.stop()
    with pytest.raises(StoppedError):
        sweep(SweepTask(reader, Preparation(True, False, False), np.dtype(float), "gram"), segments=8)
    assert control.bytes_read < matrix.nbytes


def test_progress_is_told_panel_by_panel_and_timings_add_up_by_stage() -> None:
    matrix = stored_matrix("f8", (100, 6))
    seen: list[Progress] = []
    reader = reader_of(matrix, 0, 10)
    reader.control = Control(seen.append)
    reader.control.begin("sweep", matrix.nbytes, 1, "words")
    sweep(SweepTask(reader, Preparation(True, False, False), np.dtype(float), "gram"))
    assert seen[0] == Progress("sweep", 1, 0, matrix.nbytes, "words")
    assert max(event.bytes_done for event in seen) == matrix.nbytes
    assert len(seen) == 11
    assert set(reader.control.timings()) == {"sweep"}


@pytest.mark.parametrize("kind", ["gram", "fold", "basis"])
def test_workers_do_not_change_a_bit_of_the_sums(kind: str) -> None:
    matrix = stored_matrix("f4", (700, 20))
    block = np.linalg.qr(np.random.default_rng(1).standard_normal((20, 6)))[0] if kind == "basis" else None
    found = []
    for workers in (1, 2, 5):
        task = SweepTask(reader_of(matrix, 0, 25), Preparation(True, False, False), np.dtype(float), kind, block)
        sums = sweep(task, segments=7, workers=workers).sums
        found.append([getattr(sums, name) for name in ("gram", "triangle", "products")] + [sums.energy])
    for other in found[1:]:
        for one, two in zip(found[0], other, strict=True):
            assert (one is None) == (two is None)
            assert one is None or np.asarray(one).tobytes() == np.asarray(two).tobytes()

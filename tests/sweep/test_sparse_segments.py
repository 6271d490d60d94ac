"""Panels without their zeros give what panels with them give: every kind of preparation, axis, type and precision."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from line_samples import SparseInMemory, sparse_lines
from scipy.sparse import csr_array
from sweep_samples import Swept, assert_close, assert_same_gram, prepared, sweep, wide_type

from bigsvd.plan import Geometry, sparse_bytes
from bigsvd.prepare import Preparation, implicit, line_statistics, pieces, sparse_statistics
from bigsvd.sweep import Control, PanelReader, Scratch, SweepTask, sparse_segment

EPS, SINGLE = 2.0**-52, 2.0**-23
CODES = ("f4", "f8", "c8", "c16", "u2", "i8", "b1", "i1")
KINDS = ("plain", "centred", "scaled", "both", "lines", "centred_lines", "scaled_lines")
SHAPE, PANEL = (61, 23), 9


@pytest.fixture(params=[False, True], ids=["whole", "cut"])
def cuts(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    """Cut panels into units of 4 lines and pieces of 7 nonzeros, or leave them whole."""
    if request.param:
        monkeypatch.setattr("bigsvd.plan.geometry.SPARSE_UNIT_LINES", 4)
        monkeypatch.setattr(implicit, "PIECE_NONZEROS", 7)
        monkeypatch.setattr(sparse_segment, "_ROWS", 5)
        monkeypatch.setattr(sparse_segment, "MEASURED_COLUMNS", 2)


def reader_of(lines: csr_array, axis: int, panel_lines: int = PANEL, *, zeros: bool = False) -> PanelReader:
    """Panels of so many lines, without their zeros unless those are wanted."""
    count, across = lines.shape
    edges = (*range(0, count, panel_lines), count)
    densest = max(int(lines.indptr[stop] - lines.indptr[first]) for first, stop in pairwise(edges))
    source = SparseInMemory(lines, axis)
    held = sparse_bytes(source.spec, min(panel_lines, count), densest)
    geometry = Geometry(axis, count, across, True, edges, 1.0, held, None if zeros else densest)
    return PanelReader(source, geometry, Control())


def preparation(kind: str, lines: csr_array) -> Preparation:
    """Of features across, as a pilot leaves it: a mean that single precision holds; or of features that are lines."""
    if kind.endswith("lines"):
        return Preparation(False, center=kind != "scaled_lines", scale=kind != "centred_lines")
    made = Preparation(True, center=kind in ("centred", "both"), scale=kind in ("scaled", "both"))
    narrow = np.complex64 if lines.dtype.kind == "c" else np.float32
    mean = np.asarray(lines.toarray().mean(axis=0), narrow).astype(wide_type(lines.dtype.str[1:]))
    scale = (1 / np.linspace(1, 2, lines.shape[1])).astype(np.float32).astype(float) if made.scale else None
    return made if kind == "plain" else made.learnt(mean, scale, np.dtype(narrow))


def task_of(
    reader: PanelReader, made: Preparation, work: np.dtype, block: np.ndarray | None, **more: object
) -> SweepTask:
    """A first sweep, in which everything is learnt."""
    learns = made.across_features and made.scale
    flags = {"add_lines": made.across_features, "learn": learns, "line_features": made.center or made.scale} | more
    flags["line_features"] = not made.across_features and bool(flags["line_features"])
    return SweepTask(reader, made, work, "basis", block, **flags)  # type: ignore[arg-type]


def columns_of(code: str, across: int, work: np.dtype, width: int = 5) -> np.ndarray:
    random = np.random.default_rng(2)
    block = random.standard_normal((across, width)) + (
        1j * random.standard_normal((across, width)) if code[0] == "c" else 0
    )
    return np.linalg.qr(block)[0].astype(work)


def run(reader: PanelReader, made: Preparation, work: np.dtype, block: np.ndarray, folder: Path) -> Swept:
    scratch = Scratch(folder, reader.geometry.lines, wide_type("c16" if work.kind == "c" else "f8"))
    target = scratch.add_block(block.shape[1])
    done = sweep(
        task_of(reader, made, work, block, scratch=scratch, target=target, ones=made.across_features), scratch=scratch
    )
    scratch.close()
    return done


@pytest.mark.usefixtures("cuts")
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("axis", [0, 1])
@pytest.mark.parametrize("code", CODES)
@pytest.mark.parametrize("single", [False, True], ids=["double", "single"])
def test_sums_without_zeros_are_those_with_them(code: str, axis: int, kind: str, single: bool, tmp_path: Path) -> None:
    lines = sparse_lines(code, SHAPE, filled=axis == 1)
    made, wide = preparation(kind, lines), wide_type(code)
    work = np.dtype({"f": np.float32, "c": np.complex64}[wide.kind]) if single else wide
    block = columns_of(code, SHAPE[1], work)
    sparse = run(reader_of(lines, axis), made, work, block, tmp_path)
    dense = run(reader_of(lines, axis, zeros=True), made, wide, block.astype(wide), tmp_path)
    exact = prepared(lines.toarray(), 0, made)
    epsilon = SINGLE if single else EPS
    # Products round by the size of what is subtracted from them: entries as they are stored.
    stored = np.linalg.norm(prepared(lines.toarray(), 0, replace(made, center=False, shift=None)))
    size = stored + np.sqrt(sparse.sums.cancelled)
    assert sparse.tall is not None
    assert dense.tall is not None
    np.testing.assert_allclose(sparse.tall, dense.tall, rtol=0, atol=8 * epsilon * size)
    for found, wanted in ((sparse.sums, dense.sums),):
        assert found.products is not None
        assert wanted.products is not None
        np.testing.assert_allclose(found.products, wanted.products, rtol=0, atol=8 * epsilon * size**2)
        assert found.lines == wanted.lines == len(exact)
        # Of the prepared entries themselves: nothing cancels, and nothing is in single.
        assert found.energy == pytest.approx(wanted.energy, rel=40 * EPS)
        assert found.energy == pytest.approx(np.linalg.norm(exact) ** 2, rel=40 * EPS)
        assert found.triangle is not None
        ones = [np.ones((len(exact), 1))] if made.across_features else []
        assert_same_gram(found.triangle, np.hstack([*ones, sparse.tall]), EPS)
        for name in ("lowest", "highest"):
            assert (getattr(found, name) is None) == (getattr(wanted, name) is None)
            if getattr(found, name) is not None:
                np.testing.assert_array_equal(getattr(found, name), getattr(wanted, name))
        scale = np.abs(exact).sum(axis=0).max()
        for name, power in (("line_sum", 1), ("square_sum", 2)):
            if getattr(wanted, name) is not None:
                near = 20 * EPS * scale**power
                np.testing.assert_allclose(getattr(found, name), getattr(wanted, name), rtol=0, atol=near)
        for name in ("line_mean", "line_inverse_scale"):
            if getattr(wanted, name) is not None:
                assert_close(*(np.concatenate(getattr(sums, name)) for sums in (found, wanted)), SHAPE[1], EPS)
        if wanted.line_constant is not None:
            assert found.line_constant is not None
            np.testing.assert_array_equal(np.concatenate(found.line_constant), np.concatenate(wanted.line_constant))
            assert np.concatenate(found.line_constant)[[6, 7] if axis == 1 else [2, 7]].all()


@pytest.mark.usefixtures("cuts")
@pytest.mark.parametrize("center", [False, True])
@pytest.mark.parametrize("code", ["i1", "u2", "i4", "f4", "c8"])
def test_whole_numbers_add_up_exactly(code: str, center: bool, tmp_path: Path) -> None:
    lines = sparse_lines("i1", (200, 40), 0.15)
    values = np.abs(lines.data).astype(code)
    values = values + values[::-1] * np.complex64(1j) if code == "c8" else values
    lines = csr_array((values, lines.indices, lines.indptr), shape=lines.shape)
    wide = wide_type(code)
    shift = (np.arange(40) % 7 * (2 - 1j if code == "c8" else 1)).astype(wide) if center else None
    made = Preparation(True, center=center, scale=False, shift=shift)
    block = (np.arange(40 * 3).reshape(40, 3) % 11 - 5).astype(wide)
    done = run(reader_of(lines, 0, 33), made, wide, block, tmp_path)
    entries = lines.toarray().astype(wide) - (shift if shift is not None else 0)
    tall = entries @ block
    assert done.tall is not None
    assert done.sums.line_sum is not None
    np.testing.assert_array_equal(done.tall, tall)
    np.testing.assert_array_equal(done.sums.products, tall.conj().T @ entries)
    np.testing.assert_array_equal(done.sums.line_sum, entries.sum(axis=0))
    assert done.sums.energy == (np.abs(entries) ** 2).sum()


def test_a_constant_line_that_is_centred_becomes_zero_exactly(tmp_path: Path) -> None:
    lines = sparse_lines("f8", SHAPE, filled=True)
    for kind in ("lines", "centred_lines"):
        done = run(
            reader_of(lines, 0),
            preparation(kind, lines),
            np.dtype(float),
            columns_of("f8", 23, np.dtype(float)),
            tmp_path,
        )
        assert done.tall is not None
        assert not done.tall[[6, 7]].any()
        assert done.tall[[0, 1, 3]].all()


@pytest.mark.parametrize("scale", [False, True])
@pytest.mark.parametrize("code", CODES)
@pytest.mark.parametrize("most", [None, 1, 50])
def test_statistics_of_lines_count_their_zeros(
    code: str, scale: bool, most: int | None, monkeypatch: pytest.MonkeyPatch
) -> None:
    if most is not None:
        monkeypatch.setattr(implicit, "PIECE_NONZEROS", most)
    for share in (0.0, 0.1, 0.9):
        lines = sparse_lines(code, (40, 30), share, filled=share > 0)
        found, wanted = sparse_statistics(lines, scale=scale), line_statistics(lines.toarray(), scale=scale)
        assert_close(found.mean, wanted.mean + wanted.rest, 30, EPS)
        np.testing.assert_allclose(found.inverse_scale, wanted.inverse_scale, rtol=30 * EPS)
        np.testing.assert_array_equal(found.constant, wanted.constant)
        if share:
            assert found.mean[6] == lines.toarray()[6, 0]


def test_pieces_cover_every_line_once_within_their_size() -> None:
    random = np.random.default_rng(1)
    for most in (1, 5, 17, 400):
        pointers = np.concatenate([[0], np.cumsum(random.integers(0, 9, 50))])
        runs = list(pieces(pointers, most))
        assert [first for first, _ in runs] == [0, *(stop for _, stop in runs[:-1])]
        assert runs[-1][1] == 50
        assert all(pointers[stop] - pointers[first] <= most or stop == first + 1 for first, stop in runs)
    assert list(pieces(np.zeros(1, int), 5)) == []


def test_rounding_of_single_is_measured_on_the_first_unit_of_sampled_panels(tmp_path: Path) -> None:
    lines, single = sparse_lines("f4", (90, 40), 0.3), np.dtype(np.float32)
    block = columns_of("f4", 40, single, 3)
    for kind in KINDS:
        made = preparation(kind, lines)
        sums = sweep(task_of(reader_of(lines, 0, 10), made, single, block, sampled=frozenset({1, 4, 7}))).sums
        measured, exact = sums.rounding, prepared(lines.toarray(), 0, made)
        assert measured is not None
        np.testing.assert_array_equal(measured[0], 3)
        assert sums.unit_energies is not None
        assert sums.unit_energies[0] == 9
        tall, product = np.zeros(3), np.zeros(3)
        for panel in (1, 4, 7):
            at = slice(10 * panel, 10 * panel + 10)
            part = csr_array(lines[at])
            one = run(reader_of(part, 0, 10), made, single, block, tmp_path)
            wanted = exact[at] @ block.astype(float)
            assert one.tall is not None
            assert one.sums.products is not None
            tall += np.sum((one.tall - wanted) ** 2, axis=0)
            product += np.sum((one.sums.products.T - exact[at].T @ wanted) ** 2, axis=0)
        # The unit alone, computed the same way: what differs is the rounding of the reference.
        np.testing.assert_allclose(measured[1], tall, rtol=1e-6)
        np.testing.assert_allclose(measured[2], product, rtol=1e-6)


def test_the_ledger_is_the_sum_of_values_places_and_pointers() -> None:
    lines = sparse_lines("u2", (50, 31))
    reader = reader_of(lines, 0, 7)
    sums = sweep(task_of(reader, Preparation(True, False, False), np.dtype(float), None)).sums
    expected = []
    for start in range(0, 50, 7):
        part = SparseInMemory(lines).read_lines(start, min(start + 7, 50))
        words = []
        for array in (part.data, part.indices.astype("i4"), part.indptr.astype("i4")):
            raw = array.tobytes()
            words += [int.from_bytes(raw[i : i + 8], "little") for i in range(0, len(raw), 8)]
        expected.append(sum(words) % 2**64)
    assert sums.ledger == expected


@pytest.mark.parametrize("change", ["value", "place", "line"])
def test_a_value_that_changes_or_moves_changes_the_word_of_its_panel_alone(change: str) -> None:
    lines = sparse_lines("f4", (40, 12), 0.4)
    other = csr_array((lines.data.copy(), lines.indices.copy(), lines.indptr.copy()), shape=lines.shape)
    first = int(lines.indptr[25])
    if change == "value":
        other.data[first] = np.nextafter(other.data[first], np.float32(99))
    elif change == "place":
        free = sorted(set(range(12)) - set(lines.indices[first : lines.indptr[26]]))[0]
        other.indices[first] = free
    else:
        other.indptr[26] -= 1
    plain = Preparation(True, center=False, scale=False)
    words = [
        sweep(task_of(reader_of(m, 0, 10), plain, np.dtype(float), None)).sums.ledger or [] for m in (lines, other)
    ]
    assert [a == b for a, b in zip(*words, strict=True)] == [True, True, False, True]


@pytest.mark.parametrize("axis", [0, 1])
@pytest.mark.parametrize("kind", ["both", "lines", "plain"])
def test_nan_and_infinity_are_counted_exactly_and_the_first_is_placed(axis: int, kind: str) -> None:
    lines = sparse_lines("f4", (200, 30))
    made = preparation(kind, lines)
    bad = lines.indptr[[31, 60, 150, 199]]
    lines.data[bad] = [np.nan, np.inf, -np.inf, np.nan]
    lines.data[bad[0] + 1] = np.inf
    place = (31, int(lines.indices[bad[0]]))
    for segments in (1, 4):
        sums = sweep(
            task_of(reader_of(lines, axis, 13), made, np.dtype(float), columns_of("f8", 30, np.dtype(float))),
            segments=segments,
        ).sums
        assert sums.bad == 5
        assert sums.first_bad == (
            place
            if axis == 0
            else min(
                (int(lines.indices[i]), int(np.searchsorted(lines.indptr, i, "right")) - 1) for i in [*bad, bad[0] + 1]
            )
        )


def test_products_of_a_mean_that_single_cannot_hold_are_noticed() -> None:
    # Entries of 1e30 about their mean of 1e30: their energy is fine, the products of what is stored are not.
    dense = np.full((40, 20), 1e30, "f4")
    lines = csr_array(dense)
    made = Preparation(True, center=True, scale=False, shift=dense[0].astype(float))
    block = np.full((20, 2), 1e9, "f4")
    sums = sweep(task_of(reader_of(lines, 0), made, np.dtype("f4"), block)).sums
    assert sums.energy == 0
    assert sums.overflow


def test_integers_beyond_what_double_holds_are_noticed() -> None:
    lines = sparse_lines("i8", SHAPE)
    plain = Preparation(True, center=False, scale=False)
    assert not sweep(task_of(reader_of(lines, 0), plain, np.dtype(float), None)).sums.beyond
    lines.data[5] = 2**53 + 1
    assert sweep(task_of(reader_of(lines, 0), plain, np.dtype(float), None)).sums.beyond


@pytest.mark.usefixtures("cuts")
def test_bits_do_not_depend_on_the_workers(tmp_path: Path) -> None:
    lines = sparse_lines("f4", (300, 50))
    made, work = preparation("both", lines), np.dtype(np.float32)
    block = columns_of("f4", 50, work)
    found = []
    for workers in (1, 2, 5):
        task = task_of(reader_of(lines, 0, 11), made, work, block, sampled=frozenset({0, 3}))
        found.append(sweep(task, segments=6, workers=workers).sums)
    for other in found[1:]:
        for name, value in vars(found[0]).items():
            np.testing.assert_array_equal(getattr(other, name), value, err_msg=name)


def test_long_places_are_shortened_and_read_once_for_each_panel() -> None:
    source = SparseInMemory(sparse_lines("f4", SHAPE), long_places=True)
    reader = PanelReader(source, replace(reader_of(source.lines, 0).geometry), Control())
    panel = reader.fetch(2, reader.buffer())
    assert panel.indices.dtype == panel.indptr.dtype == np.int32  # type: ignore[union-attr]
    assert source.reads == [(18, 27)]
    assert reader.control.bytes_read == 9 * 23 * 4

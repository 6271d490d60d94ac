"""Whole runs on panels without zeros: true certificates, memory as planned, the same bits, runs that go on."""

from __future__ import annotations

import json
import re
import subprocess
import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import table
from line_samples import SparseInMemory, sparse_lines
from scipy.sparse import csr_array

import bigsvd
from bigsvd.errors import MemoryCeilingError, NonFiniteError, OptionError
from bigsvd.sweep import Progress

MIB = 2**20
SPARSE: dict[str, Any] = {"route": "krylov", "products": "sparse", "memory": "1GiB"}


def planted_lines(code: str, shape: tuple[int, int], share: float, seed: int, offset: float = 0.0) -> csr_array:
    """Some directions that stand out of random entries, empty lines and places, and an offset of what is stored."""
    lines = sparse_lines("c16" if np.dtype(code).kind == "c" else "f8", shape, share, seed, filled=bool(seed % 2))
    random = np.random.default_rng(seed + 1000)
    rows = np.repeat(np.arange(shape[0]), np.diff(lines.indptr))
    left, right = random.standard_normal((shape[0], 4)), random.standard_normal((4, shape[1]))
    weight = np.array([9.0, 5.0, 3.0, 2.0])
    lines.data += ((left * weight)[rows] * right.T[lines.indices]).sum(axis=1) + offset
    if np.dtype(code).kind in "iu":
        lines.data = np.clip(np.round(lines.data * 3), 0, 250)
    values = lines.data.astype(code)
    # Lines of one number stay what they are for.
    values[lines.indptr[7] : lines.indptr[8]] = 0
    return csr_array((values, lines.indices, lines.indptr), shape=shape)


def check(lines: csr_array, axis: int, **options: Any) -> Any:
    """Decompose, and compare with LAPACK."""
    factors = bigsvd.decompose(SparseInMemory(lines, axis), axis=("rows", "columns")[axis], **(SPARSE | options))
    stored = lines.toarray() if axis == 0 else lines.toarray().T
    samples = stored if options.get("samples", "rows") == "rows" else stored.T
    preparation = (options.get("center", "features"), options.get("scale", "none"))
    table.assert_factors_true(factors, table.truth_of(samples, preparation))
    assert all(check.within_bounds for check in factors.certificate.slices)
    return factors


@pytest.mark.parametrize("samples", ["rows", "columns"])
@pytest.mark.parametrize("axis", [0, 1])
@pytest.mark.parametrize(
    "preparation", [("none", "none"), ("features", "none"), ("none", "unit"), ("features", "unit")]
)
@pytest.mark.parametrize("code", ["f8", "u2", "c16", "f4"])
def test_certificates_hold_however_the_matrix_is_prepared(
    code: str, preparation: tuple[str, str], axis: int, samples: str
) -> None:
    lines = planted_lines(code, (260, 70), 0.15, 3)
    center, scale = preparation
    check(lines, axis, samples=samples, center=center, scale=scale, rank=6, panel_lines=13)


@pytest.mark.parametrize("seed", range(24))
def test_certificates_hold_for_random_sparse_matrices(seed: int) -> None:
    random = np.random.default_rng(seed)
    shape = int(random.integers(40, 400)), int(random.integers(12, 120))
    share, offset = random.choice([0.01, 0.05, 0.3, 0.9]), random.choice([0.0, 10.0, 1e4, 1e7])
    lines = planted_lines(random.choice(["f8", "c16"]), shape, share, seed, offset)
    check(
        lines, seed % 2, rank=int(random.integers(1, 9)), panel_lines=int(random.integers(3, 40)),
        center=random.choice(["features", "none"]), scale=random.choice(["unit", "none"]),
        samples=random.choice(["rows", "columns"]), tolerance=random.choice([1e-2, 1e-6]), seed=seed,
    )  # fmt: skip


@pytest.mark.parametrize("code", ["u2", "i1", "f4"])
@pytest.mark.parametrize("samples", ["rows", "columns"])
def test_certificates_hold_in_single(code: str, samples: str) -> None:
    lines = planted_lines(code, (900, 150), 0.05, 5)
    factors = check(lines, 0, samples=samples, rank=4, panel_lines=40, precision="single", tolerance=1e-2)
    assert factors.attributes["precision"] == "single"


def test_products_with_and_without_zeros_give_the_same_factors() -> None:
    lines = planted_lines("f8", (300, 80), 0.1, 2)
    options = {"rank": 3, "panel_lines": 20, "tolerance": 1e-9, "scale": "unit"}
    sparse = check(lines, 0, **options)
    dense = check(lines, 0, **options, products="dense")
    np.testing.assert_allclose(sparse.singular_values, dense.singular_values, rtol=1e-12)
    np.testing.assert_allclose(sparse.column_mean, dense.column_mean, rtol=1e-12, atol=1e-13)
    np.testing.assert_allclose(sparse.column_scale, dense.column_scale, rtol=1e-12)
    assert sparse.attributes["preparation"] == dense.attributes["preparation"]
    reasons = [dict(factors.attributes["plan"]["reasons"])["products"] for factors in (sparse, dense)]
    assert "without their zeros" in reasons[0]
    assert "with their zeros" in reasons[1]


def test_a_matrix_of_few_panels_takes_its_first_mean_from_one() -> None:
    lines = planted_lines("f8", (300, 80), 0.1, 2, 1e3)
    for scale in ("none", "unit"):
        assert check(lines, 0, rank=3, panel_lines=60, scale=scale).attributes["plan"]["pilot_panels"] == 1


def test_a_held_matrix_is_read_once() -> None:
    source = SparseInMemory(planted_lines("f8", (400, 80), 0.1, 2))
    # As if it lay in a file: nothing of it is held by the source.
    source.spec = replace(source.spec, held_bytes=0)
    factors = bigsvd.decompose(source, rank=3, panel_lines=20, tolerance=1e-9, **SPARSE)
    assert factors.attributes["plan"]["resident"]
    assert factors.attributes["sweeps"] > 1
    swept = [read for read in source.reads if read[1] - read[0] == 20]
    assert set(swept) == {(first, first + 20) for first in range(0, 400, 20)}
    # The pilot's panel, and those of every sweep but the first, are not read again.
    assert len(swept) <= 20 + factors.attributes["plan"]["pilot_panels"]


def test_nan_is_named_by_row_and_column() -> None:
    lines = planted_lines("f8", (300, 80), 0.1, 2)
    place = int(lines.indptr[123])
    lines.data[place] = np.nan
    for axis in (0, 1):
        with pytest.raises(NonFiniteError) as refused:
            bigsvd.decompose(SparseInMemory(lines, axis), rank=3, **SPARSE)
        row, column = (123, int(lines.indices[place])) if axis == 0 else (int(lines.indices[place]), 123)
        assert f"row {row}, column {column}" in refused.value.evidence[0]


@pytest.mark.parametrize("precision", ["single", "double"])
def test_the_number_of_workers_changes_no_bit(precision: str) -> None:
    lines = planted_lines("f4", (700, 90), 0.08, 4)
    options = {"rank": 4, "panel_lines": 23, "precision": precision, "scale": "unit"}
    found = [bigsvd.decompose(SparseInMemory(lines), workers=workers, **options, **SPARSE) for workers in (1, 2)]
    for name in ("left_vectors", "right_vectors", "singular_values"):
        np.testing.assert_array_equal(getattr(found[0], name)[:], getattr(found[1], name)[:])
    np.testing.assert_array_equal(found[0].certificate.upper, found[1].certificate.upper)


def test_verification_sweeps_without_zeros_too(tmp_path: Path) -> None:
    lines = planted_lines("u2", (600, 90), 0.08, 4)
    source = SparseInMemory(lines)
    for samples in ("rows", "columns"):
        factors = bigsvd.decompose(source, rank=3, samples=samples, scale="unit", axis="rows", **SPARSE)
        source.reads.clear()
        seen = bigsvd.verify(factors, source)
        assert seen.agrees, seen.checks
        assert source.reads
        lines.data[len(lines.data) // 2] += 150
        assert not bigsvd.verify(factors, source).agrees
        lines.data[len(lines.data) // 2] -= 150


def test_products_without_zeros_are_refused_where_there_are_none_to_leave_out() -> None:
    with pytest.raises(OptionError, match="--products sparse does not suit"):
        bigsvd.forecast(np.ones((50, 20)), rank=2, products="sparse")
    with pytest.raises(OptionError, match="--products sparse does not suit"):
        bigsvd.forecast(SparseInMemory(sparse_lines("f4", (50, 20))), rank=2, products="sparse", axis="columns")
    with pytest.raises(OptionError, match="is not a choice"):
        bigsvd.forecast(SparseInMemory(sparse_lines("f4", (50, 20))), rank=2, products="none")


# ------------------------------------------------------------------------------------------------------------ going on
class Cut(BaseException):
    """Ends a run in the middle, as a lost machine would."""


def cut_at(sweep: int, share: float) -> Callable[[Progress], None]:
    def listen(event: Progress) -> None:
        if event.sweep == sweep and event.bytes_done >= share * event.bytes_total:
            raise Cut

    return listen


@pytest.mark.parametrize("sweep", [1, 2])
@pytest.mark.parametrize("precision", ["single", "double"])
@pytest.mark.parametrize("samples", ["rows", "columns"])
def test_a_run_that_was_cut_goes_on_with_the_same_bits(
    samples: str, precision: str, sweep: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("bigsvd.plan.geometry.WAVE_SECONDS", 1e-9)
    monkeypatch.setattr("bigsvd.journal.journal.WORTH_KEEPING", 0.0)
    monkeypatch.setattr("bigsvd.journal.journal.SHARE_OF_TIME", 1e9)
    source = SparseInMemory(planted_lines("f4", (900, 90), 0.08, 4))
    source.spec = replace(source.spec, fingerprint="as it was")
    options = SPARSE | {
        "rank": 6, "panel_lines": 20, "precision": precision, "samples": samples, "axis": "rows", "save_every": 0.0,
        "tolerance": 1e-5, "scale": "unit",
    }  # fmt: skip
    whole = bigsvd.decompose(source, tmp_path / "whole.zarr", **options)
    assert whole.attributes["sweeps"] >= 2
    with pytest.raises(Cut):
        bigsvd.decompose(source, tmp_path / "out.zarr", progress=cut_at(sweep, 0.6), **options)
    source.reads.clear()
    gone_on = bigsvd.decompose(source, tmp_path / "out.zarr", **options)
    assert gone_on.attributes["resumed"] == 1
    for name in ("left_vectors", "right_vectors", "singular_values", "column_mean", "column_scale"):
        np.testing.assert_array_equal(getattr(gone_on, name)[:], getattr(whole, name)[:])
    for name in ("lower", "upper", "residual", "rounding"):
        np.testing.assert_array_equal(getattr(gone_on.certificate, name), getattr(whole.certificate, name))


# -------------------------------------------------------------------------------------------------------------- memory
# 200,000 × 20,000 with 0.5 % stored, 16 GB with its zeros; in a process of its own. Lines repeat those of a small
# matrix, scaled, so that nothing of its size is ever there.
MEASURED = """
import json, re, sys
sys.path.insert(0, sys.argv[1])
import numpy as np
from scipy.sparse import csr_array
import bigsvd
from bigsvd.source import MatrixSpec
LINES, ACROSS, BASE, EACH = 200_000, 20_000, 4_000, 100
random = np.random.default_rng(1)
places = np.sort((random.permutation(ACROSS)[:EACH][None, :] + random.integers(0, ACROSS, (BASE, 1))) % ACROSS, axis=1)
values = (1 + random.poisson(3, (BASE, EACH)) + 20 * (places < 40)).astype(np.float32)
class Repeated:
    spec = MatrixSpec('invented', (LINES, ACROSS), np.dtype('f4'), (BASE, ACROSS), 'sparse', nonzeros=LINES * EACH,
                      compressed_axis=0)
    def lines(self, first, stop):
        lines = np.arange(first, stop)
        scale = (1 + (lines // BASE) % 3).astype(np.float32)
        return values[lines % BASE] * scale[:, None], places[lines % BASE].astype(np.int32)
    def read_lines(self, first, stop):
        data, at = self.lines(first, stop)
        pointers = np.arange(0, data.size + 1, EACH, dtype=np.int32)
        return csr_array((data.ravel(), at.ravel(), pointers), shape=(stop - first, ACROSS))
    def lines_nonzeros(self, first, stop):
        return (stop - first) * EACH
    def read(self, rows, columns, out):
        out[...] = self.read_lines(*rows)[:, columns[0]:columns[1]].toarray()
    def close(self):
        pass
factors = bigsvd.decompose(Repeated(), **json.loads(sys.argv[2]))
status = open('/proc/self/status').read()
facts = {name: factors.attributes[name] for name in ('planned_bytes', 'memory_bytes', 'plan', 'matrix_bytes', 'sweeps')}
facts |= {'peak': int(re.search(r'VmHWM:\\s+(\\d+)', status)[1]) * 1024, 'met': factors.certificate.tolerance_met}
print(json.dumps(facts))
"""
linux = pytest.mark.skipif(
    not Path("/proc/self/status").exists(), reason="no /proc: the kernel's record cannot be read"
)
# What the invented source itself holds: 4,000 × 100 places in 64 bit, values, and copies while it is made.
SOURCE_BYTES = 24 * MIB


@linux
@pytest.mark.parametrize(
    "options", [{"precision": "double", "scale": "unit"}, {"precision": "single", "samples": "columns"}]
)
def test_memory_is_as_planned_for_a_matrix_that_could_never_be_held_with_its_zeros(options: dict[str, Any]) -> None:
    asked = {"rank": 3, "max_sweeps": 1, "memory": "400MiB", "route": "krylov", "axis": "rows"} | options
    words = [sys.executable, "-c", MEASURED, str(Path(__file__).parent), json.dumps(asked)]
    done = subprocess.run(words, capture_output=True, text=True, timeout=240, check=False)
    assert done.returncode == 0, done.stderr
    facts = json.loads(done.stdout)
    assert facts["matrix_bytes"] >= 35 * facts["memory_bytes"]
    assert "without their zeros" in dict(facts["plan"]["reasons"])["products"]
    peak, planned, ceiling = (facts[name] / MIB for name in ("peak", "planned_bytes", "memory_bytes"))
    terms = "\n".join(f"{size / MIB:9.1f} MiB  {what}" for size, what in facts["plan"]["memory"])
    assert peak - SOURCE_BYTES / MIB <= planned <= ceiling, f"{peak:.0f}, {planned:.0f}, {ceiling:.0f} MiB\n{terms}"


def test_too_little_memory_for_lines_that_are_stored_along_the_short_side_names_both_ways_out() -> None:
    lines = csr_array(sparse_lines("f4", (30, 40_000), 0.01))
    source = SparseInMemory(lines, axis=1)  # 40,000 rows, stored by columns
    assert source.spec.shape == (40_000, 30)
    source.spec = replace(source.spec, shape=(4_000_000, 300), chunks=(4_000_000, 1))
    source.lines_nonzeros = lambda first, stop: 40_000 * (stop - first)  # type: ignore[method-assign]
    with pytest.raises(MemoryCeilingError) as refused:
        bigsvd.forecast(source, rank=20, memory="512MiB")
    assert re.search(r"--memory to \d+MiB", refused.value.remedy)
    assert "X.tocsr()" in refused.value.remedy
    assert any("stored by columns" in line for line in refused.value.evidence)

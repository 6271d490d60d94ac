"""Whole runs of sparse matrices, in every layout, against LAPACK on the dense matrix; and the commands on a file."""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest
import scipy.sparse
import table

import bigsvd

# Layouts are written by the tests of sources.
sys.path.insert(0, str(Path(__file__).parents[1] / "source"))
from sparse_samples import LAYOUTS, anndata_hdf5, sample

CEILING, RANK = "1GiB", 5
SHAPE = (240, 61)


def counts() -> scipy.sparse.csr_array:
    """Whole numbers, a fifth of them not zero, the first rows larger so that leading values stand apart."""
    matrix = sample("f8", SHAPE)
    return scipy.sparse.csr_array(matrix * (1 + 20 / (1 + np.arange(SHAPE[0])))[:, np.newaxis])


@pytest.mark.parametrize("layout", [name for name in LAYOUTS if "library" not in name])
def test_every_layout_has_the_values_of_the_dense_matrix(tmp_path: Path, layout: str) -> None:
    matrix = counts()
    path, name = LAYOUTS[layout](tmp_path / "a", matrix)
    for center, truth in (
        ("features", table.truth_of(matrix.toarray(), table.CENTRED)),
        ("none", table.truth_of(matrix.toarray())),
    ):
        factors = bigsvd.decompose(path, matrix=name, rank=RANK, center=center, tolerance=1e-8, memory=CEILING)
        assert factors.certificate.tolerance_met
        np.testing.assert_allclose(factors.singular_values[:], truth.values[:RANK], rtol=1e-8)
        table.assert_factors_true(factors, truth)


@pytest.mark.parametrize("axis", ["rows", "columns"])
@pytest.mark.parametrize("form", ["csr", "csc"])
def test_rows_and_columns_sweep_either_way(form: str, axis: str) -> None:
    matrix = counts()
    factors = bigsvd.decompose(
        matrix.asformat(form), rank=RANK, axis=axis, route="krylov", panel_lines=9, memory=CEILING, tolerance=1e-6
    )
    table.assert_factors_true(factors, table.truth_of(matrix.toarray(), table.CENTRED))


def test_values_agree_with_those_of_scipy() -> None:
    """An outside reference that never makes the matrix dense: ARPACK by scipy.sparse.linalg.svds."""
    matrix = counts()
    start = np.random.default_rng(1).standard_normal(min(SHAPE))
    wanted = np.sort(scipy.sparse.linalg.svds(matrix, RANK, v0=start, tol=1e-12)[1])[::-1]
    found = bigsvd.decompose(matrix, rank=RANK, center="none", memory=CEILING, tolerance=1e-8)
    np.testing.assert_allclose(found.singular_values[:], wanted, rtol=1e-9)


def test_the_commands_list_plan_and_decompose_a_sparse_file(
    tmp_path: Path, command: Callable[..., subprocess.CompletedProcess[str]]
) -> None:
    path, _ = anndata_hdf5("csr", chunks=(100,), compression="gzip")(tmp_path / "cells", counts())
    listed = command("inspect", path)
    assert "1 array, 1 matrix that can be decomposed" in " ".join(listed.stdout.split())
    assert "sparse by rows" in " ".join(listed.stdout.split())
    planned = command("plan", path, "--rank", 3, "--json", "--quiet")
    source = json.loads(planned.stdout)["source"]
    assert source["storage"] == "sparse"
    assert source["nonzeros"] == counts().nnz
    assert source["compressed_axis"] == 0
    done = command("decompose", path, "--rank", 3, "--out", tmp_path / "out.zarr", "--json", "--quiet")
    assert done.returncode == 0, done.stderr
    found = json.loads(done.stdout)
    assert found["source"]["nonzeros"] == counts().nnz
    exact = table.truth_of(counts().toarray(), table.CENTRED).values[:3]
    np.testing.assert_allclose(found["singular_values"], exact, rtol=1e-3)
    verified = command("verify", tmp_path / "out.zarr", path, "--quiet")
    assert verified.returncode == 0, verified.stdout + verified.stderr


def test_a_square_group_runs_with_the_format_given(
    tmp_path: Path, command: Callable[..., subprocess.CompletedProcess[str]]
) -> None:
    matrix = sample("f8", (50, 50))
    with h5py.File(tmp_path / "a.h5", "w") as file:
        for name in ("data", "indices", "indptr"):
            file[f"x/{name}"] = getattr(matrix, name)
        file["x"].attrs["shape"] = matrix.shape
    line = ("decompose", tmp_path / "a.h5", "--rank", 3, "--out", tmp_path / "out.zarr", "--json", "--quiet")
    refused = command(*line)
    assert refused.returncode == 2
    assert "Add --sparse-format csr" in json.loads(refused.stdout)["error"]["remedy"]
    done = command(*line, "--sparse-format", "csr")
    assert done.returncode in (0, 3), done.stderr
    exact = table.truth_of(matrix.toarray(), table.CENTRED).values[:3]
    np.testing.assert_allclose(json.loads(done.stdout)["singular_values"], exact, rtol=1e-2)


MEASURE = """
import sys
import bigsvd
factors = bigsvd.decompose(sys.argv[1], rank=4, memory="512MiB", route="krylov", workers=2, max_sweeps=2)
record = factors.attributes
print(record["peak_resident_bytes"], record["planned_bytes"], record["memory_bytes"], record["matrix_bytes"])
"""


@pytest.mark.skipif(sys.platform != "linux", reason="the peak is measured on Linux only")
def test_a_matrix_that_would_be_larger_than_the_ceiling_is_never_held_dense(tmp_path: Path) -> None:
    rows, columns, each = 60_000, 4_000, 40
    random = np.random.default_rng(1)
    stride = columns // each
    with h5py.File(tmp_path / "a.h5", "w") as file:
        group = file.create_group("X")
        group.attrs.update({"encoding-type": "csr_matrix", "shape": (rows, columns)})
        places = np.arange(each) * stride + random.integers(0, stride, (rows, each))
        options = {"chunks": (50_000,), "compression": "gzip", "compression_opts": 1}
        group.create_dataset("data", data=random.poisson(2.0, places.size).astype("f4") + 1, **options)
        group.create_dataset("indices", data=places.astype("i4").ravel(), **options)
        group["indptr"] = np.arange(rows + 1) * each
    done = subprocess.run(
        [sys.executable, "-c", MEASURE, str(tmp_path / "a.h5")], capture_output=True, text=True, timeout=300
    )
    assert not done.returncode, done.stderr
    peak, planned, ceiling, dense = map(int, done.stdout.split())
    assert dense > 1.5 * ceiling
    assert peak <= planned <= ceiling

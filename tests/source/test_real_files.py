"""Files that other programs wrote open, or are refused in words; nothing else escapes, not even a warning."""

from __future__ import annotations

import csv
from functools import lru_cache
from pathlib import Path

import h5py
import numpy as np
import pytest
import scipy.sparse
from source_samples import read_whole

from bigsvd.errors import BigsvdError, DamagedSourceError, UnsupportedMatrixError
from bigsvd.source import check_complete, open_source, survey

FOLDER = Path(__file__).parents[2].parent / "shared" / "data"
MISSING = "real files: no folder shared/data beside the checkout"


@lru_cache
def files() -> tuple[str, ...]:
    if not (FOLDER / "index.csv").exists():
        return ()
    with (FOLDER / "index.csv").open(encoding="utf-8", newline="") as table:
        return tuple(sorted({row["path"] for row in csv.DictReader(table)}))


@pytest.mark.parametrize("room", sorted({path.split("/")[0] for path in files()}) or ["none"])
def test_real_files_open_or_are_refused_in_words(room: str) -> None:
    if not files():
        pytest.skip(MISSING)
    refusals: list[tuple[str, BigsvdError]] = []
    for path in files():
        if path.split("/")[0] != room:
            continue
        try:
            found = survey(FOLDER / "files" / path)
        except BigsvdError as error:
            refusals.append((path, error))
            continue
        for candidate in found[:60]:
            assert candidate.usable or candidate.reason, path
            try:
                source = open_source(FOLDER / "files" / path, candidate.path or None)
                check_complete(source)
            except BigsvdError as error:
                refusals.append((path, error))
                continue
            assert candidate.usable, f"{path}: {candidate.path} was opened although {candidate.reason}"
            if source.spec.decoded_bytes < 2e7 and source.spec.unfolding is None:
                values = read_whole(source)
                # By columns, the lists are those of the transpose by rows.
                by_lines = values.T if source.spec.compressed_axis == 1 else values
                compare_with_h5py(FOLDER / "files" / path, candidate.path, by_lines)
            source.close()
    assert not [path for path, error in refusals if not error.remedy]


def as_complex(values: np.ndarray) -> np.ndarray:
    names = values.dtype.names
    return values[names[0]] + 1j * values[names[1]] if names else values


def sparse_by_scipy(group: h5py.Group, shape: tuple[int, int]) -> np.ndarray:
    """The three lists put together by SciPy; MATLAB leaves two out where nothing is stored."""
    names = ("data", "ir", "jc") if "jc" in group else ("data", "indices", "indptr")
    if "data" not in group:
        return np.zeros(shape)
    parts = [as_complex(group[name][...]) for name in names]
    return np.asarray(scipy.sparse.csr_array((parts[0], *(part.astype("i8") for part in parts[1:])), shape).toarray())


def compare_with_h5py(path: Path, inside: str, values: np.ndarray) -> None:
    """The plainest reading that h5py offers, as the outside reference."""
    if path.is_dir() or not h5py.is_hdf5(path):
        return
    with h5py.File(path, "r") as file:
        if isinstance(file[inside], h5py.Group):
            wanted = sparse_by_scipy(file[inside], values.shape)
        else:
            wanted = as_complex(file[inside][...])
    assert np.array_equal(values, wanted.astype(values.dtype), equal_nan=values.dtype.kind in "fc"), (path, inside)


@pytest.mark.parametrize(
    ("path", "matrix", "error", "words"),
    [
        ("hdf5-readers/jamesmudd+jhdf/jhdf/src/test/resources/hdf5/tiny_huge_1d_over_maxint.hdf5", None, None, "1-D"),
        ("matlab-v73/JuliaIO+MAT.jl/test/big_endian.mat", None, UnsupportedMatrixError, "MATLAB v5"),
        (
            "biom-cool/biocore+biom-format/biom/tests/test_data/no-contents.biom",
            None,
            UnsupportedMatrixError,
            "0 bytes",
        ),
        ("biom-cool/biocore+biom-format/examples/min_sparse_otu_table.biom", None, UnsupportedMatrixError, "JSON text"),
        ("zarr-v2v3/zarrs+zarrs/zarrs/tests/data/hierarchy.zarr", "a/foo", DamagedSourceError, "100 of 100 chunks"),
        ("zarr-v2v3/zarrs+zarrs/zarrs/tests/data/codec/bitround/bitround_float32.zarr", None, None, "bitround"),
        ("zarr-v2v3/zarrs+zarrs/zarrs/tests/data/v3/array_optional.zarr", "array", UnsupportedMatrixError, "optional"),
        (
            "biom-cool/biocore+biom-format/biom/tests/test_data/empty.biom",
            "sample/matrix",
            UnsupportedMatrixError,
            "it is empty",
        ),
    ],
)
def test_known_traps_are_named(path: str, matrix: str | None, error: type[BigsvdError] | None, words: str) -> None:
    if not files():
        pytest.skip(MISSING)
    with pytest.raises(error or BigsvdError) as caught:
        check_complete(open_source(FOLDER / "files" / path, matrix))
    assert words in str(caught.value)


def test_a_loom_matrix_of_zeros_opens_with_samples_in_columns() -> None:
    if not files():
        pytest.skip(MISSING)
    source = open_source(FOLDER / "files" / "loom/linnarsson-lab+loompy/test.loom", "matrix")
    assert source.spec.shape == (20, 200)
    assert source.spec.samples_hint == "columns"
    assert not read_whole(source).any()


def test_a_folder_with_both_descriptions_opens_as_the_newer() -> None:
    if not files():
        pytest.skip(MISSING)
    source = open_source(FOLDER / "files" / "zarr-v2v3/zarrs+zarrs/zarrs/tests/data/v3/array_blosc.zarr")
    assert "Zarr v3" in source.spec.encoding
    assert "a .zarray lies beside it" in source.spec.encoding

"""Every real file opens or is refused as the index beside this file says, and every known trap is named as such."""

from __future__ import annotations

import csv
from pathlib import Path

import pytest
from real_index import INDEX, outcome, paths

from bigsvd.adapt import open_adapted
from bigsvd.errors import BigsvdError
from bigsvd.source import check_complete, find_names, open_source

# What is said of each trap of the folder's own list: words of the refusal, or of what is known of the matrix.
TRAPS = {
    ("tiny_huge_1d_over_maxint.hdf5", "huge_1d"): "1-D, and a matrix has 2 axes",
    ("bitshuffle.h5", "/entry/data/data"): "3-D, and nothing says which of its axes are the samples",
    ("float.h5", "/float16"): "opens as float16",
    ("float.h5", "/longdouble"): "opens as float64; entries stored as float128 are read in double precision",
    ("float.h5", "/quadprecision"): "Insufficient precision in available types",
    ("compound-dtype-complex.h5", ""): "100 complex128: 1-D",
    (
        "20171025_2056.Cloud_Top_Height.nc",
        "/HT",
    ): "_Unsigned true, scale_factor 0.3052037, _FillValue -1 (read as 65535)",
    ("big_endian.mat", ""): 'MATLAB v5; save it again in MATLAB with save(…, "-v7.3")',
    ("no-contents.biom", ""): "it is empty (0 bytes)",
    ("min_sparse_otu_table.biom", ""): "it looks like JSON text",
    ("empty.biom", ""): "0 × 0 float64: it is empty",
    ("test.loom", "/matrix"): "samples columns",
    ("test_10X_cellranger3.h5", "/matrix"): "sparse by rows, 1,405 entries (14.1 %)",
    ("adata.h5ad", "/raw.X"): "sparse by rows, 174,400 entries (32.6 %)",
    ("test_odd_datasets_latest.hdf5", "/8D_int16"): "8-D, and nothing says which of its axes are the samples",
    ("array_blosc.zarr", ""): "described by zarr.json; a .zarray lies beside it",
    ("hierarchy.zarr", "a/foo"): "100 of 100 chunks are absent",
    ("bitround_float32.zarr", ""): "bitround",
    ("array_optional.zarr", "array"): "the type 'optional'",
    ("image-04.zarr", ""): "nothing says which of its axes are the samples",
}


def expected() -> dict[str, str]:
    with INDEX.open(encoding="utf-8", newline="") as table:
        return {row["path"]: row["outcome"] for row in csv.DictReader(table)}


@pytest.mark.parametrize("room", sorted({path.split("/")[0] for path in expected()}))
def test_every_real_file_ends_as_the_index_says(shared_data: Path, room: str) -> None:
    wanted = {path: words for path, words in expected().items() if path.split("/")[0] == room}
    found = {path: outcome(shared_data / "files" / path) for path in wanted}
    assert found == wanted, "print the index anew: python tests/adapt/real_index.py FOLDER"


def test_the_index_has_every_file_of_the_folder(shared_data: Path) -> None:
    assert sorted(expected()) == paths(shared_data)


def test_every_known_trap_is_named_for_what_it_is(shared_data: Path) -> None:
    with (shared_data / "traps.csv").open(encoding="utf-8", newline="") as table:
        rows = [(row["path"], inside) for row in csv.DictReader(table) for inside in row["dataset"].split() or [""]]
    assert sorted((Path(path).name, inside) for path, inside in rows) == sorted(TRAPS)
    missing = []
    for path, inside in rows:
        said = told(shared_data / "files" / path, inside)
        if TRAPS[Path(path).name, inside] not in said:
            missing.append((path, inside, said))
    assert not missing


def told(path: Path, inside: str) -> str:
    """What a user is told of a matrix."""
    try:
        source = open_adapted(path, inside or None)
        check_complete(source)
    except BigsvdError as error:
        return str(error)
    spec = source.spec
    words = [f"opens as {spec.dtype}", *spec.cautions, spec.decoded, spec.encoding, f"samples {spec.samples_hint}"]
    source.close()
    return "; ".join(words)


def test_names_and_layouts_of_real_files_are_found(shared_data: Path) -> None:
    files = shared_data / "files"
    cells = open_source(files / "loom/linnarsson-lab+loompy/test.loom").spec
    assert (cells.layout, cells.samples_hint) == ("Loom", "columns")
    assert (cells.row_names.count, cells.column_names.count) == (20, 200)
    old = open_source(files / "h5ad/scverse+anndata/tests/data/archives/v0.5.0/adata.h5ad", "X").spec
    assert (old.layout, old.samples_hint, old.row_names.count, old.column_names.count) == ("AnnData", "rows", 700, 765)
    assert len([name for block in old.row_names.blocks() for name in block if name]) == 700
    for version in ("v0.7.0", "v0.7.8"):
        for kind in ("adata.h5ad", "adata.zarr.zip"):
            path = files / "h5ad/scverse+anndata/tests/data/archives" / version / kind
            spec = open_source(path, "layers/array").spec
            assert (spec.layout, spec.samples_hint) == ("AnnData", "rows"), path
            names = [name for block in spec.row_names.blocks() for name in block]
            assert len(names) == spec.shape[0], path
            assert all(names), path
    for kind in ("adata.h5ad", "adata.zarr.zip"):
        path = files / "h5ad/scverse+anndata/tests/data/archives/v0.11.4" / kind
        names = [name for block in find_names(path, "obs").blocks() for name in block]
        assert names, path
        assert all(names), path

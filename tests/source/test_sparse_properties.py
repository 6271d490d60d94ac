"""Any sparse matrix, with empty lines, entries out of order and several of one place, reads as its dense sum."""

from __future__ import annotations

import tempfile
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from bigsvd.source import check_complete, open_source
from bigsvd.source.sparse_source import SparseSource

Entries = list[tuple[int, int, int]]


@st.composite
def matrices(draw: Any) -> tuple[tuple[int, int], Entries]:
    """A shape, and entries (row, column, value) in any order; a place may come several times."""
    shape = draw(st.tuples(st.integers(1, 12), st.integers(1, 12)))
    places = st.tuples(st.integers(0, shape[0] - 1), st.integers(0, shape[1] - 1), st.integers(-9, 9))
    return shape, draw(st.lists(places, max_size=60))


def write(path: Path, shape: tuple[int, int], entries: Entries, axis: int, chunk: int, width: str) -> None:
    """Lists of a group in the order of the entries, line by line."""
    ordered = sorted(entries, key=lambda entry: entry[axis])
    pointers = np.searchsorted([entry[axis] for entry in ordered], np.arange(shape[axis] + 1))
    with h5py.File(path, "w") as file:
        group = file.create_group("X")
        group.attrs.update({"encoding-type": f"{('csr', 'csc')[axis]}_matrix", "shape": shape})
        lists = {
            "data": np.array([value for *_, value in ordered], "f8"),
            "indices": np.array([entry[1 - axis] for entry in ordered], width),
            "indptr": pointers.astype(width),
        }
        for name, values in lists.items():
            group.create_dataset(
                name, data=values, chunks=(min(chunk, values.size),) if chunk and values.size else None
            )


@settings(max_examples=60, deadline=None)
@given(matrices(), st.integers(0, 1), st.integers(0, 9), st.sampled_from(["i4", "i8", "u8"]), st.data())
def test_any_sparse_matrix_reads_as_its_dense_sum(
    matrix: tuple[tuple[int, int], Entries], axis: int, chunk: int, width: str, data: st.DataObject
) -> None:
    shape, entries = matrix
    dense = np.zeros(shape)
    for row, column, value in entries:
        dense[row, column] += value
    rows = sorted(data.draw(st.tuples(*[st.integers(0, shape[0])] * 2)))
    columns = sorted(data.draw(st.tuples(*[st.integers(0, shape[1])] * 2)))
    with tempfile.TemporaryDirectory() as folder:
        write(Path(folder) / "a.h5", shape, entries, axis, chunk, width)
        source = open_source(Path(folder) / "a.h5")
        assert isinstance(source, SparseSource)
        check_complete(source)
        out = np.full((rows[1] - rows[0], columns[1] - columns[0]), 7.0)
        source.read((rows[0], rows[1]), (columns[0], columns[1]), out)
        assert np.array_equal(out, dense[rows[0] : rows[1], columns[0] : columns[1]])
        first, stop = (rows, columns)[axis]
        lines = source.read_lines(first, stop)
        assert lines.has_canonical_format
        assert np.array_equal(lines.toarray(), (dense, dense.T)[axis][first:stop])
        assert source.lines_nonzeros(0, shape[axis]) == source.spec.nonzeros == len(entries)
        source.close()

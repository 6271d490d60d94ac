"""Sparse matrices of SciPy in memory: referred to where they are CSR or CSC, else converted once and said so."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.sparse
from source_samples import read_panels, read_whole, same
from sparse_samples import SHAPE, sample

from bigsvd.errors import DamagedSourceError, OptionError, UnsupportedMatrixError
from bigsvd.source import Access, check_complete, open_source, sparse_memory


@pytest.mark.parametrize("make", [scipy.sparse.csr_array, scipy.sparse.csc_matrix, scipy.sparse.csc_array])
def test_csr_and_csc_are_read_where_they_lie(make: Any) -> None:
    matrix = make(sample())
    source = open_source(matrix)
    check_complete(source)
    assert source.spec.compressed_axis == ("csr", "csc").index(matrix.format)
    assert source.spec.held_bytes == 8 * (SHAPE[source.spec.compressed_axis] + 1)
    assert not source.spec.cautions
    assert not source.spec.fingerprint
    assert same(read_panels(source, 13, 9), matrix.toarray())
    matrix.data[:] = 3
    assert set(np.unique(read_whole(source))) == {0, 3}


@pytest.mark.parametrize("form", ["coo", "bsr", "lil", "dok"])
def test_other_formats_are_converted_once_and_counted(form: str) -> None:
    matrix = sample("f8").asformat(form)
    source = open_source(matrix)
    assert source.spec.nonzeros == sample().nnz
    assert source.spec.held_bytes > 12 * sample().nnz
    assert f"converted from {form} to csr" in source.spec.cautions[0]
    assert same(read_whole(source), sample("f8").toarray())


def test_a_large_matrix_of_another_format_is_left_to_the_caller(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sparse_memory, "MOST_CONVERTED", 1000)
    with pytest.raises(UnsupportedMatrixError, match="of the format coo must be converted") as caught:
        open_source(sample().tocoo())
    assert "matrix.tocsr()" in caught.value.remedy


def test_what_is_no_matrix_is_refused() -> None:
    with pytest.raises(UnsupportedMatrixError, match="it is empty"):
        open_source(scipy.sparse.csr_array((0, 4)))
    with pytest.raises(UnsupportedMatrixError, match="1-D, and a matrix has 2 axes"):
        open_source(scipy.sparse.coo_array(np.arange(4.0)))
    with pytest.raises(OptionError, match="is csr, but --sparse-format is csc"):
        open_source(sample(), access=Access(sparse_format="csc"))


def test_lists_that_contradict_each_other_are_refused() -> None:
    short, fallen, outside = sample(), sample(), sample()
    short.data = short.data[:-3]
    with pytest.raises(DamagedSourceError, match="contradict each other"):
        open_source(short)
    fallen.indptr[9] = 0
    with pytest.raises(DamagedSourceError, match="row 8 begins at entry"):
        open_source(fallen)
    outside.indices[50] = 47
    with pytest.raises(DamagedSourceError, match="entry 50: column 47"):
        read_whole(open_source(outside))

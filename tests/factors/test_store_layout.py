"""How a result is cut into files, and what that costs."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bigsvd.factors.layout import plan_chunk, plan_grid, store_cost

MIB = 2**20


@given(st.integers(1, 10**10), st.integers(1, 2_000), st.sampled_from([4, 8, 16]))
def test_chunks_hold_whole_rows_of_every_component_in_few_files(rows, rank, itemsize):
    grid = plan_grid(rows, rank, itemsize)
    assert grid.files <= 400
    assert grid.chunks * grid.chunk_rows >= rows
    assert (grid.chunks - 1) * grid.chunk_rows < rows
    assert grid.chunk_rows * rank * itemsize <= 64 * MIB
    if grid.chunks > 1:
        assert grid.chunk_rows * rank * itemsize >= 15.9 * MIB


@given(st.integers(1, 10**10), st.integers(1, 10**10), st.integers(1, 1_000), st.sampled_from(["f4", "f8", "c16"]))
def test_a_store_has_under_a_thousand_files_at_any_size(rows, columns, rank, dtype):
    assert store_cost((rows, columns), rank, np.dtype(dtype)).files < 1_000


def test_a_hundred_million_rows_take_under_a_thousand_files_and_330_mib_to_write():
    cost = store_cost((10**8, 10**5), 500, np.dtype("float64"))
    assert cost.files < 1_000
    assert cost.memory_bytes < 330 * MIB
    assert cost.disk_bytes >= 10**8 * 500 * 8


@pytest.mark.parametrize("length", [1, 5_000, 10**8])
def test_arrays_of_one_dimension_take_at_most_twenty_files(length):
    assert 1 <= -(-length // plan_chunk(length, 16)) <= 20

"""Names in a result: written in chunks, verified, shown by xarray as labels, left out with a remark where they fail."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray
from factor_samples import Sample

from bigsvd.errors import DamagedResultError, SourceChangedError
from bigsvd.factors import FactorsWriter, open_factors, plan_names
from bigsvd.factors import layout as store_layout

SAMPLE = Sample(rows=60, columns=12)


class Given:
    """Names in blocks of a size of their own."""

    def __init__(self, names: list[str], size: int = 7, error: Exception | None = None) -> None:
        self.names, self.size, self.error = names, size, error
        self.count, self.words = len(names), "a test"

    def blocks(self) -> Iterator[list[str]]:
        for start in range(0, self.count, self.size):
            yield self.names[start : start + self.size]
        if self.error is not None:
            raise self.error


CELLS = [f"cell {number}" for number in range(60)]
GENES = ["TBCE", "TBCE", "潮", "", "a\x1b[31m\n\x00b", *[f"gene {number}" for number in range(7)]]


def write(out: Path | None, cells: Any = None, genes: Any = None) -> tuple[Any, tuple[str, ...]]:
    with FactorsWriter(
        out, shape=SAMPLE.shape, rank=SAMPLE.rank, dtype=SAMPLE.dtype, sample_names=cells, feature_names=genes
    ) as writer:
        writer.write_vectors("left", 0, SAMPLE.left)
        writer.write_vectors("right", 0, SAMPLE.right)
        factors = writer.finish(
            singular_values=SAMPLE.value, column_mean=SAMPLE.mean, column_scale=SAMPLE.scale,
            spectrum=SAMPLE.spectrum, certificate=SAMPLE.certificate, attributes={},
        )  # fmt: skip
        return factors, writer.names_remarks


@pytest.mark.parametrize("on_disk", [True, False])
def test_names_come_back_as_they_were_and_repeats_are_remarked(tmp_path: Path, on_disk: bool) -> None:
    factors, remarks = write(tmp_path / "out.zarr" if on_disk else None, Given(CELLS), Given(GENES))
    if on_disk:
        factors = open_factors(tmp_path / "out.zarr")
    assert list(factors.sample_names[:]) == CELLS
    assert list(factors.sample_names[58:]) == CELLS[58:]
    assert list(factors.feature_names[:]) == GENES
    assert remarks == ("names of features repeat: 11 different ones for 12",)


def test_without_names_a_result_is_what_it_was(tmp_path: Path) -> None:
    factors, remarks = write(tmp_path / "out.zarr")
    assert (factors.sample_names, factors.feature_names, remarks) == (None, None, ())
    assert not (tmp_path / "out.zarr" / "row_name").exists()


def test_xarray_shows_names_as_labels_without_a_warning(tmp_path: Path) -> None:
    write(tmp_path / "out.zarr", Given(CELLS), Given(GENES))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        night = xarray.open_zarr(tmp_path / "out.zarr")
    assert set(night.coords) == {"row_name", "column_name"}
    assert set(night.left_vectors.coords) == {"row_name"}
    assert set(night.right_vectors.coords) == set(night.column_mean.coords) == {"column_name"}
    # Selecting by label is what labels are for (xarray documentation, Dataset.set_index).
    one = night.left_vectors.load().set_index(row="row_name").sel(row="cell 7")
    np.testing.assert_array_equal(one, SAMPLE.left[7])


def test_bytes_that_are_no_text_are_written_by_number_and_that_is_said(tmp_path: Path) -> None:
    factors, remarks = write(tmp_path / "out.zarr", Given(["G\udce4rten", *CELLS[1:]]))
    assert factors.sample_names[:1][0] == "G\\xe4rten"
    assert remarks == ("names of samples: 1 is no UTF-8; their bytes are written by number, such as \\xe4",)


def test_names_that_fail_are_left_out_and_the_result_stands(tmp_path: Path) -> None:
    gone = SourceChangedError("names.txt changed while it was being read")
    factors, remarks = write(tmp_path / "out.zarr", Given(CELLS, error=gone), Given(GENES))
    assert factors.sample_names is None
    assert list(factors.feature_names[:]) == GENES
    assert remarks[0] == "names of samples are not in the result: names.txt changed while it was being read"
    assert not (tmp_path / "out.zarr" / "row_name").exists()
    assert set(xarray.open_zarr(tmp_path / "out.zarr").coords) == {"column_name"}
    assert open_factors(tmp_path / "out.zarr").rank == SAMPLE.rank


def test_more_text_than_was_planned_is_not_held(tmp_path: Path) -> None:
    million = Given(["x" * 1_000_000] * 60, size=1)
    factors, remarks = write(tmp_path / "out.zarr", million)
    assert factors.sample_names is None
    assert remarks == ("names of samples are not in the result: 5 of them have more than 4 MiB of text",)
    few = Given([*GENES[:-1], "y" * 1_000_000])
    assert write(None, None, few)[0].feature_names[11:][0] == "y" * 1_000_000


def test_a_name_that_was_changed_on_the_disk_is_damage(tmp_path: Path) -> None:
    write(tmp_path / "out.zarr", Given(CELLS))
    (chunk,) = (tmp_path / "out.zarr" / "row_name").glob("c.*")
    found = bytearray(chunk.read_bytes())
    found[len(found) // 2] ^= 1
    chunk.write_bytes(found)
    with pytest.raises(DamagedResultError, match="row_name"):
        open_factors(tmp_path / "out.zarr")


def test_what_the_device_gives_back_is_compared_with_what_was_written(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("bigsvd.factors.writer.names_digest", lambda array: "other")
    with pytest.raises(DamagedResultError, match="row_name: what was read back is not what was written"):
        write(tmp_path / "out.zarr", Given(CELLS))


def test_chunks_are_whole_few_and_their_memory_is_planned(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(store_layout, "_CHUNK_NAMES", 8)
    factors, _ = write(tmp_path / "out.zarr", Given(CELLS), Given(GENES))
    assert factors.sample_names.chunks == (8,)
    assert list(factors.sample_names[:]) == CELLS
    monkeypatch.undo()
    for count in (1, 20_000, 1_000_000, 10**9):
        cost = plan_names(count)
        assert -(-count // cost.chunk) <= 20
        assert cost.memory_bytes >= 4 * cost.text_bytes + 8 * count

"""Names go from the file into the result whatever axis holds the samples, within the memory that was planned."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest

import bigsvd

MANY = 1_000_000


def planted(rows: int, columns: int) -> np.ndarray:
    """Invented: one feature far stronger than the others."""
    values = np.random.default_rng(3).normal(size=(rows, columns))
    values[:, 2] *= 30
    return values


@pytest.mark.parametrize("axis", ["rows", "columns"])
@pytest.mark.parametrize("turned", [False, True])
def test_names_follow_their_axis_into_the_result(tmp_path: Path, turned: bool, axis: str) -> None:
    cells, genes = [f"cell {number}" for number in range(60)], [f"gene {number}" for number in range(9)]
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["x"] = planted(60, 9).T if turned else planted(60, 9)
        file["cells"], file["genes"] = np.array(cells, object), np.array(genes, object)
    factors = bigsvd.decompose(tmp_path / "a.h5", tmp_path / "o.zarr", matrix="x", rank=2, axis=axis)
    assert factors.attributes["preparation"]["samples"] == ("columns" if turned else "rows")
    assert list(factors.sample_names[:]) == cells
    assert list(factors.feature_names[:]) == genes
    strongest = factors.strongest_features(3)
    assert strongest[0][0][0] == "gene 2"
    assert [len(one) for one in strongest] == [3, 3]
    right = factors.right_vectors[:]
    for component, one in enumerate(strongest):
        order = np.argsort(-np.abs(right[:, component]), kind="stable")[:3]
        assert one == [(genes[row], right[row, component]) for row in order]


def test_no_name_is_read_before_the_factors_are_there(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from bigsvd.source.hdf5_names import Hdf5Names

    seen: list[str] = []
    opened = Hdf5Names.opened
    monkeypatch.setattr(Hdf5Names, "opened", lambda self: (seen.append(self.inside), opened(self))[1])
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["x"] = planted(60, 9)
        file["genes"] = np.array([f"gene {number}" for number in range(9)], object)
    assert bigsvd.forecast(tmp_path / "a.h5", matrix="x", rank=2).plan.feature_names is not None
    bigsvd.decompose(
        tmp_path / "a.h5", matrix="x", rank=2, progress=lambda event: seen.append(event.stage), planned=lambda _: None
    )
    assert seen.index("/genes") > max(place for place, what in enumerate(seen) if what in ("sweep", "slices"))
    assert seen.count("/genes") == 1


def test_the_plan_counts_what_writing_names_holds(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", (2_000_000, 4), "f4", chunks=(50_000, 4), fillvalue=1)
        file.create_dataset("cells", (2_000_000,), "S8", chunks=(50_000,))
    named = bigsvd.forecast(tmp_path / "a.h5", matrix="x", rank=2, absent="fill").plan
    with h5py.File(tmp_path / "a.h5", "r+") as file:
        del file["cells"]
    bare = bigsvd.forecast(tmp_path / "a.h5", matrix="x", rank=2, absent="fill").plan
    assert (named.sample_names is not None, bare.sample_names) == (True, None)
    # 100,000 names a chunk: text of 256 bytes each in four copies, and 24 bytes for each of all names.
    assert named.result_bytes - bare.result_bytes == 4 * 256 * 100_000 + 24 * 2_000_000


def test_the_user_overrules_the_file_and_names_stay_with_their_axis(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["x"] = planted(60, 9)
        file["genes"] = np.array([f"gene {number}" for number in range(60)], object)
    factors = bigsvd.decompose(tmp_path / "a.h5", matrix="x", rank=2, samples="rows")
    assert "--samples rows was given; the file says that samples are its columns" in factors.attributes["remarks"][0]
    assert factors.sample_names[0] == "gene 0"
    assert factors.feature_names is None
    assert factors.strongest_features() is None


def test_the_result_says_how_the_file_was_understood(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.loom", "w") as file:
        file["matrix"] = planted(60, 9).T
        file["row_attrs/Gene"] = np.array(["a", "a", *"bcdefgh"], object)
        file["col_attrs/CellID"] = np.array([f"cell {number}" for number in range(60)], object)
    factors = bigsvd.decompose(tmp_path / "a.loom", rank=2)
    assert factors.attributes["preparation"]["understood"] == [
        "taken for Loom (row_attrs and col_attrs beside matrix)",
        "samples are its columns by the file: Loom layout: the columns of the matrix are samples",
        "names: samples by col_attrs/CellID, features by row_attrs/Gene",
    ]
    assert factors.attributes["source"]["row_names"] == "row_attrs/Gene"
    assert "names of features repeat: 8 different ones for 9" in factors.attributes["remarks"]


def test_names_that_are_damaged_after_a_run_began_cost_the_names_and_not_the_run(tmp_path: Path) -> None:
    np.save(tmp_path / "a.npy", planted(60, 9))
    (tmp_path / "n.txt").write_text("x\n" * 60)

    def spoil(forecast: object) -> None:
        (tmp_path / "n.txt").write_text("y\n" * 61)

    factors = bigsvd.decompose(
        tmp_path / "a.npy", tmp_path / "o.zarr", rank=2, row_names=tmp_path / "n.txt", planned=spoil
    )
    assert factors.sample_names is None
    assert any(
        remark.startswith("names of samples are not in the result: ") and "changed while it was being read" in remark
        for remark in factors.attributes["remarks"]
    )


def test_a_million_names_stay_within_the_memory_that_was_planned(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", (MANY, 2), "f4", chunks=(50_000, 2))
        for start in range(0, MANY, 50_000):
            file["x"][start : start + 50_000] = np.random.default_rng(start).normal(size=(50_000, 2))
        file["cells"] = np.char.add(b"barcode-of-a-cell-", np.arange(MANY).astype("S7"))
    code = (
        "import bigsvd, sys\n"
        "factors = bigsvd.decompose(sys.argv[1], sys.argv[2], matrix='x', rank=2, memory='512MiB')\n"
        "facts = factors.attributes\n"
        "print(facts['peak_resident_bytes'], facts['planned_bytes'], facts['memory_bytes'])\n"
        "names = factors.sample_names\n"
        "print(names.shape[0], names.chunks[0], names[0], names[999_999], len(facts['remarks']))\n"
    )
    environment = os.environ | {"PYTHONPATH": str(Path(bigsvd.__file__).parents[1])}
    ended = subprocess.run(
        [sys.executable, "-c", code, tmp_path / "a.h5", tmp_path / "o.zarr"],
        capture_output=True, text=True, check=True, env=environment,
    )  # fmt: skip
    figures, names = ended.stdout.splitlines()
    peak, planned, ceiling = map(int, figures.split())
    assert peak <= planned <= ceiling == 512 * 2**20
    assert names == "1000000 50000 barcode-of-a-cell-0 barcode-of-a-cell-999999 0"

"""What cannot be done is refused before any long work, in words that help, and leaves nothing behind."""

from __future__ import annotations

import os
import re
import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import zarr

import bigsvd
from bigsvd.errors import (
    BigsvdError,
    DamagedSourceError,
    MemoryCeilingError,
    NoMatrixError,
    NonFiniteError,
    OptionError,
    ResultError,
    ResultExistsError,
    SeveralMatricesError,
    UnsupportedMatrixError,
)
from bigsvd.units import parse_bytes

Command = Callable[..., subprocess.CompletedProcess[str]]
CEILING = "1GiB"


def sound(rows: int = 240, columns: int = 60) -> np.ndarray:
    """A matrix that nothing is wrong with."""
    left = np.linspace(0, 3, rows)[:, None] * np.arange(1, columns + 1)
    return np.sin(left) + 0.1 * np.cos(left**1.5)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """One file of every kind that a user may name."""
    with h5py.File(tmp_path / "one.h5", "w") as file:
        file["readings"] = sound()
    with h5py.File(tmp_path / "several.h5", "w") as file:
        file["night/frames"] = sound()
        file["night/background"] = sound(100, 40)
        file["day/frames"] = sound(90, 30)
    with h5py.File(tmp_path / "odd.h5", "w") as file:
        file["line"] = np.arange(50.0)
        file["empty"] = np.zeros((0, 5))
        file["words"] = np.array([[b"tide", b"pool"], [b"night", b"watch"]])
        file["records"] = np.zeros((4, 4), [("depth", "f4"), ("time", "i8")])
        file["number"] = 3.0
        file.create_group("nothing")
    with h5py.File(tmp_path / "bare.h5", "w"):
        pass
    (tmp_path / "notes.txt").write_text("the tide was high\n")
    (tmp_path / "short.h5").write_bytes((tmp_path / "one.h5").read_bytes()[:4000])
    (tmp_path / "zero_bytes.h5").write_bytes(b"")
    array = zarr.create_array(str(tmp_path / "one.zarr"), shape=(240, 60), chunks=(60, 30), dtype="f8")
    array[:] = sound()
    return tmp_path


def contents(folder: Path) -> dict[str, tuple[int, int]]:
    """Every file below a folder with its size and time of change, but for the log, which says why a run ended."""
    return {
        str(path.relative_to(folder)): (path.stat().st_size, path.stat().st_mtime_ns)
        for path in sorted(folder.rglob("*"))
        if not path.is_dir() and path.name != "out.zarr.log"
    } | {str(path.relative_to(folder)) + os.sep: (0, 0) for path in folder.rglob("*") if path.is_dir()}


def refused(error: type[BigsvdError], source: Any, folder: Path, /, **options: Any) -> BigsvdError:
    """Decompose into the folder; the error must be of that class, name a remedy and leave the folder as it was."""
    before = contents(folder)
    options = {"out": folder / "out.zarr", "memory": CEILING} | options
    with pytest.raises(error) as caught:
        bigsvd.decompose(source, **options)
    assert contents(folder) == before, "something was left behind"
    assert caught.value.remedy, f"no remedy: {caught.value}"
    return caught.value


# ------------------------------------------------------------------------------------------------------- the options
BAD_OPTIONS: dict[str, dict[str, Any]] = {
    "rank zero": {"rank": 0},
    "rank negative": {"rank": -3},
    "rank not whole": {"rank": 2.5},
    "rank a word": {"rank": "ten"},
    "rank a truth value": {"rank": True},
    "rank and variance": {"rank": 5, "variance": 0.9},
    "variance zero": {"variance": 0.0},
    "variance negative": {"variance": -0.5},
    "variance above one": {"variance": 1.5},
    "variance in per cent": {"variance": 95},
    "variance not a number": {"variance": float("nan")},
    "largest rank zero": {"max_rank": 0, "variance": 0.9},
    "tolerance zero": {"tolerance": 0.0},
    "tolerance negative": {"tolerance": -1e-3},
    "tolerance not a number": {"tolerance": float("nan")},
    "tolerance infinite": {"tolerance": float("inf")},
    "no sweeps": {"max_sweeps": 0},
    "no workers": {"workers": 0},
    "memory zero": {"memory": 0},
    "memory negative": {"memory": -1},
    "memory a word": {"memory": "plenty"},
    "memory of no known unit": {"memory": "3 buckets"},
    "route unknown": {"route": "fast"},
    "samples unknown": {"samples": "diagonal"},
    "centre unknown": {"center": "samples"},
    "scale unknown": {"scale": "range"},
    "precision unknown": {"precision": "half"},
    "axis unknown": {"axis": "depth"},
    "seed negative": {"seed": -1},
    "panels of no lines": {"panel_lines": 0},
}


@pytest.mark.parametrize("case", BAD_OPTIONS)
def test_a_bad_option_is_refused_and_named(case: str, folder: Path) -> None:
    options = BAD_OPTIONS[case]
    error = refused(OptionError, folder / "one.h5", folder, **options)
    assert isinstance(error, ValueError)
    name = "panel" if "panel_lines" in options else next(iter(options)).replace("_", "-")
    assert name in str(error).replace("_", "-"), f"the option is not named: {error}"


def test_what_was_asked_stands_in_the_message(folder: Path) -> None:
    assert "-3" in str(refused(OptionError, folder / "one.h5", folder, rank=-3))
    assert "1.5" in str(refused(OptionError, folder / "one.h5", folder, variance=1.5))
    assert "plenty" in str(refused(OptionError, folder / "one.h5", folder, memory="plenty"))


def test_a_ceiling_too_small_names_the_least_that_would_do(folder: Path) -> None:
    error = refused(MemoryCeilingError, folder / "one.h5", folder, memory="20MiB", rank=5)
    assert "20 MiB" in str(error)
    assert len(error.evidence) >= 3, "the terms that need the memory are not listed"
    named = re.search(r"--memory to ([0-9.]+[KMG]iB)", error.remedy)
    assert named, f"no size to type in: {error.remedy}"
    least = parse_bytes(named[1])
    assert bigsvd.decompose(folder / "one.h5", rank=5, memory=least).certificate.rank == 5
    refused(MemoryCeilingError, folder / "one.h5", folder, memory=least - (2 << 20), rank=5)


# ------------------------------------------------------------------------------------------------------- the input
def test_a_file_that_is_not_there_is_named(folder: Path) -> None:
    error = refused(NoMatrixError, folder / "gone.h5", folder)
    assert isinstance(error, OSError)
    assert "gone.h5" in str(error)


def test_several_matrices_are_listed_with_their_shapes(folder: Path) -> None:
    text = str(refused(SeveralMatricesError, folder / "several.h5", folder))
    for path, shape in (("night/frames", "240 × 60"), ("night/background", "100 × 40"), ("day/frames", "90 × 30")):
        assert path in text
        assert shape in text


def test_a_group_in_place_of_a_dataset_lists_what_it_holds(folder: Path) -> None:
    text = str(refused(SeveralMatricesError, folder / "several.h5", folder, matrix="night"))
    assert "night/frames" in text
    assert "night/background" in text
    assert "day" not in text
    refused(NoMatrixError, folder / "odd.h5", folder, matrix="nothing")
    refused(NoMatrixError, folder / "bare.h5", folder)


def test_a_path_that_is_not_in_the_file_lists_what_is(folder: Path) -> None:
    text = str(refused(NoMatrixError, folder / "several.h5", folder, matrix="night/frame"))
    assert "night/frame" in text
    assert "day/frames" in text


@pytest.mark.parametrize("name", ["line", "empty", "words", "records", "number"])
def test_what_is_no_matrix_of_numbers_is_refused_by_name(name: str, folder: Path) -> None:
    assert name in str(refused(UnsupportedMatrixError, folder / "odd.h5", folder, matrix=name))


@pytest.mark.parametrize(
    "array",
    [
        *(np.arange(9.0), np.zeros((0, 4)), np.zeros((4, 0)), np.array(3.0), np.zeros((3, 4, 5))),
        *(np.array([["a", "b"]]), np.array([[1, None]], dtype=object), np.zeros((2, 2), "M8[s]")),
    ],
    ids=["1-D", "no rows", "no columns", "scalar", "3-D", "text", "objects", "dates"],
)
def test_an_array_that_is_no_matrix_of_numbers_is_refused(array: np.ndarray, tmp_path: Path) -> None:
    refused(UnsupportedMatrixError, array, tmp_path)


@pytest.mark.parametrize("thing", [None, 3, [[1.0, 2.0], [3.0, 4.0]], {"a": 1}], ids=["none", "number", "list", "dict"])
def test_a_thing_that_is_no_source_is_refused(thing: object, tmp_path: Path) -> None:
    assert type(thing).__name__ in str(refused(UnsupportedMatrixError, thing, tmp_path))


def test_a_file_of_another_kind_is_named_for_what_it_looks_like(folder: Path) -> None:
    assert "text" in str(refused(UnsupportedMatrixError, folder / "notes.txt", folder))
    assert "0 bytes" in str(refused(UnsupportedMatrixError, folder / "zero_bytes.h5", folder))


def test_a_file_cut_short_is_damaged(folder: Path) -> None:
    assert "short.h5" in str(refused(DamagedSourceError, folder / "short.h5", folder))


def test_an_absent_chunk_is_not_taken_for_zeros(folder: Path) -> None:
    next(path for path in (folder / "one.zarr").rglob("*") if path.is_file() and path.name != "zarr.json").unlink()
    assert "one.zarr" in str(refused(DamagedSourceError, folder / "one.zarr", folder, rank=3))


# ------------------------------------------------------------------------------------------------------ NaN, infinity
@pytest.mark.parametrize("samples", ["rows", "columns"])
@pytest.mark.parametrize("axis", ["rows", "columns"])
@pytest.mark.parametrize("route", ["direct", "gram", "tsqr", "krylov"])
def test_nan_is_named_by_row_and_column_of_the_file(route: str, axis: str, samples: str, tmp_path: Path) -> None:
    matrix = sound()
    matrix[201, 41], matrix[225, 55], matrix[239, 59] = np.nan, np.nan, np.nan
    matrix[230, 50], matrix[231, 51] = np.inf, -np.inf
    options = {"route": route, "axis": axis, "samples": samples, "rank": 4, "panel_lines": 12 if axis == "rows" else 4}
    text = str(refused(NonFiniteError, matrix, tmp_path, **options))
    assert re.search(r"row 201\b.{0,12}column 41\b", text), text
    assert re.search(r"\b5 values are NaN or infinite", text), text


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("dtype", ["f2", "f4", "f8", "c8", "c16"])
def test_the_very_last_entry_is_looked_at(dtype: str, bad: float, tmp_path: Path) -> None:
    matrix = sound().astype(dtype)
    matrix[-1, -1] = bad * 1j if dtype == "c16" and np.isnan(bad) else bad
    text = str(refused(NonFiniteError, matrix, tmp_path, rank=3, route="krylov", panel_lines=16, axis="rows"))
    assert re.search(r"row 239\b.{0,12}column 59\b", text), text


def test_a_whole_file_of_nan_is_counted(tmp_path: Path) -> None:
    np.save(tmp_path / "lost.npy", np.full((300, 50), np.nan, np.float32))
    assert "15,000" in str(refused(NonFiniteError, tmp_path / "lost.npy", tmp_path, rank=3))


# -------------------------------------------------------------------------------------------------------- the output
def test_an_output_that_exists_is_left_as_it_is(folder: Path) -> None:
    (folder / "kept.zarr").write_text("years of work")
    refused(ResultExistsError, folder / "one.h5", folder, out=folder / "kept.zarr", rank=3)
    bigsvd.decompose(folder / "one.h5", folder / "first.zarr", rank=3, memory=CEILING)
    refused(ResultExistsError, folder / "one.h5", folder, out=folder / "first.zarr", rank=3)
    assert bigsvd.open_factors(folder / "first.zarr").rank == 3


def test_overwrite_does_not_replace_what_is_no_result(folder: Path) -> None:
    refused(ResultError, folder / "one.h5", folder, out=folder / "notes.txt", rank=3, overwrite=True)


@pytest.mark.parametrize("place", ["one.zarr", "one.zarr/out.zarr"])
def test_an_output_in_or_over_the_input_is_refused_even_with_overwrite(place: str, folder: Path) -> None:
    refused(ResultError, folder / "one.zarr", folder, out=folder / place, rank=3, overwrite=True)


def test_an_output_over_the_input_file_is_refused_even_through_a_link(folder: Path) -> None:
    (folder / "link.h5").symlink_to(folder / "one.h5")
    refused(ResultError, folder / "one.h5", folder, out=folder / "link.h5", rank=3, overwrite=True)


def test_an_output_in_a_folder_that_does_not_exist_is_refused(folder: Path) -> None:
    refused(ResultError, folder / "one.h5", folder, out=folder / "no such folder" / "out.zarr", rank=3)


# -------------------------------------------------------------------------------------------------- the command line
COMMAND_LINES: dict[str, tuple[str, tuple[str, ...]]] = {
    "no input": ("", ()),
    "unknown option": ("one.h5 --fast", ("--fast",)),
    "rank 0": ("one.h5 --rank 0", ("rank", "0")),
    "rank a word": ("one.h5 --rank ten", ("rank", "ten")),
    "rank and variance": ("one.h5 --rank 3 --variance 0.9", ("--rank", "--variance")),
    "variance above one": ("one.h5 --variance 95", ("variance", "95")),
    "tolerance 0": ("one.h5 --tolerance 0", ("tolerance",)),
    "memory too small": ("one.h5 --memory 20MiB", ("20 MiB", "MemoryCeilingError")),
    "memory a word": ("one.h5 --memory plenty", ("plenty",)),
    "route unknown": ("one.h5 --route fast", ("fast", "krylov")),
    "no such file": ("gone.h5", ("gone.h5",)),
    "several matrices": ("several.h5", ("night/frames", "day/frames", "--matrix")),
    "no such matrix": ("several.h5 --matrix dusk", ("dusk", "day/frames")),
    "1-D": ("odd.h5 --matrix line", ("line", "1-D")),
    "empty": ("odd.h5 --matrix empty", ("empty",)),
    "text": ("odd.h5 --matrix words", ("words",)),
    "text file": ("notes.txt", ("notes.txt", "text")),
    "NaN": ("holes.npy --rank 3", ("NaN", "row 7", "column 3")),
}


@pytest.mark.parametrize("case", COMMAND_LINES)
def test_the_command_line_refuses_with_status_2(case: str, folder: Path, command: Command) -> None:
    holes = sound()
    holes[7, 3] = np.nan
    np.save(folder / "holes.npy", holes)
    line, expected = COMMAND_LINES[case]
    words = [str(folder / word) if (folder / word).exists() or word == "gone.h5" else word for word in line.split()]
    before = contents(folder)
    ended = command("decompose", *words, "--out", folder / "out.zarr")
    assert ended.returncode == 2, ended.stderr
    assert "Traceback" not in ended.stderr
    assert ended.stdout.strip() == ""
    for word in expected:
        assert word in ended.stderr, ended.stderr
    assert contents(folder) == before, "something was left behind"


@pytest.mark.parametrize("place", ["kept.zarr", "one.zarr/out.zarr"])
def test_the_command_line_refuses_a_bad_place_for_the_result(place: str, folder: Path, command: Command) -> None:
    (folder / "kept.zarr").mkdir()
    (folder / "kept.zarr" / "notes.txt").write_text("years of work")
    before = contents(folder)
    ended = command("decompose", folder / "one.zarr", "--rank", 3, "--out", folder / place)
    assert ended.returncode == 2, ended.stderr
    assert Path(place).name in ended.stderr
    assert "Traceback" not in ended.stderr
    assert contents(folder) == before


def test_decompose_without_a_place_for_the_result_says_so(folder: Path, command: Command) -> None:
    ended = command("decompose", folder / "one.h5")
    assert ended.returncode == 2
    assert "--out" in ended.stderr

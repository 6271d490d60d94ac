"""What a user sees of layouts and names: inspect, the line it gives, the plan, the report; and nothing obeyed."""

from __future__ import annotations

import json
import shlex
from pathlib import Path

import h5py
import numpy as np
import pytest
from cli_samples import pool, run

import bigsvd

EVIL = "a\x1b]0;owned\x07\x9b31m\u202e"


def write_loom(path: Path, genes: list[str] | None = None) -> Path:
    """A Loom file: genes × cells."""
    with h5py.File(path, "w") as file:
        file["matrix"] = pool(300, 40).T
        file["row_attrs/Gene"] = np.array(genes or [f"gene {number}" for number in range(40)], object)
        file["col_attrs/CellID"] = np.array([f"cell {number}" for number in range(300)], object)
    return path


def test_the_line_that_inspect_gives_runs_and_names_the_features(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    write_loom(Path("night.loom"))
    said = run("inspect", "night.loom").stdout
    assert "Taken for Loom (row_attrs and col_attrs beside matrix): /matrix" in said
    assert "/matrix: names of rows in row_attrs/Gene, of columns in col_attrs/CellID" in said
    (line,) = [line.strip() for line in said.splitlines() if line.startswith("  bigsvd decompose")]
    words = shlex.split(line)
    assert words[-2:] == ["--samples", "columns"]
    ended = run(*words[1:], "--rank", 4, "--quiet")
    assert ended.exit_code == 0, ended.output
    assert "samples: columns (300); features: rows (40); centred per row" in ended.stdout
    assert "taken for Loom (row_attrs and col_attrs beside matrix)" in ended.stdout
    assert "names: samples by col_attrs/CellID, features by row_attrs/Gene" in ended.stdout
    table = ended.stdout.split("Strongest features, with their entries in the right vectors:\n")[1].splitlines()
    assert [line.split()[0] for line in table[:4]] == ["1", "2", "3", "4"]
    factors = bigsvd.open_factors("night_factors.zarr")
    name, value = factors.strongest_features()[0][0]
    assert f"{name} {value:.2f}".replace("-", "−") in table[0]


def test_the_plan_says_what_settled_the_samples_without_being_told(tmp_path: Path) -> None:
    file = write_loom(tmp_path / "night.loom")
    said = " ".join(run("plan", file, "--rank", 3).stdout.split())
    assert "samples are its columns by the file: Loom layout: the columns of the matrix are samples" in said
    found = json.loads(run("plan", file, "--rank", 3, "--json").stdout)
    assert (found["samples"], found["features"]) == (300, 40)
    assert found["source"]["row_names"] == {"count": 40, "words": "row_attrs/Gene", "held": 0}
    overruled = run("plan", file, "--rank", 3, "--samples", "rows").stdout
    assert "remark" in overruled
    assert "--samples rows was given; the file says that samples are its columns" in " ".join(overruled.split())


def test_names_given_on_the_command_line_are_in_the_result_and_in_json(tmp_path: Path) -> None:
    np.save(tmp_path / "a.npy", pool(300, 40))
    (tmp_path / "genes.txt").write_text("".join(f"probe {number}\n" for number in range(40)))
    ended = run(
        *("decompose", tmp_path / "a.npy", "--out", tmp_path / "o.zarr", "--rank", 2, "--quiet", "--json"),
        *("--column-names", tmp_path / "genes.txt"),
    )
    found = json.loads(ended.stdout)
    assert found["source"]["column_names"] == str(tmp_path / "genes.txt")
    assert [len(one) for one in found["strongest_features"]] == [5, 5]
    assert all(one["name"].startswith("probe ") for one in found["strongest_features"][0])
    short = run("plan", tmp_path / "a.npy", "--row-names", tmp_path / "genes.txt")
    assert short.exit_code == 2
    assert "holds 40 names" in short.stderr
    assert "They fit the columns: give them to --column-names." in short.stderr


def test_hostile_names_are_shown_by_number_and_cut_and_kept_whole(tmp_path: Path) -> None:
    evil = [f"{EVIL}{number}" for number in range(39)]
    file = write_loom(tmp_path / "night.loom", [*evil, "z" * 1_000_000])
    out = tmp_path / "o.zarr"
    ended = run("decompose", file, "--out", out, "--rank", 3, "--quiet")
    assert ended.exit_code == 0, ended.output
    for letter in "\x1b\x07\x9b\u202e":
        assert letter not in ended.stdout
    assert "a\\x1b]0;owned\\x07\\x9b31m\\u202e" in ended.stdout
    assert max(map(len, ended.stdout.splitlines())) < 400
    names = bigsvd.open_factors(out).feature_names
    assert names[0] == evil[0]
    assert len(str(names[39])) == 1_000_000
    printed = run("decompose", file, "--out", tmp_path / "p.zarr", "--rank", 3, "--quiet", "--json").stdout
    assert printed.isascii()
    assert "\x1b" not in printed
    assert json.loads(printed)["strongest_features"] is not None


def test_a_level_is_chosen_on_the_command_line(tmp_path: Path) -> None:
    import zarr

    sets = [{"path": str(level)} for level in range(2)]
    group = zarr.create_group(
        tmp_path / "i.zarr", attributes={"ome": {"version": "0.5", "multiscales": [{"datasets": sets}]}}
    )
    for level in range(2):
        group.create_array(str(level), data=pool(300 >> level, 40))
    assert json.loads(run("plan", tmp_path / "i.zarr", "--rank", 2, "--json").stdout)["samples"] == 300
    assert json.loads(run("plan", tmp_path / "i.zarr", "--level", 1, "--rank", 2, "--json").stdout)["samples"] == 150
    refused = run("plan", tmp_path / "i.zarr", "--level", 2)
    assert refused.exit_code == 2
    assert "Give --level 0 to 1." in refused.stderr

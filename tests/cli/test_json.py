"""docs/json.md and what the commands print name the same keys."""

from __future__ import annotations

import json
import re
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from cli_samples import finish, run
from slow_runs import OPTIONS, kept, start, wait_for, write_slope

PAGE = Path(__file__).parents[2] / "docs" / "json.md"


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """A file and its result; not to be changed."""
    return finish(tmp_path_factory.mktemp("finished"))


def documented(command: str) -> set[str]:
    """Keys in the first column of a command's first table."""
    section = PAGE.read_text().split(f"## `bigsvd {command} ", 1)[1].split("\n## ", 1)[0]
    table = section.split("\n\nEach of ")[0]
    return {key for row in re.findall(r"^\| (`.*?) \|", table, re.M) for key in re.findall(r"`(\w+)`", row)}


def printed(*words: object) -> dict[str, Any]:
    ended = run(*words, "--json", "--quiet")
    assert ended.stderr == ""
    assert ended.stdout.count("\n") == 1
    found: dict[str, Any] = json.loads(ended.stdout, parse_constant=lambda word: pytest.fail(f"{word} in JSON"))
    return found


def test_inspect(finished: tuple[Path, Path]) -> None:
    found = printed("inspect", finished[0])
    assert set(found) == documented("inspect")
    section = PAGE.read_text().split("Each of `matrices`:")[1].split("\n## ")[0]
    keys = {key for row in re.findall(r"^\| (`[a-z].*?) \|", section, re.M) for key in re.findall(r"`(\w+)`", row)}
    assert all(set(one) == keys for one in found["matrices"])
    assert [(one["path"], one["usable"]) for one in found["matrices"]] == [
        ("/night/frames", True),
        ("/night/time", False),
    ]


def test_plan(finished: tuple[Path, Path]) -> None:
    found = printed("plan", finished[0], "--rank", 4)
    assert set(found) == documented("plan")
    assert sum(term["size"] for term in found["memory"]) == found["planned_bytes"] <= found["memory_bytes"]


def keys_of(title: str) -> set[str]:
    """Keys in the first column of the table of a section."""
    section = PAGE.read_text().split(f"## `{title}`", 1)[1].split("\n## ", 1)[0]
    return {key for row in re.findall(r"^\| (`[a-z].*?) \|", section, re.M) for key in re.findall(r"`(\w+)`", row)}


def test_a_stopped_run_and_its_status_file(tmp_path: Path) -> None:
    out = tmp_path / "out.zarr"
    process = start("decompose", write_slope(tmp_path / "slope.npy"), "--out", out, "--save-every", 0, *OPTIONS)
    wait_for(process, kept(out, 2))
    process.terminate()
    process.communicate(timeout=30)
    found = printed("plan", tmp_path / "out.zarr.run")
    assert set(found) == keys_of("bigsvd plan OUT.zarr.run --json")
    assert set(found["status"]) == keys_of("OUT.zarr.run/status.json")
    assert found["status"] == json.loads((tmp_path / "out.zarr.run" / "status.json").read_text())
    assert (found["running"], found["pilot"], found["sweep"]) == (False, True, 2)
    assert found["status"]["state"] == "stopped"
    assert found["command"].startswith("bigsvd decompose ")


def test_decompose(finished: tuple[Path, Path], tmp_path: Path) -> None:
    found = printed("decompose", finished[0], "--rank", 4, "--out", tmp_path / "o.zarr")
    assert set(found) == documented("decompose")
    parts = ("lower", "upper", "state", "index_proved", "angle_bound", "share", "tied_first", "null")
    assert {len(found[part]) for part in parts} == {4}


@pytest.mark.parametrize("with_file", [False, True])
def test_verify(finished: tuple[Path, Path], with_file: bool) -> None:
    found = printed("verify", finished[1], *([finished[0]] if with_file else []))
    assert set(found) == documented("verify")
    assert set(found["checks"][0]) == {"name", "found", "allowed", "ok"}


def test_demo(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from bigsvd import demo

    monkeypatch.setattr(demo, "write_demo", partial(demo.write_demo, scale=0.002))
    assert set(printed("demo", tmp_path)) == documented("demo")


def test_complex_and_zero_matrices_hold_no_nan(tmp_path: Path) -> None:
    chance = np.random.default_rng(2)
    np.save(tmp_path / "complex.npy", chance.normal(size=(60, 12)) + 1j * chance.normal(size=(60, 12)))
    np.save(tmp_path / "zero.npy", np.zeros((60, 12)))
    for name in ("complex", "zero"):
        found = printed("decompose", tmp_path / f"{name}.npy", "--rank", 3, "--out", tmp_path / f"{name}.zarr")
        assert found["rank"] == 3

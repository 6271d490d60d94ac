"""The commands on real files, from inspect to verify."""

from __future__ import annotations

import json
import shlex
import shutil
from pathlib import Path

import numpy as np
import pytest
from cli_samples import finish, pool, run

from bigsvd.errors import ResultExistsError


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """A file and its result; not to be changed."""
    return finish(tmp_path_factory.mktemp("finished"))


def test_the_line_that_inspect_prints_works(
    finished: tuple[Path, Path], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    file = tmp_path / "night watch.h5"
    shutil.copy(finished[0], file)
    text = run("inspect", file).stdout
    assert "900 × 70" in text
    assert "1-D, and a matrix has 2 axes" in text
    line = next(line.strip() for line in text.splitlines() if line.strip().startswith("bigsvd decompose"))
    words = shlex.split(line)
    monkeypatch.chdir(tmp_path)
    ended = run(*words[1:], "--rank", 2, "--quiet")
    assert ended.exit_code == 0, ended.output
    assert (tmp_path / words[words.index("--out") + 1] / "zarr.json").exists()


def test_plan_explains_itself_and_writes_nothing(finished: tuple[Path, Path]) -> None:
    before = sorted(finished[0].parent.iterdir())
    text = run("plan", finished[0], "--rank", 4, "--memory", "1GiB").stdout
    for fact in (
        "samples: rows (900); features: columns (70); centred per column",
        "route",
        "in all; the ceiling is 1 GiB",
        "nothing was read for this plan",
    ):
        assert fact in text, text
    assert sorted(finished[0].parent.iterdir()) == before


def test_decompose_finds_what_lapack_finds(finished: tuple[Path, Path], tmp_path: Path) -> None:
    ended = run("decompose", finished[0], "--out", tmp_path / "o.zarr", "--rank", 4, "--json")
    assert ended.exit_code == 0
    found = json.loads(ended.stdout)
    matrix = pool()
    exact = np.linalg.svd(matrix - matrix.mean(axis=0), compute_uv=False)
    np.testing.assert_allclose(found["singular_values"], exact[:4], rtol=1e-9)
    assert np.all(np.array(found["lower"]) <= exact[:4] * (1 + 1e-12))
    assert np.all(exact[:4] * (1 - 1e-12) <= np.array(found["upper"]))
    np.testing.assert_allclose(found["captured_share"], np.sum(exact[:4] ** 2) / np.sum(exact**2), rtol=1e-9)
    assert found["out"] == str(tmp_path / "o.zarr")
    assert found["peak_resident_bytes"] > 0
    # Before the run, the plan in short; then progress; both on standard error.
    assert "samples: rows (900)" in ended.stderr
    assert "sweep 1: " in ended.stderr


def test_the_text_ends_with_the_line_that_opens_the_result(finished: tuple[Path, Path], tmp_path: Path) -> None:
    import xarray

    out = tmp_path / "o.zarr"
    ended = run("decompose", finished[0], "--out", out, "--rank", 4, "--quiet")
    assert ended.exit_code == 0
    assert ended.stderr == ""
    assert "\x1b" not in ended.stdout
    line = ended.stdout.splitlines()[-1].removeprefix("Open it:").strip()
    assert line.startswith("xarray.open_zarr(")
    opened = eval(line, {"xarray": xarray})
    assert opened["left_vectors"].shape == (900, 4)


def test_an_earlier_result_stays_until_overwrite_is_given(finished: tuple[Path, Path], tmp_path: Path) -> None:
    out = tmp_path / "o.zarr"
    words = ("decompose", finished[0], "--out", out, "--quiet", "--json")
    assert run(*words, "--rank", 2).exit_code == 0
    refused = run(*words, "--rank", 3)
    assert refused.exit_code == 2
    assert json.loads(refused.stdout)["error"]["kind"] == ResultExistsError.__name__
    assert json.loads(run(*words, "--rank", 3, "--overwrite").stdout)["rank"] == 3


def test_too_few_sweeps_end_with_3_and_a_result(tmp_path: Path) -> None:
    np.save(tmp_path / "slow.npy", np.random.default_rng(3).normal(size=(3000, 300)))
    words = ("--rank", 20, "--route", "krylov", "--max-sweeps", 1, "--out", tmp_path / "o.zarr")
    ended = run("decompose", tmp_path / "slow.npy", *words)
    assert ended.exit_code == 3, ended.output
    assert "Tolerance 0.001 not met." in " ".join(ended.stdout.split())
    assert (tmp_path / "o.zarr" / "zarr.json").exists()


def test_verify_agrees_with_the_file_and_by_itself(finished: tuple[Path, Path]) -> None:
    file, out = finished
    alone, both = run("verify", out), run("verify", out, file)
    assert (alone.exit_code, both.exit_code) == (0, 0), both.output
    assert both.stdout.splitlines()[-1] == f"{out} agrees with {file}."
    assert alone.stdout.splitlines()[-1].endswith("agrees with itself.")


def test_verify_tells_another_matrix_with_status_3(finished: tuple[Path, Path], tmp_path: Path) -> None:
    matrix = pool()
    matrix[17, 3] += 1.0
    np.save(tmp_path / "other.npy", matrix)
    ended = run("verify", finished[1], tmp_path / "other.npy", "--json")
    assert ended.exit_code == 3, ended.output
    found = json.loads(ended.stdout)
    assert found["agrees"] is False
    assert not all(check["ok"] for check in found["checks"])
    assert "DO NOT AGREE" in run("verify", finished[1], tmp_path / "other.npy").stdout


def test_verify_tells_damage_with_status_3_and_the_part(finished: tuple[Path, Path], tmp_path: Path) -> None:
    damaged = tmp_path / "damaged.zarr"
    shutil.copytree(finished[1], damaged)
    chunk = next(path for path in (damaged / "left_vectors").rglob("*") if path.is_file() and path.name != "zarr.json")
    content = bytearray(chunk.read_bytes())
    content[len(content) // 2] ^= 1
    chunk.write_bytes(content)
    ended = run("verify", damaged)
    assert ended.exit_code == 3
    assert "left_vectors" in ended.stderr


def test_what_is_no_result_cannot_be_verified(finished: tuple[Path, Path], tmp_path: Path) -> None:
    assert run("verify", tmp_path / "gone.zarr").exit_code == 2
    assert run("verify", finished[0]).exit_code == 2


def test_demo_writes_and_says_that_it_is_invented(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from functools import partial

    from bigsvd import demo

    monkeypatch.setattr(demo, "write_demo", partial(demo.write_demo, scale=0.002))
    ended = run("demo", tmp_path / "demo-data")
    assert ended.exit_code == 0, ended.output
    assert ended.stdout.startswith("Invented data.")
    assert "writing night_watch: " in ended.stderr
    for name in ("night_watch.h5", "tide_water.zarr"):
        assert (tmp_path / "demo-data" / name).exists()
        assert f"bigsvd decompose {tmp_path / 'demo-data' / name} --out " in ended.stdout
    (tmp_path / "file").write_text("")
    assert run("demo", tmp_path / "file").exit_code == 2

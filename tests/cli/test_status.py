"""Exit statuses and messages for every way to end, with the work behind them replaced."""

from __future__ import annotations

import errno
import json
import os
import signal
import time
from pathlib import Path
from typing import Any

import pytest
from cli_samples import finish, run

from bigsvd import api, errors
from bigsvd.cli.program import status_of
from bigsvd.cli.stops import Stops

PROBLEM = {"evidence": ["rank 5000"], "remedy": "Try --rank 20."}


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """A file and its result; not to be changed."""
    return finish(tmp_path_factory.mktemp("finished"))


def ending(monkeypatch: pytest.MonkeyPatch, error: BaseException) -> None:
    """Let every command that works end with this error."""

    def fail(*_: Any, **__: Any) -> None:
        raise error

    for name in ("decompose", "forecast", "verify"):
        monkeypatch.setattr(api, name, fail)


@pytest.mark.parametrize(
    ("error", "status"),
    [
        (errors.OptionError, 2),
        (errors.MemoryCeilingError, 2),
        (errors.NoMatrixError, 2),
        (errors.SeveralMatricesError, 2),
        (errors.UnsupportedMatrixError, 2),
        (errors.DamagedSourceError, 2),
        (errors.NonFiniteError, 2),
        (errors.ResultError, 2),
        (errors.ResultExistsError, 2),
        (errors.IncompleteResultError, 2),
        (errors.DiskFullError, 2),
        (errors.OtherRunError, 2),
        (errors.DamagedJournalError, 2),
        (errors.DeadlineError, 1),
        (errors.SourceChangedError, 1),
        (errors.DamagedResultError, 1),
    ],
)
@pytest.mark.parametrize("quiet", [(), ("--quiet",)])
def test_errors_have_a_status_and_their_words(
    error: type[errors.BigsvdError], status: int, quiet: tuple[str, ...], monkeypatch: pytest.MonkeyPatch
) -> None:
    ending(monkeypatch, error("the sea is too deep", **PROBLEM))
    ended = run("decompose", "pool.h5", "--out", "o.zarr", *quiet)
    assert ended.exit_code == status
    assert ended.stdout == ""
    assert ended.stderr == f"{error.__name__}: the sea is too deep\n    rank 5000\nTry --rank 20.\n"


def test_every_class_of_error_has_a_status() -> None:
    waiting, seen = [errors.BigsvdError], 0
    while waiting:
        kind = waiting.pop()
        waiting += kind.__subclasses__()
        assert status_of(kind("x")) in (1, 2)
        seen += 1
    assert seen >= 12


def test_with_json_an_error_is_an_object_too(monkeypatch: pytest.MonkeyPatch) -> None:
    ending(monkeypatch, errors.OptionError("the sea is too deep", **PROBLEM))
    ended = run("plan", "pool.h5", "--json")
    expected = {"kind": "OptionError", "problem": "the sea is too deep", **PROBLEM}
    assert json.loads(ended.stdout) == {"error": expected}
    assert "the sea is too deep" in ended.stderr
    assert ended.exit_code == 2


def test_with_json_wrong_usage_is_an_object_too() -> None:
    ended = run("plan", "pool.h5", "--json", "--rank", "ten")
    assert ended.exit_code == 2
    error = json.loads(ended.stdout)["error"]
    assert "ten" in error["problem"]
    assert error["remedy"] == "bigsvd plan --help"


def test_a_full_disk_is_not_the_users_command_line(monkeypatch: pytest.MonkeyPatch) -> None:
    full = errors.ResultError("the result could not be written", remedy="Make room.")
    full.__cause__ = OSError(errno.ENOSPC, "No space left on device")
    ending(monkeypatch, full)
    assert run("decompose", "pool.h5", "--out", "o.zarr").exit_code == 1
    ending(monkeypatch, OSError(errno.ENOSPC, "No space left on device", "/scratch/y"))
    ended = run("decompose", "pool.h5", "--out", "o.zarr")
    assert ended.exit_code == 1
    assert "No space left on device (/scratch/y). Make room" in ended.stderr


def test_a_fault_of_ours_is_one_line_that_says_how_to_see_more(monkeypatch: pytest.MonkeyPatch) -> None:
    ending(monkeypatch, ZeroDivisionError("division\nby zero"))
    monkeypatch.delenv("BIGSVD_TRACEBACK", raising=False)
    ended = run("decompose", "pool.h5", "--out", "o.zarr")
    assert ended.exit_code == 1
    assert ended.stderr.count("\n") == 1
    assert ended.stderr.startswith("This is a fault of bigsvd: ZeroDivisionError: division by zero.")
    assert "BIGSVD_TRACEBACK=1" in ended.stderr
    monkeypatch.setenv("BIGSVD_TRACEBACK", "1")
    assert "Traceback (most recent call last)" in run("decompose", "pool.h5", "--out", "o.zarr").stderr


def test_no_memory_left_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    ending(monkeypatch, MemoryError())
    ended = run("plan", "pool.h5")
    assert ended.exit_code == 1
    assert "lower --memory" in ended.stderr


@pytest.mark.parametrize(
    ("number", "status", "word"), [(signal.SIGINT, 130, "Interrupted"), (signal.SIGTERM, 143, "Terminated")]
)
def test_a_signal_ends_with_one_line(
    number: signal.Signals, status: int, word: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    def wait(*_: Any, **__: Any) -> None:
        os.kill(os.getpid(), number)
        time.sleep(5)

    before = signal.getsignal(signal.SIGTERM)
    # A test run in the background of a shell inherits Ctrl-C as ignored.
    inherited = signal.signal(signal.SIGINT, signal.default_int_handler)
    monkeypatch.setattr(api, "forecast", wait)
    try:
        ended = run("plan", "pool.h5")
    finally:
        signal.signal(signal.SIGINT, inherited)
    assert ended.exit_code == status
    assert ended.stderr == f"{word}: stopped, and nothing half done was kept.\n"
    assert signal.getsignal(signal.SIGTERM) is before


@pytest.mark.parametrize(("met", "status"), [(True, 0), (False, 3)])
def test_decompose_ends_with_3_where_the_tolerance_was_not_met(
    met: bool, status: int, monkeypatch: pytest.MonkeyPatch, finished: tuple[Path, Path]
) -> None:
    from dataclasses import replace

    factors = api.open_factors(finished[1])
    factors = replace(factors, certificate=replace(factors.certificate, tolerance_met=met))
    monkeypatch.setattr(api, "decompose", lambda *_, **__: factors)
    for form in ((), ("--json",)):
        ended = run("decompose", finished[0], "--out", "o.zarr", "--quiet", *form)
        assert ended.exit_code == status
        assert ended.stderr == ""
        assert ended.stdout


def test_options_reach_the_api_under_their_names(monkeypatch: pytest.MonkeyPatch, finished: tuple[Path, Path]) -> None:
    asked: list[dict[str, Any]] = []

    def note(file: str, out: str, **options: Any) -> Any:
        asked.append(options)
        return api.open_factors(finished[1])

    monkeypatch.setattr(api, "decompose", note)
    run("decompose", "f.h5", "--out", "o.zarr", "--quiet")
    line = (
        "--matrix /a --rank 7 --samples columns --center none --scale unit --tolerance 1e-4 --strict --max-sweeps 3"
        " --memory 2GiB --workers 3 --precision double --route tsqr --axis columns --seed 9 --overwrite --max-rank 9"
        " --start-over --save-every 2.5 --finish-by 8h"
    )
    run("decompose", "f.h5", "--out", "o.zarr", "--quiet", *line.split(), "--variance", "0.5")
    for options in asked:
        assert options.pop("command")[:2] == ["bigsvd", "decompose"]
        assert isinstance(options.pop("progress"), Stops)
        del options["planned"]
    bare, full = asked
    assert bare == {"overwrite": False, "start_over": False}
    assert full == {
        "overwrite": True, "start_over": True, "save_every": 2.5, "finish_by": "8h", "matrix": "/a", "rank": 7,
        "samples": "columns", "center": "none", "scale": "unit",
        "tolerance": 1e-4, "strict": True, "max_sweeps": 3, "memory": "2GiB", "workers": 3, "precision": "double",
        "route": "tsqr", "axis": "columns", "seed": 9, "max_rank": 9, "variance": 0.5,
    }  # fmt: skip


def test_a_scratch_folder_that_is_not_there_is_wrong_usage(finished: tuple[Path, Path], tmp_path: Path) -> None:
    ended = run("decompose", finished[0], "--out", tmp_path / "o.zarr", "--scratch", tmp_path / "gone")
    assert ended.exit_code == 2
    assert "gone" in ended.stderr

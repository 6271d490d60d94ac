"""Ctrl-C, SIGTERM and what they leave: a sentence, an exit status, a run that goes on with the line it prints."""

from __future__ import annotations

import os
import shlex
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest
from cli_samples import run
from slow_runs import OPTIONS, kept, start, wait_for, write_slope

from bigsvd import api
from bigsvd.journal import read_standing

pytestmark = pytest.mark.alone


def digest(out: Path) -> dict[str, bytes]:
    """Every file of a result but the root document, which holds times."""
    return {p.relative_to(out).as_posix(): p.read_bytes() for p in out.rglob("*") if p.is_file() and p.parent != out}


@pytest.mark.parametrize(
    ("number", "status", "word"), [(signal.SIGINT, 130, "Interrupted"), (signal.SIGTERM, 143, "Terminated")]
)
def test_a_stopped_run_says_where_it_stands_and_its_line_goes_on(
    number: signal.Signals, status: int, word: str, tmp_path: Path
) -> None:
    matrix, out = write_slope(tmp_path / "slope.npy"), tmp_path / "out of order.zarr"
    whole = run("decompose", matrix, "--out", tmp_path / "whole.zarr", "--quiet", *OPTIONS)
    process = start("decompose", matrix, "--out", out, "--save-every", 0, *OPTIONS)
    wait_for(process, kept(out, 2))
    process.send_signal(number)
    sent = time.monotonic()
    stdout, stderr = process.communicate(timeout=30)
    # Two workers have a panel of 10 ms each in hand.
    assert time.monotonic() - sent < 5
    assert process.returncode == status
    assert stdout == ""
    said = stderr.splitlines()
    standing = read_standing(tmp_path / "out of order.zarr.run")
    assert standing.sweep == 2
    place = (
        f"wave {standing.waves} of {standing.of} of sweep 2" if standing.waves < standing.of else "the end of sweep 2"
    )
    assert said[-2].startswith(f"{word}: stopped. Kept up to {place}, saved ")
    assert said[-2].endswith(f", in {out}.run. To go on, type:")
    words = shlex.split(said[-1])
    assert words[:2] == ["bigsvd", "decompose"]
    assert not out.exists()
    ended = subprocess.run([sys.executable, "-m", *words], capture_output=True, text=True, check=False, timeout=60)
    # Waves of another length are another plan: this process was not told of short ones.
    assert ended.returncode == 2
    assert "the plan waves: " in ended.stderr
    again = start(*words[1:], pause=0)
    _, told = again.communicate(timeout=60)
    assert again.returncode == whole.exit_code == 0, told
    assert f"going on from {place}, saved " in told
    assert digest(out).keys() == digest(tmp_path / "whole.zarr").keys()
    assert sorted(p.name for p in tmp_path.iterdir() if p.name.startswith("out")) == [out.name, f"{out.name}.log"]


def test_a_second_signal_leaves_at_once_and_loses_nothing_that_was_kept(tmp_path: Path) -> None:
    matrix, out = write_slope(tmp_path / "slope.npy"), tmp_path / "out.zarr"
    process = start("decompose", matrix, "--out", out, "--save-every", 0, *OPTIONS, pause=0.05)
    wait_for(process, kept(out, 1))
    # Stopped, the process takes both signals together when it goes on.
    process.send_signal(signal.SIGSTOP)
    process.send_signal(signal.SIGTERM)
    process.send_signal(signal.SIGINT)
    process.send_signal(signal.SIGCONT)
    sent = time.monotonic()
    process.communicate(timeout=30)
    assert process.returncode in (130, 143)
    assert time.monotonic() - sent < 5
    assert read_standing(tmp_path / "out.zarr.run").sweep == 1
    assert not read_standing(tmp_path / "out.zarr.run").running
    again = start("decompose", matrix, "--out", out, "--save-every", 0, *OPTIONS, pause=0)
    again.communicate(timeout=60)
    assert again.returncode == 0


def test_ctrl_c_that_a_shell_ignores_for_its_background_stays_ignored(tmp_path: Path) -> None:
    matrix, out = write_slope(tmp_path / "slope.npy"), tmp_path / "out.zarr"
    before = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        process = start("decompose", matrix, "--out", out, "--save-every", 0, *OPTIONS, pause=0.004)
    finally:
        signal.signal(signal.SIGINT, before)
    wait_for(process, kept(out, 1))
    process.send_signal(signal.SIGINT)
    process.communicate(timeout=60)
    assert process.returncode == 0


def ask_when(stage: str, number: signal.Signals, monkeypatch: pytest.MonkeyPatch) -> None:
    """Send this process a signal when the run comes to a stage."""
    decompose = api.decompose

    def watched(*words: Any, progress: Any, **options: Any) -> Any:
        sent = []

        def listen(event: Any) -> None:
            progress(event)
            if event.stage == stage and not sent:
                sent.append(os.kill(os.getpid(), number))
                # Handlers run in the main thread, between two of its steps.
                time.sleep(0.05)

        return decompose(*words, progress=listen, **options)

    monkeypatch.setattr(api, "decompose", watched)
    monkeypatch.setattr(signal, "getsignal", lambda number: signal.default_int_handler)


@pytest.mark.parametrize(("number", "status"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_before_anything_is_kept_nothing_is_left(
    number: signal.Signals, status: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    matrix = write_slope(tmp_path / "slope.npy")
    before = [signal.getsignal(each) for each in (signal.SIGINT, signal.SIGTERM)]
    with monkeypatch.context() as patch:
        ask_when("pilot", number, patch)
        ended = run("decompose", matrix, "--out", tmp_path / "out.zarr", "--quiet", *OPTIONS)
    assert ended.exit_code == status, ended.output
    assert ended.stderr.endswith(": stopped. Nothing was kept: there was nothing yet to go on from.\n")
    assert sorted(path.name for path in tmp_path.iterdir()) == ["out.zarr.log", "slope.npy"]
    assert [signal.getsignal(each) for each in (signal.SIGINT, signal.SIGTERM)] == before


def test_while_it_plans_it_stops_at_once(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def wait(*_: Any, **__: Any) -> None:
        os.kill(os.getpid(), signal.SIGTERM)
        time.sleep(5)

    monkeypatch.setattr(api, "make_plan", wait)
    started = time.monotonic()
    ended = run("decompose", write_slope(tmp_path / "slope.npy"), "--out", tmp_path / "out.zarr")
    assert time.monotonic() - started < 4
    assert ended.exit_code == 143
    assert ended.stderr == "Terminated: stopped before the matrix was read.\n"
    assert [path.name for path in tmp_path.iterdir()] == ["slope.npy"]


def test_plan_of_the_folder_tells_where_a_run_stands_and_changes_nothing(tmp_path: Path) -> None:
    matrix, out, folder = write_slope(tmp_path / "slope.npy"), tmp_path / "out.zarr", tmp_path / "out.zarr.run"
    process = start("decompose", matrix, "--out", out, "--save-every", 0, *OPTIONS, pause=0.02)
    wait_for(process, kept(out, 1))
    told = run("plan", folder)
    assert told.exit_code == 0
    assert "a process is at it now" in " ".join(told.stdout.split())
    process.terminate()
    process.communicate(timeout=30)
    before = {path: path.lstat().st_mtime_ns for path in tmp_path.rglob("*")}
    told = run("plan", folder)
    assert {path: path.lstat().st_mtime_ns for path in tmp_path.rglob("*")} == before
    standing = read_standing(folder)
    assert f"wave {standing.waves} of {standing.of} of sweep {standing.sweep}" in " ".join(told.stdout.split())
    assert told.stdout.rstrip().splitlines()[-1].strip().startswith("bigsvd decompose ")
    refused = run("plan", folder, "--rank", 3)
    assert refused.exit_code == 2
    assert "--rank has no meaning" in refused.stderr
    (folder / "identity.json").write_text("tide")
    assert run("plan", folder).exit_code == 2
    gone = run("plan", tmp_path / "other.zarr.run")
    assert gone.exit_code == 2
    assert f"no unfinished run stands at {tmp_path / 'other.zarr.run'}" in gone.stderr


def test_the_log_tells_the_night(tmp_path: Path) -> None:
    matrix, out = write_slope(tmp_path / "slope.npy"), tmp_path / "out.zarr"
    words = ("decompose", matrix, "--out", out, "--save-every", 0, *OPTIONS)
    process = start(*words)
    wait_for(process, kept(out, 2))
    process.terminate()
    process.communicate(timeout=30)
    start(*words, pause=0).communicate(timeout=60)
    lines = [line[27:] for line in (tmp_path / "out.zarr.log").read_text().splitlines()]
    titles = [line.split(":")[0].split("  ")[0] for line in lines]
    stopped = titles.index("stopped")
    assert titles[0] == "began"
    assert "after sweep 1" in titles[:stopped]
    assert titles[stopped + 1 : stopped + 3] == ["kept", "began"]
    assert any(line.startswith("going on from ") for line in lines[stopped:])
    assert titles[-2:] == ["finished", "in place"]
    assert lines[-1] == f"in place: {out}"
    assert shlex.join(["bigsvd", *map(str, words)]) in lines[0]


def test_the_line_to_go_on_does_not_start_over(tmp_path: Path) -> None:
    matrix, out = write_slope(tmp_path / "slope.npy"), tmp_path / "out.zarr"
    process = start("decompose", matrix, "--out", out, "--start-over", "--save-every", 0, *OPTIONS)
    wait_for(process, kept(out, 1))
    process.terminate()
    _, stderr = process.communicate(timeout=30)
    line = stderr.splitlines()[-1]
    assert line.startswith("  bigsvd decompose ")
    assert "--start-over" not in line


def test_a_failure_in_the_middle_says_what_was_kept(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    import errno

    from bigsvd.sweep import Scratch

    matrix, out = write_slope(tmp_path / "slope.npy"), tmp_path / "out.zarr"
    monkeypatch.setattr("bigsvd.plan.geometry.WAVE_SECONDS", 1e-9)
    monkeypatch.setattr("bigsvd.journal.journal.WORTH_KEEPING", 0.0)
    monkeypatch.setattr("bigsvd.journal.journal.SHARE_OF_TIME", 1e9)
    write, calls = Scratch.write, []

    def full(self: Scratch, block: int, start: int, values: Any) -> None:
        calls.append(block)
        # Slices have a scratch of their own; the second block is the run's second sweep.
        if block == 1 and calls.count(1) > 20:
            raise OSError(errno.EIO, "Input/output error", str(self.folder))
        write(self, block, start, values)

    words = ("decompose", matrix, "--out", out, "--save-every", 0, "--quiet", *OPTIONS)
    with monkeypatch.context() as patch:
        patch.setattr(Scratch, "write", full)
        ended = run(*words)
    assert ended.exit_code == 1
    assert "Input/output error" in ended.stderr
    standing = read_standing(tmp_path / "out.zarr.run")
    assert standing.sweep == 2
    assert f"Kept up to wave {standing.waves} of {standing.of} of sweep 2, saved " in ended.stderr
    assert f"To go on, type:\n  {shlex.join(['bigsvd', *map(str, words)])}\n" in ended.stderr
    assert run(*words).exit_code == 0

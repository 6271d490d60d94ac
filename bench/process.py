"""One candidate as a whole process: seconds, processor seconds, peak, under a limit of memory and of time."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

HERE = Path(__file__).parent
# How often the resident size of a running candidate is looked at.
LOOK_SECONDS = 0.02


@dataclass(frozen=True)
class Ended:
    """How a process ended, and what it cost.

    Attributes
    ----------
    seconds, processor_seconds : float
        From start to end; of all its threads, user and system together.
    peak_bytes : int
        Largest resident size by the system's record, mapped files included.
    own_peak_bytes : int
        Largest resident size without mapped files, which the system may take back: looked at 50 times a second.
    told : dict or None
        The JSON object it printed last; None where it failed.
    failure : str
        Why it failed, one line; empty where it did not.
    timed_out : bool
    """

    seconds: float
    processor_seconds: float
    peak_bytes: int
    own_peak_bytes: int
    told: dict[str, Any] | None
    failure: str = ""
    timed_out: bool = False


def run_process(
    words: Sequence[str], *, timeout: float, one_blas_thread: bool = False, script: str = "worker"
) -> Ended:
    """Run ``bench/SCRIPT.py`` with these words in a process of its own, and end it after `timeout` seconds."""
    settings = dict(os.environ)
    if one_blas_thread:
        settings |= {"OPENBLAS_NUM_THREADS": "1", "MKL_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"}
    before, start = os.times(), time.perf_counter()
    process = subprocess.Popen(
        [sys.executable, str(HERE / f"{script}.py"), *words],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=settings,
    )
    looker = _Looker(process.pid)
    timed_out = False
    try:
        out, err = process.communicate(timeout=timeout)
    except subprocess.TimeoutExpired:
        timed_out = True
        process.kill()
        out, err = process.communicate()
    except BaseException:
        process.kill()
        process.wait()
        raise
    finally:
        looker.done.set()
    seconds, after = time.perf_counter() - start, os.times()
    looker.join()
    told = None if process.returncode else _last_json(out)
    failure = ""
    if timed_out:
        failure = f"stopped after {timeout:.0f} s"
    elif told is None:
        killed = process.returncode == -signal.SIGKILL
        words = "killed by the system, which held it to its limit of memory" if killed else ""
        failure = words or (err.strip().splitlines() or [f"exit status {process.returncode}"])[-1]
    peak = max(looker.peak, int(told["peak_bytes"]) if told and "peak_bytes" in told else 0)
    spent = after.children_user - before.children_user + after.children_system - before.children_system
    return Ended(seconds, spent, peak, looker.own_peak, told, failure, timed_out)


class _Looker(threading.Thread):
    """Looks at the resident size of a process until it is told to stop."""

    def __init__(self, process: int) -> None:
        super().__init__(daemon=True)
        self.status = Path(f"/proc/{process}/status")
        self.done = threading.Event()
        self.peak = self.own_peak = 0
        self.start()

    def run(self) -> None:
        while not self.done.wait(LOOK_SECONDS):
            try:
                text = self.status.read_text()
            except OSError:
                return
            found = {key: int(rest.split()[0]) * 1024 for key, rest in _sizes(text)}
            self.peak = max(self.peak, found.get("VmHWM", 0))
            self.own_peak = max(self.own_peak, found.get("RssAnon", 0) + found.get("RssShmem", 0))


def _sizes(text: str) -> list[tuple[str, str]]:
    """Names and values of the sizes in a process's status."""
    pairs = [line.partition(":") for line in text.splitlines()]
    return [(key, rest) for key, _, rest in pairs if key in ("VmHWM", "RssAnon", "RssShmem")]


def _last_json(out: str) -> dict[str, Any] | None:
    """The object in the last line of the output."""
    lines = out.strip().splitlines()
    if not lines or not lines[-1].startswith("{"):
        return None
    found: dict[str, Any] = json.loads(lines[-1])
    return found

"""Command lines in processes of their own, slowed down so that they can be stopped in the middle."""

from __future__ import annotations

import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

# Panels that take a while, waves of a few of them, kept as soon as they are summed.
SLOW = """
import sys, time
import bigsvd.journal.journal as journal
import bigsvd.plan.geometry as geometry
from bigsvd.sweep import PanelReader
geometry.WAVE_SECONDS = 1e-9
journal.WORTH_KEEPING, journal.SHARE_OF_TIME = 0.0, 1e9
fetch, pause = PanelReader.fetch, float(sys.argv[1])
def slowly(self, panel, buffer):
    time.sleep(pause)
    return fetch(self, panel, buffer)
PanelReader.fetch = slowly
from bigsvd.cli import main
main(sys.argv[2:])
"""
OPTIONS = ("--rank", 4, "--route", "krylov", "--axis", "rows", "--tolerance", 1e-6, "--memory", "1GiB")


def write_slope(path: Path) -> Path:
    """Invented: 1/√i over 6,400 rows, which several sweeps are needed for; 50 panels."""
    random = np.random.default_rng(7)
    left = random.standard_normal((6400, 40)) * np.arange(1, 41) ** -0.5
    np.save(path, left @ random.standard_normal((40, 60)) + 0.1 * random.standard_normal((6400, 60)))
    return path


def start(*words: object, pause: float = 0.01) -> subprocess.Popen[str]:
    """Begin a slow command line."""
    line = [sys.executable, "-c", SLOW, str(pause), *(str(word) for word in words)]
    return subprocess.Popen(line, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def wait_for(process: subprocess.Popen[str], happened: Callable[[], bool], seconds: float = 60) -> None:
    """Wait until something is seen; a process that ends before fails the test."""
    end = time.monotonic() + seconds
    while not happened():
        if process.poll() is not None or time.monotonic() > end:
            process.kill()
            out, err = process.communicate()
            raise AssertionError(f"not seen before the process ended with {process.returncode}:\n{out}\n{err}")
        time.sleep(0.005)


def kept(out: Path, sweep: int) -> Callable[[], bool]:
    """Whether sums of that sweep are kept."""
    run = out.with_name(out.name + ".run")
    return lambda: any(run.glob(f"sums-{sweep:02d}-?????"))

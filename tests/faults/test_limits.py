"""Limits of the machine: memory below what one chunk takes, and few open files."""

from __future__ import annotations

import json
import re
import resource
import subprocess
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest
import zarr
from fault_samples import Night, run

import bigsvd
from bigsvd import machine
from bigsvd.units import parse_bytes

pytestmark = pytest.mark.alone

MIB = 2**20
linux = pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="no /proc: no record of the kernel to read")


def least_named(text: str) -> int:
    found = re.search(r"--memory to ([0-9.]+[KMG]iB)", text)
    assert found, text
    return parse_bytes(found[1])


@pytest.mark.parametrize("shape", [(8000, 8000), (2, 30_000_000)], ids=["one chunk", "one row"])
def test_48_a_ceiling_below_a_chunk_or_a_row_is_refused_before_reading(shape: tuple[int, int], night: Night) -> None:
    with h5py.File(night.file, "w") as file:
        # Nothing is written but where the file ends: chunks that are absent are asked for before the memory is.
        file.create_dataset("heights", shape, "f8", chunks=None)
        file["heights"][-1, -1] = 1.0
    night.options = {"rank": 1, "memory": "128MiB", "route": "krylov"}
    text = night.refused(2)
    assert "MemoryCeilingError" in text
    assert "128 MiB" in text
    least = least_named(text)
    assert least > 128 * MIB
    assert not night.journal.exists()


LIMITED = """
import resource, runpy, sys
limit = int(sys.argv[1])
resource.setrlimit(resource.{kind}, (limit, limit))
sys.argv[1:] = sys.argv[2:]
runpy.run_module("bigsvd", run_name="__main__")
"""


def limited(kind: str, limit: int, *words: object) -> subprocess.CompletedProcess[str]:
    """A command line in a process that the system holds to a limit."""
    line = [sys.executable, "-c", LIMITED.replace("{kind}", kind), str(limit), *map(str, words)]
    return subprocess.run(line, capture_output=True, text=True, timeout=120, check=False)


@linux
def test_48_a_limit_of_the_address_space_sets_the_ceiling(night: Night) -> None:
    """Half of it, in steps of 256 MiB; what a plan within that reserves fits, and the run ends well."""
    words = ("decompose", night.file, "--out", night.folder / "new.zarr", "--rank", 3, "--quiet", "--json")
    ended = limited("RLIMIT_AS", 3 * 1024 * MIB, *words)
    assert ended.returncode == 0, ended.stderr
    told = json.loads(ended.stdout)
    assert told["memory_bytes"] == 1536 * MIB
    assert told["peak_resident_bytes"] <= told["planned_bytes"] <= told["memory_bytes"]


@linux
def test_48_a_limit_that_is_met_all_the_same_ends_in_words(night: Night) -> None:
    """The ceiling is the user's word; where the machine has less, the run ends with status 1 and says so.

    The library of matrix products ends the process itself where it is the one that is refused.
    """
    with h5py.File(night.file, "w") as file:
        file.create_dataset("heights", data=np.random.default_rng(1).standard_normal((6000, 3000)), chunks=(3000, 3000))
    words = ("decompose", night.file, "--out", night.out, "--overwrite", "--rank", 20, "--memory", "4GiB", "--quiet")
    ended = limited("RLIMIT_DATA", 330 * MIB, *words)
    assert ended.returncode == 1, ended.stderr
    ours = "The machine has no memory left for this run. Free some, or lower --memory."
    assert ours in ended.stderr or "Memory allocation still failed" in ended.stderr
    assert "Traceback" not in ended.stderr
    assert bigsvd.open_factors(night.out).rank == 2


def test_48_the_least_limit_of_all_groups_counts(tmp_path: Path) -> None:
    """A control group cannot be made in every test; its files can."""
    groups = tmp_path / "sys/fs/cgroup"
    for path, limit in (("batch", "max"), ("batch/job", str(700 * MIB))):
        (groups / path).mkdir(parents=True, exist_ok=True)
        (groups / path / "memory.max").write_text(f"{limit}\n")
    (tmp_path / "proc/self").mkdir(parents=True)
    (tmp_path / "proc/self/cgroup").write_text("0::/batch/job\n")
    assert min(machine._group_limits(tmp_path)) == 700 * MIB


# ------------------------------------------------------------------------------------------------------------ 50: files
def test_50_a_hundred_thousand_chunks_are_listed_in_little_memory(night: Night, tmp_path: Path) -> None:
    """Files are not made for them: metadata that promises as many is looked through, and all are absent."""
    folder = tmp_path / "promised.zarr"
    zarr.create_array(str(folder), shape=(1_000_000, 100), chunks=(10, 100), dtype="f4")
    night.file = folder
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    text = night.refused(2)
    assert "100,000 of 100,000 chunks are absent" in text
    assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before < 64 * 1024


def test_50_no_descriptor_is_left_open(night: Night) -> None:
    night.done()
    before = len(list(Path("/proc/self/fd").iterdir())) if Path("/proc/self/fd").exists() else 0
    for _ in range(3):
        night.done()
        run("inspect", night.file)
    after = len(list(Path("/proc/self/fd").iterdir())) if before else 0
    assert after <= before

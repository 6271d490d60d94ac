"""Reading holds no more beside its panel than the spec says, of which the memory plan is made."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zarr
from hdf5_chains import CHAINS, OTHERS, write_chain

from bigsvd.source import open_source

pytestmark = pytest.mark.alone

SHAPE, CHUNK = (2000, 4000), (2000, 2000)
SMALL, SMALL_CHUNK = (40, 40), (20, 20)
# The small file has the libraries loaded and their first buffers made before the count begins.
SCRIPT = """
import sys
import numpy as np
from bigsvd import machine
from bigsvd.source import open_source
machine.tune_allocator()
for path in sys.argv[1:]:
    source = open_source(path)
    rows, columns = source.spec.shape
    out = np.ones(source.spec.shape, source.spec.dtype)
    machine.reset_peak()
    before = machine.resident_bytes()
    for _ in range(2):
        source.read((0, rows), (0, columns), out)
print(machine.peak_resident_bytes() - before, source.spec.decode_bytes)
"""


def noise(shape: tuple[int, int]) -> np.ndarray:
    """Entries that no codec makes smaller, so that the stored bytes are as many as they can be."""
    return np.random.default_rng(1).standard_normal(shape).astype("f4")


def held_and_planned(small: str, large: str) -> tuple[int, int]:
    """Bytes held beside the panel while the large file is read, and what its spec says."""
    done = subprocess.run([sys.executable, "-c", SCRIPT, small, large], capture_output=True, text=True, timeout=120)
    assert not done.returncode, done.stderr
    held, planned = done.stdout.split()
    return int(held), int(planned)


@pytest.mark.skipif(sys.platform != "linux", reason="the peak is reset on Linux only")
@pytest.mark.parametrize(
    "name",
    ["no filter", "shuffle gzip", "gzip lzf zstd", "bitshuffle lz4", "bitshuffle lz4 gzip", "blosc zstd shuffled",
     "blosc2 lz4 shuffled", "bzip2"],
)  # fmt: skip
def test_decoding_hdf5_holds_no_more_than_the_spec_says(tmp_path: Path, name: str) -> None:
    chain = (CHAINS | OTHERS)[name]
    small = write_chain(tmp_path / "small.h5", noise(SMALL), chain, SMALL_CHUNK)
    large = write_chain(tmp_path / "large.h5", noise(SHAPE), chain, CHUNK)
    held, planned = held_and_planned(small, large)
    assert held <= planned
    if name == "no filter":
        assert planned < 2 * 2**20, "chunks without filters need no buffers of their size"


@pytest.mark.skipif(sys.platform != "linux", reason="the peak is reset on Linux only")
@pytest.mark.parametrize("options", [{}, {"shards": (2000, 2000), "chunks": (500, 500)}])
def test_decoding_zarr_holds_no_more_than_the_spec_says(tmp_path: Path, options: dict[str, Any]) -> None:
    zarr.create_array(tmp_path / "small", data=noise(SMALL), chunks=SMALL_CHUNK)
    zarr.create_array(tmp_path / "large", data=noise(SHAPE), **({"chunks": CHUNK} | options))
    held, planned = held_and_planned(str(tmp_path / "small"), str(tmp_path / "large"))
    assert held <= planned
    if options:
        assert planned < 7 * 2**20, "a shard is decoded one inner chunk after another"


def test_chunks_that_reach_past_the_matrix_count_whole(tmp_path: Path) -> None:
    zarr.create_array(tmp_path / "a", data=noise((30, 30)), chunks=(1000, 1000))
    assert open_source(tmp_path / "a").spec.decode_bytes > 3 * 4_000_000

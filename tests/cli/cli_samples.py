"""Running the program inside the test process, and small files to run it on."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
from click.testing import CliRunner, Result

from bigsvd.cli import main


def run(*words: object) -> Result:
    """Run a command line; stdout and stderr apart."""
    return CliRunner().invoke(main, [str(word) for word in words], prog_name="bigsvd")


def pool(rows: int = 900, columns: int = 70, seed: int = 5) -> np.ndarray:
    """Invented: four planted components of falling strength over weak noise, with an offset."""
    chance = np.random.default_rng(seed)
    planted = (chance.normal(size=(rows, 4)) * [40, 20, 10, 5]) @ np.linalg.qr(chance.normal(size=(columns, 4)))[0].T
    return planted + 0.01 * chance.normal(size=(rows, columns)) + 30


def write_pool(path: Path) -> Path:
    """An HDF5 file with a matrix in chunks, and a list beside it."""
    with h5py.File(path, "w") as file:
        file.create_dataset("night/frames", data=pool(), chunks=(100, 35), compression="gzip", shuffle=True)
        file["night/time"] = np.arange(900.0)
    return path


def finish(folder: Path) -> tuple[Path, Path]:
    """A file, and the result that the command line makes of it."""
    file, out = write_pool(folder / "pool.h5"), folder / "factors.zarr"
    ended = run("decompose", file, "--out", out, "--rank", 4, "--memory", "1GiB", "--quiet")
    assert ended.exit_code == 0, ended.output
    return file, out

"""What the rows about readers share: files that something is wrong with, and an earlier result that must survive."""

from __future__ import annotations

import hashlib
import json
import shutil
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import h5py
import numpy as np
import zarr
from fault_samples import run

SHAPE, CHUNK = (60, 40), (10, 20)
OPTIONS = ("--rank", "2", "--memory", "1GiB", "--quiet")


@cache
def matrix() -> np.ndarray:
    """Invented: two waves and a slope."""
    row, column = np.indices(SHAPE)
    made = 3 * np.sin(row / 4) * np.cos(column / 9) + row / 50 + np.sin(row * column)
    made.setflags(write=False)
    return made


def write_hdf5(path: Path, values: np.ndarray | None = None, libver: str = "earliest", **options: Any) -> Path:
    """One matrix in an HDF5 file, in chunks."""
    values = matrix() if values is None else values
    with h5py.File(path, "w", libver=libver) as file:
        file.create_dataset("frames", data=values, **({"chunks": CHUNK} | options))
    return path


def write_zarr(path: Path, values: np.ndarray | None = None, **options: Any) -> Path:
    """One matrix in a Zarr store, every chunk written."""
    values = matrix() if values is None else values
    options = {"chunks": CHUNK, "config": {"write_empty_chunks": True}} | options
    array = zarr.create_array(path, shape=values.shape, dtype=values.dtype, **options)
    array[...] = values
    return path


def change(document: Path, **values: Any) -> None:
    """Replace values in a JSON document."""
    document.write_text(json.dumps(json.loads(document.read_text()) | values))


def flip(path: Path, place: int) -> None:
    """Flip a bit of a file."""
    data = bytearray(path.read_bytes())
    data[place] ^= 4
    path.write_bytes(data)


@dataclass(frozen=True)
class Scene:
    """A folder with an earlier result in it."""

    folder: Path

    @property
    def out(self) -> Path:
        """The earlier result."""
        return self.folder / "out.zarr"

    def contents(self) -> dict[str, str]:
        """Digest of every file, name of every folder and link; logs, which tell of every run, apart."""
        return {
            path.relative_to(self.folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()
            if path.is_file() and not path.is_symlink()
            else "no file"
            for path in self.folder.rglob("*")
            if not path.name.endswith(".zarr.log")
        }

    def refused(self, file: Path, *options: object, status: int = 2) -> str:
        """Decompose to a new place, over the earlier result, and onto it without leave; returns what was said.

        Every time it must end so, with a message on standard error and nothing changed in the folder; the words must
        be the same whatever the place, and stand in the JSON too.
        """
        before = self.contents()
        said = []
        for words in (("--out", self.folder / "new.zarr"), ("--out", self.out, "--overwrite")):
            ended = run("decompose", file, *words, *OPTIONS, *options)
            assert ended.exit_code == status, ended.output
            assert ended.stdout == ""
            assert "fault of bigsvd" not in ended.stderr
            assert self.contents() == before, "something was changed or left behind"
            said.append(ended.stderr)
        assert said[0] == said[1]
        ended = run("decompose", file, "--out", self.out, *OPTIONS, *options)
        assert ended.exit_code == 2
        assert self.contents() == before
        ended = run("plan", file, "--json", *OPTIONS, *options)
        if ended.exit_code:
            assert json.loads(ended.stdout)["error"]["problem"] in said[0]
        return str(said[0])

    def done(self, file: Path, *options: object) -> dict[str, Any]:
        """Decompose over the earlier result, which must end well; returns what ``--json`` prints."""
        ended = run("decompose", file, "--out", self.out, "--overwrite", *OPTIONS, "--json", *options)
        assert ended.exit_code in (0, 3), ended.output
        found: dict[str, Any] = json.loads(ended.stdout)
        return found


def scenes() -> Iterator[Path]:
    """A folder with an earlier result, to be copied for every test."""
    with TemporaryDirectory() as name:
        folder = Path(name)
        write_hdf5(folder / "earlier.h5")
        ended = run("decompose", folder / "earlier.h5", "--out", folder / "out.zarr", *OPTIONS)
        assert ended.exit_code in (0, 3), ended.output
        for path in folder.iterdir():
            if path.name not in ("out.zarr", "earlier.h5"):
                path.unlink()
        yield folder


def stage(earlier: Path, folder: Path) -> Scene:
    """A scene of one's own."""
    shutil.copytree(earlier / "out.zarr", folder / "out.zarr")
    return Scene(folder)

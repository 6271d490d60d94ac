"""A night's run that something happens to: what it says, how it ends, and that an earlier result is left as it was."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from click.testing import CliRunner, Result

from bigsvd import api
from bigsvd.cli import main
from bigsvd.sweep import PanelReader

OPTIONS: dict[str, Any] = {"rank": 4, "route": "krylov", "axis": "rows", "tolerance": 1e-6, "memory": "1GiB"}
CHUNK = 32


@cache
def heights(rows: int = 3200, columns: int = 160) -> np.ndarray:
    """Invented: 1/√i and a little noise, which several sweeps are needed for."""
    random = np.random.default_rng(7)
    left = random.standard_normal((rows, 100)) * np.arange(1, 101) ** -0.5
    made = left @ random.standard_normal((100, columns)) + 0.1 * random.standard_normal((rows, columns))
    made.setflags(write=False)
    return made


def write_hdf5(path: Path, matrix: np.ndarray | None = None, **options: Any) -> Path:
    """One matrix in an HDF5 file, chunks of whole rows, no filter unless asked for."""
    matrix = heights() if matrix is None else matrix
    options = {"chunks": (min(CHUNK, len(matrix)), matrix.shape[1])} | options
    with h5py.File(path, "w") as file:
        file.create_dataset("heights", data=matrix, **options)
    return path


def bits(folder: Path) -> dict[str, bytes]:
    """Every file below a folder, by name."""
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def result_bits(out: Path) -> dict[str, bytes]:
    """Every file of a result but the root document, which holds times."""
    return {name: content for name, content in bits(out).items() if name != "zarr.json"}


def run(*words: object) -> Result:
    """Run a command line in this process."""
    return CliRunner().invoke(main, [str(word) for word in words], prog_name="bigsvd")


def as_words(options: dict[str, Any]) -> list[str]:
    """Options as they are typed."""
    words = []
    for name, value in options.items():
        option = f"--{name.replace('_', '-')}"
        words += [option] if value is True else [option, str(value)]
    return words


@dataclass
class Night:
    """A file, an earlier result where the new one is to go, and the command line that makes the new one.

    Attributes
    ----------
    folder, file, out : Path
    options : dict
        Those of the command.
    """

    folder: Path
    file: Path
    out: Path
    options: dict[str, Any] = field(default_factory=lambda: dict(OPTIONS))

    @property
    def journal(self) -> Path:
        """OUT.run."""
        return self.out.with_name(self.out.name + ".run")

    def decompose(self, **more: Any) -> Result:
        """Run it, replacing the earlier result."""
        options = self.options | {"overwrite": True, "save_every": 0, "quiet": True} | more
        return run("decompose", self.file, "--out", self.out, *as_words(options))

    def refused(self, status: int, **more: Any) -> str:
        """Run it: it must end so, in one message without a traceback, and leave the earlier result; returns the words.

        A journal may stay, but nothing half done that looks like a result.
        """
        before = bits(self.out) if self.out.exists() else None
        ended = self.decompose(**more)
        assert ended.exit_code == status, ended.output
        assert ended.stdout == ""
        assert "Traceback" not in ended.stderr
        assert "fault of bigsvd" not in ended.stderr
        assert (bits(self.out) if self.out.exists() else None) == before
        left = {path.name.removeprefix(self.out.name) for path in self.folder.iterdir()}
        assert not {".partial", ".replaced"} & left
        return str(ended.stderr)

    def done(self, **more: Any) -> dict[str, bytes]:
        """Run it: it must end well and leave nothing beside the result; returns the bits of that."""
        ended = self.decompose(**more)
        assert ended.exit_code == 0, ended.output
        assert not self.journal.exists()
        return result_bits(self.out)


def meanwhile(monkeypatch: pytest.MonkeyPatch, action: Callable[[], None], *, after: int) -> list[int]:
    """Let something happen before panel number `after` is fetched, once; returns a list that tells whether it did."""
    fetch, fetched = PanelReader.fetch, []
    happened: list[int] = []

    def watched(self: PanelReader, panel: int, buffer: np.ndarray) -> np.ndarray:
        fetched.append(panel)
        if len(fetched) > after and not happened:
            happened.append(len(fetched))
            action()
        return fetch(self, panel, buffer)

    monkeypatch.setattr(PanelReader, "fetch", watched)
    return happened


def fetches(night: Night, sweep: int, share: float) -> int:
    """Panels fetched before that share of a sweep; the pilot fetches its own up to six times."""
    plan = api.forecast(night.file, **night.options).plan
    return 6 * len(plan.pilot_panels) + int((sweep - 1 + share) * plan.geometry.panels)


def whole_bits(night: Night) -> dict[str, bytes]:
    """Bits of the same result, made elsewhere without anything happening."""
    other = Night(night.folder, night.file, night.folder / "undisturbed.zarr", night.options)
    found = other.done(overwrite=True)
    shutil.rmtree(other.out)
    other.out.with_name(other.out.name + ".log").unlink()
    return found

"""Which files are measured, and their making: kind of storage, shape, spectrum."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from bench.data import DTYPES, make_recipe, write_benchmark
from bigsvd.units import show_shape

KINDS = {
    "hdf5-plain": "HDF5, float32, no filter",
    "hdf5-gzip": "HDF5, uint16, gzip and shuffle",
    "hdf5-bitshuffle": "HDF5, uint16, bitshuffle and LZ4",
    "zarr-zstd": "Zarr version 3, float32, Zstandard",
    "zarr-blosc": "Zarr version 2, float32, Blosc",
}
SPECTRA = {
    "exponential": "σᵢ ∝ 10^(−i/10)",
    "inverse": "σᵢ ∝ 1/i over a bulk of noise",
    "inverse-root": "σᵢ ∝ 1/√i over a bulk of noise",
    "spikes": "15 values at 5…2 times the edge of a bulk of noise",
}
# The bulk of 1/i ends near the 84th planted value of a 50,000 × 5,000 matrix: the 20 wanted stand out, their order too.
NOISE = {"exponential": 0.0, "inverse": 0.5, "inverse-root": 0.5, "spikes": 0.0}
SHAPES = {"first": (100_000, 5_000), "wide": (20_000, 60_000), "tall": (2_000_000, 300)}
# A trial keeps at least so many columns: two hundred values are planted.
LEAST_COLUMNS = 300


@dataclass(frozen=True)
class Case:
    """One benchmark file."""

    kind: str
    spectrum: str
    rows: int
    columns: int

    @property
    def name(self) -> str:
        return f"{self.kind}-{self.spectrum}-{self.rows}x{self.columns}"

    @property
    def title(self) -> str:
        return f"{KINDS[self.kind]}, {show_shape((self.rows, self.columns))}, {SPECTRA[self.spectrum]}"

    @property
    def decoded_bytes(self) -> int:
        return self.rows * self.columns * DTYPES[self.kind].itemsize

    def facts(self) -> dict[str, Any]:
        """What every record says of it."""
        return {
            "name": self.name,
            "title": self.title,
            "kind": self.kind,
            "spectrum": self.spectrum,
            "shape": [self.rows, self.columns],
            "decoded_bytes": self.decoded_bytes,
        }

    def path(self, folder: Path) -> Path:
        return folder / f"{self.name}{'.zarr' if self.kind.startswith('zarr') else '.h5'}"

    def file(self, folder: Path) -> Path:
        """The file, made where it is missing."""
        path = self.path(folder)
        if not path.exists():
            recipe = make_recipe(self.kind, self.rows, self.columns, spectrum=self.spectrum, noise=NOISE[self.spectrum])
            write_benchmark(self.kind, path, recipe)
        return path


def programme(*, full: bool) -> list[tuple[str, str, str]]:
    """(kind, spectrum, shape) of every case: by default those of a quarter of an hour, else all that is affordable.

    1/i and 1/√i are left to some kinds: a peer needs 12 to 18 reads for them, minutes each time on compressed files.
    """
    cases = [(kind, "exponential", "first") for kind in KINDS] + [("hdf5-plain", "inverse", "first")]
    if full:
        cases += [("hdf5-gzip", "inverse", "first"), ("zarr-zstd", "inverse", "first")]
        cases += [(kind, "inverse-root", "first") for kind in ("hdf5-plain", "hdf5-gzip")]
        for shape in ("wide", "tall"):
            for spectrum in ("exponential", "inverse"):
                cases += [(kind, spectrum, shape) for kind in ("hdf5-plain", "hdf5-gzip")]
    return cases


def choose_cases(
    *,
    full: bool = False,
    kinds: Sequence[str] | None = None,
    spectra: Sequence[str] | None = None,
    shapes: Sequence[str] | None = None,
    gigabytes: float | None = None,
) -> list[Case]:
    """The programme, or every combination of what is named; `gigabytes` makes each a trial of that decoded size."""
    chosen = programme(full=full)
    if kinds or spectra or shapes:
        chosen = [
            (kind, spectrum, shape)
            for shape in shapes or ["first"]
            for kind in kinds or KINDS
            for spectrum in spectra or ["exponential"]
        ]
    return [Case(kind, spectrum, *_shape(shape, kind, gigabytes)) for kind, spectrum, shape in chosen]


def _shape(name: str, kind: str, gigabytes: float | None) -> tuple[int, int]:
    """A shape of the programme, or one of nearly its proportions and so many decoded 10⁹ bytes."""
    rows, columns = SHAPES[name]
    if gigabytes is None:
        return rows, columns
    entries = gigabytes * 1e9 / DTYPES[kind].itemsize
    columns = max(LEAST_COLUMNS, round(columns * math.sqrt(entries / (rows * columns))))
    return max(LEAST_COLUMNS, round(entries / columns)), columns

"""Which files are measured, and their making: kind of storage, shape, spectrum."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from bench.data import DTYPES, make_recipe, write_benchmark
from bigsvd.units import show_shape

KINDS = {
    "hdf5-plain": "HDF5, float32, no filter",
    "hdf5-gzip": "HDF5, uint16, gzip and shuffle",
    "hdf5-bitshuffle": "HDF5, uint16, bitshuffle and LZ4",
    "zarr-zstd": "Zarr version 3, float32, Zstandard",
    "zarr-blosc": "Zarr version 2, float32, Blosc",
}
DEFAULT_KINDS = ("hdf5-plain", "hdf5-gzip", "zarr-zstd")
COLUMNS = 5_000
# The bulk of 1/i ends near the 84th planted value of a 50,000 × 5,000 matrix: the 20 wanted stand out, their order too.
NOISE = {"exponential": 0.0, "inverse": 0.5, "inverse-root": 0.5, "spikes": 0.0}
SPECTRA = {
    "exponential": "σᵢ ∝ 10^(−i/10)",
    "inverse": "σᵢ ∝ 1/i over a bulk of noise",
    "inverse-root": "σᵢ ∝ 1/√i over a bulk of noise",
    "spikes": "15 values at 5…2 times the edge of a bulk of noise",
}
FULL_SHAPES = ((100_000, 5_000), (20_000, 60_000), (2_000_000, 300))


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

    def path(self, folder: Path) -> Path:
        return folder / f"{self.name}{'.zarr' if self.kind.startswith('zarr') else '.h5'}"

    def file(self, folder: Path) -> Path:
        """The file, made where it is missing."""
        path = self.path(folder)
        if not path.exists():
            recipe = make_recipe(self.kind, self.rows, self.columns, spectrum=self.spectrum, noise=NOISE[self.spectrum])
            write_benchmark(self.kind, path, recipe)
        return path


def make_cases(kinds: list[str], spectra: list[str] | None, gigabytes: float, *, full: bool) -> list[Case]:
    """The cases of a run: spectra on every kind, in the shapes of `full` or of so many decoded gigabytes.

    Without a choice of spectra, 1/i is left to plain HDF5: the peer needs 12 to 18 reads for it, minutes each time on
    compressed files.
    """
    cases = []
    for kind in kinds:
        for spectrum in spectra or ["exponential", *(["inverse"] if kind == "hdf5-plain" else [])]:
            if full:
                cases += [Case(kind, spectrum, *shape) for shape in FULL_SHAPES]
            else:
                rows = round(gigabytes * 1e9 / (COLUMNS * DTYPES[kind].itemsize))
                cases.append(Case(kind, spectrum, rows, COLUMNS))
    return cases


def warm(path: Path) -> int:
    """Read every stored byte once, so that all candidates find the file in the page cache; return how many."""
    parts = [path] if path.is_file() else [part for part in path.rglob("*") if part.is_file()]
    total = 0
    for part in parts:
        with open(part, "rb", buffering=0) as file:
            while data := file.read(1 << 24):
                total += len(data)
    return total

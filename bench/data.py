"""Benchmark matrices with a known spectrum, of any size, written as a stream by all cores within 400 MB.

    A = offset + Σᵢ σᵢ uᵢ vᵢᵀ + noise,   uᵢ(row) = √(2/m)·cos(π(p(row) + ½)i/m), i ≤ r,   V random orthonormal, n × r

The columns of U are those of the discrete cosine transform without the constant one, their rows shuffled: orthonormal
and with mean zero, so that centring the columns leaves σ as it is (and takes off the offset of the integer kinds).
Unshuffled, neighbouring rows are nearly alike, which compresses far better than measured data do.

    python bench/data.py hdf5-gzip big.h5 --gigabytes 8 --columns 20000 --spectrum inverse
"""

from __future__ import annotations

import argparse
import math
import shutil
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from bigsvd.demo.blocks import block_random, made_in_order, rectangles, shuffled_deflate, usable_cores
from bigsvd.units import show_bytes, show_seconds, show_shape

DTYPES: dict[str, np.dtype] = {
    "hdf5-plain": np.dtype("<f4"),
    "hdf5-gzip": np.dtype("<u2"),
    "hdf5-bitshuffle": np.dtype("<u2"),
    "zarr-zstd": np.dtype("<f4"),
    "zarr-blosc": np.dtype("<f4"),
}
SPECTRA: dict[str, Callable[[np.ndarray], np.ndarray]] = {
    "exponential": lambda i: 10 ** (-(i - 1) / 10),
    "inverse": lambda i: 1 / i,
    "inverse-root": lambda i: 1 / np.sqrt(i),
    "spikes": lambda i: np.linspace(5, 2, 15),
}
MATRIX = "matrix"  # path of the dataset in the HDF5 kinds
CHUNK = (1_000, 2_000)
GZIP_LEVEL = 1


@dataclass(frozen=True, eq=False)
class Recipe:
    """All that the entries follow from; `deviation` is of the Gaussian noise, `effective_noise` has rounding too."""

    rows: int
    columns: int
    dtype: np.dtype
    values: np.ndarray
    right_vectors: np.ndarray
    order: np.ndarray
    offset: float
    deviation: float
    seed: int

    @property
    def shape(self) -> tuple[int, int]:
        return self.rows, self.columns

    @property
    def decoded_bytes(self) -> int:
        return self.rows * self.columns * self.dtype.itemsize

    @property
    def effective_noise(self) -> float:
        return math.sqrt(self.deviation**2 + (1 / 12 if self.dtype.kind == "u" else 0.0))

    def left_vectors(self, rows: slice) -> np.ndarray:
        """Rows of U, shape (rows, r)."""
        frequency = np.arange(1, len(self.values) + 1)
        waves: np.ndarray = np.cos(np.pi / self.rows * (self.order[rows, None] + 0.5) * frequency)
        return math.sqrt(2 / self.rows) * waves

    def block(self, place: tuple[slice, slice]) -> np.ndarray:
        """The entries of a rectangle as they are stored; noise is keyed by the place."""
        rows, columns = place
        left = (self.left_vectors(rows) * self.values).astype("f4")
        entries: np.ndarray = left @ self.right_vectors[columns].astype("f4").T
        if self.deviation:
            noise = block_random(self.seed, "noise", rows.start << 32 | columns.start)
            entries += np.float32(self.deviation) * noise.standard_normal(entries.shape, dtype="f4")
        if self.dtype.kind == "u":
            entries += np.float32(self.offset)
            np.rint(entries, out=entries)
            np.clip(entries, 0, 65_535, out=entries)
        return entries.astype(self.dtype, copy=False)


@dataclass(frozen=True)
class Written:
    """One benchmark file."""

    path: Path
    truth: Path
    shape: tuple[int, int]
    decoded_bytes: int
    stored_bytes: int
    seconds: float


def make_recipe(
    kind: str,
    rows: int,
    columns: int,
    *,
    spectrum: str = "exponential",
    rank: int = 200,
    noise: float = 0.0,
    level: float = 300.0,
    ordered: bool = False,
    seed: int = 1,
) -> Recipe:
    """Settle what the entries are.

    `rank` is how many σ are planted (15 for spikes); `level` the root mean square entry of an integer kind, in counts
    (1 for a floating-point kind); `noise` the deviation of Gaussian noise over that level. Spikes stand at 5…2 × the
    edge of a noise that has the level to itself. `ordered` leaves the rows as the cosines have them.
    """
    rank = min(15 if spectrum == "spikes" else rank, rows - 1, columns)
    relative = SPECTRA[spectrum](np.arange(1.0, 16.0 if spectrum == "spikes" else rank + 1.0))[:rank]
    dtype = DTYPES[kind]
    size = level if dtype.kind == "u" else 1.0
    if spectrum == "spikes":
        deviation = size
        values = relative * deviation * (math.sqrt(rows) + math.sqrt(columns))
    else:
        deviation = noise * size
        values = relative * size * math.sqrt(rows * columns) / float(np.linalg.norm(relative))
    gaussian = block_random(seed, "right vectors", 0).standard_normal((columns, rank))
    right_vectors = np.linalg.qr(gaussian)[0]
    order = np.arange(rows) if ordered else block_random(seed, "order of rows", 0).permutation(rows)
    # Twelve times the level below and above the middle: no entry is cut.
    return Recipe(rows, columns, dtype, values, right_vectors, order, 12 * level, deviation, seed)


def write_benchmark(
    kind: str, path: Path, recipe: Recipe, *, chunks: tuple[int, int] | None = None, workers: int | None = None
) -> Written:
    """Write the matrix, and beside it ``NAME.truth.npz``: planted σ, V, deviation of the noise with rounding."""
    from threadpoolctl import threadpool_limits

    path = Path(path)
    if path.exists():
        raise SystemExit(f"{path} is there already. Remove it, or name another path.")
    path.parent.mkdir(parents=True, exist_ok=True)
    partial, start = path.with_name(f"{path.name}.partial"), time.perf_counter()
    _remove(partial)
    with threadpool_limits(1):
        write = _write_hdf5 if kind.startswith("hdf5") else _write_zarr
        write(kind, partial, recipe, chunks, workers or usable_cores())
    truth = path.with_name(f"{path.name}.truth.npz")
    np.savez(
        truth,
        singular_values=recipe.values,
        right_vectors=recipe.right_vectors,
        noise=recipe.effective_noise,
        seed=recipe.seed,
    )
    partial.rename(path)
    parts = [path] if path.is_file() else [part for part in path.rglob("*") if part.is_file()]
    stored = sum(part.stat().st_size for part in parts)
    return Written(path, truth, recipe.shape, recipe.decoded_bytes, stored, time.perf_counter() - start)


def _write_hdf5(kind: str, path: Path, recipe: Recipe, chunks: tuple[int, int] | None, workers: int) -> None:
    import h5py

    options: dict[str, Any] = {}
    if kind != "hdf5-plain" or chunks:
        options["chunks"] = _fitted(chunks or CHUNK, recipe.shape)
    if kind == "hdf5-gzip":
        options |= {"compression": "gzip", "compression_opts": GZIP_LEVEL, "shuffle": True}
    if kind == "hdf5-bitshuffle":
        import hdf5plugin

        options["compression"] = hdf5plugin.Bitshuffle(cname="lz4")
    # A contiguous dataset is written in bands of whole rows, 8 MB each.
    band = (max(1, 8_000_000 // (recipe.columns * recipe.dtype.itemsize)), recipe.columns)
    size: tuple[int, int] = options.get("chunks", band)

    def encode(place: tuple[slice, slice]) -> np.ndarray | bytes:
        entries = recipe.block(place)
        return shuffled_deflate(entries, size, GZIP_LEVEL) if kind == "hdf5-gzip" else entries

    with h5py.File(path, "w") as file:
        matrix = file.create_dataset(MATRIX, recipe.shape, recipe.dtype, **options)
        for place, made in made_in_order(encode, rectangles(recipe.shape, size), workers):
            if isinstance(made, bytes):
                matrix.id.write_direct_chunk((place[0].start, place[1].start), made)
            else:
                matrix[place] = made


def _write_zarr(kind: str, path: Path, recipe: Recipe, chunks: tuple[int, int] | None, workers: int) -> None:
    import numcodecs
    import zarr
    from zarr.codecs import ZstdCodec

    size = _fitted(chunks or CHUNK, recipe.shape)
    blosc = numcodecs.Blosc(cname="lz4", clevel=5, shuffle=numcodecs.Blosc.SHUFFLE)
    array = zarr.create_array(
        str(path),
        shape=recipe.shape,
        chunks=size,
        dtype=recipe.dtype,
        compressors=ZstdCodec() if kind == "zarr-zstd" else blosc,
        zarr_format=3 if kind == "zarr-zstd" else 2,
    )

    def store(place: tuple[slice, slice]) -> None:
        array[place] = recipe.block(place)

    for _ in made_in_order(store, rectangles(recipe.shape, size), workers):
        pass


def _fitted(chunks: tuple[int, int], shape: tuple[int, int]) -> tuple[int, int]:
    return min(chunks[0], shape[0]), min(chunks[1], shape[1])


def _remove(path: Path) -> None:
    if path.is_dir():
        shutil.rmtree(path)
    else:
        path.unlink(missing_ok=True)


def _chunks(text: str) -> tuple[int, int]:
    rows, columns = (int(side) for side in text.lower().split("x"))
    return rows, columns


def main(arguments: list[str] | None = None) -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("kind", choices=DTYPES)
    parser.add_argument("path", type=Path)
    size = parser.add_mutually_exclusive_group(required=True)
    size.add_argument("--rows", type=int)
    size.add_argument("--gigabytes", type=float, help="decoded size in 10⁹ bytes, instead of --rows")
    parser.add_argument("--columns", type=int, default=20_000)
    parser.add_argument("--spectrum", choices=SPECTRA, default="exponential")
    parser.add_argument("--rank", type=int, default=200, help="singular values planted (15 for spikes)")
    parser.add_argument("--noise", type=float, default=0.0, help="deviation of the noise over the size of the entries")
    parser.add_argument("--level", type=float, default=300.0, help="root mean square entry of an integer kind, counts")
    parser.add_argument("--chunks", type=_chunks, help="such as 1000x2000; hdf5-plain is contiguous without")
    parser.add_argument("--ordered", action="store_true", help="leave neighbouring rows alike")
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args(arguments)
    if given.spectrum == "spikes" and given.noise:
        parser.error("--spectrum spikes has noise of its own: leave --noise out")
    if not 0 < given.level <= 2_700:
        parser.error("--level must be above 0 and at most 2700, so that 16 bits hold every entry")
    rows = given.rows or round(given.gigabytes * 1e9 / (given.columns * DTYPES[given.kind].itemsize))
    if rows < 2 or given.columns < 1 or given.rank < 1:
        parser.error("at least 2 rows, 1 column and 1 planted value are needed")
    recipe = make_recipe(
        given.kind,
        rows,
        given.columns,
        spectrum=given.spectrum,
        rank=given.rank,
        noise=given.noise,
        level=given.level,
        ordered=given.ordered,
        seed=given.seed,
    )
    made = write_benchmark(given.kind, given.path, recipe, chunks=given.chunks)
    print(
        f"{made.path}: {show_shape(made.shape)} {recipe.dtype}, {show_bytes(made.decoded_bytes)} decoded, "
        f"{show_bytes(made.stored_bytes)} stored, {show_seconds(made.seconds)}"
    )


if __name__ == "__main__":
    main()

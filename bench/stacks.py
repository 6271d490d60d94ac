"""The same invented stack stored frame by frame and as tiles, decomposed from both, and what was planted found again.

    A(t, y, x) = offset + Σᵢ σᵢ uᵢ(t) vᵢ(y, x) + noise, rounded to uint16

uᵢ are waves of the discrete cosine transform over the frames (orthonormal, mean zero), vᵢ orthonormal combinations of
blurred spots. Streamed to disk; about 0.8 GB are held at 512 × 512, for a band of 1,000 frames of the tiles.

    python bench/stacks.py /tmp/stacks --frames 20000 --side 512 --memory 2GiB
"""

from __future__ import annotations

import argparse
import math
import subprocess
import sys
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from bigsvd import open_factors
from bigsvd.demo.blocks import block_random
from bigsvd.units import show_bytes, show_count, show_seconds

LAYOUTS = ("frames", "tiles")
RANK, LARGEST, DEVIATION, OFFSET = 12, 40.0, 20.0, 2_000.0
# Frames that are made at a time; noise is keyed by them, so that both layouts hold the same entries.
BATCH = 50


@dataclass(frozen=True, eq=False)
class Stack:
    """All that the entries follow from.

    Attributes
    ----------
    frames, side : int
        Frames of side × side pixels.
    values : ndarray, shape (r,)
        Planted singular values.
    images : ndarray, shape (side², r)
        Orthonormal columns.
    seed : int
    """

    frames: int
    side: int
    values: np.ndarray
    images: np.ndarray
    seed: int

    def courses(self, first: int, stop: int) -> np.ndarray:
        """What every component does in some frames; shape (frames, r)."""
        wave = np.arange(1, len(self.values) + 1)
        phase = np.pi / self.frames * (np.arange(first, stop)[:, None] + 0.5)
        return math.sqrt(2 / self.frames) * np.cos(phase * wave)

    def batch(self, number: int) -> np.ndarray:
        """Up to BATCH frames; shape (frames, side, side), uint16."""
        first, stop = number * BATCH, min((number + 1) * BATCH, self.frames)
        entries = (self.courses(first, stop) * self.values).astype("f4") @ self.images.astype("f4").T
        noise = block_random(self.seed, "noise", number)
        entries += np.float32(DEVIATION) * noise.standard_normal(entries.shape, dtype="f4")
        entries += np.float32(OFFSET)
        np.rint(entries, out=entries)
        np.clip(entries, 0, 65_535, out=entries)
        return entries.astype("<u2").reshape(-1, self.side, self.side)

    def batches(self) -> Iterator[np.ndarray]:
        """All frames in order."""
        for number in range(-(-self.frames // BATCH)):
            yield self.batch(number)


def make_stack(frames: int, side: int, seed: int = 1) -> Stack:
    """Settle what the entries are; the largest planted value is LARGEST counts a pixel and frame, the others decay."""
    random = block_random(seed, "spots", 0)
    y, x = np.indices((side, side)) / side
    spots = []
    for _ in range(RANK):
        spot = np.zeros((side, side))
        for _ in range(8):
            at, width = random.random(2), 0.02 + 0.06 * random.random()
            spot += np.exp(-((y - at[0]) ** 2 + (x - at[1]) ** 2) / (2 * width**2))
        spots.append(spot.reshape(-1))
    images = np.linalg.qr(np.array(spots).T)[0]
    values = LARGEST * math.sqrt(frames * side * side) * 0.7 ** np.arange(RANK)
    return Stack(frames, side, values, images, seed)


def write_stack(stack: Stack, path: Path, layout: str, tile: tuple[int, int]) -> float:
    """Write a stack to HDF5 under shuffle and gzip 1, and return the seconds it took.

    Parameters
    ----------
    stack : Stack
    path : Path
    layout : {"frames", "tiles"}
    tile : (int, int)
        Frames, and rows and columns of pixels, of a tile.
    """
    import h5py

    started = time.perf_counter()
    chunk = (1, stack.side, stack.side) if layout == "frames" else (tile[0], tile[1], tile[1])
    chunk = (min(chunk[0], stack.frames), min(chunk[1], stack.side), min(chunk[2], stack.side))
    with h5py.File(path, "w") as file:
        shape = (stack.frames, stack.side, stack.side)
        data = file.create_dataset("stack", shape, "<u2", chunks=chunk, compression=1, shuffle=True)
        for axis, name in enumerate(("time", "y", "x")):
            data.dims[axis].label = name
        held: list[np.ndarray] = []
        done = 0
        for batch in stack.batches():
            held.append(batch)
            waiting = sum(map(len, held))
            # Whole chunks only: a part of one would be decoded and encoded again.
            if waiting >= chunk[0] or done + waiting == stack.frames:
                band = np.concatenate(held)
                whole = len(band) if done + len(band) == stack.frames else len(band) // chunk[0] * chunk[0]
                data[done : done + whole] = band[:whole]
                done, held = done + whole, [band[whole:]]
    return time.perf_counter() - started


@dataclass(frozen=True)
class Found:
    """What a run of one layout came to; `error` is the largest relative difference to the planted values.

    `angle` is that of the planted images to the ones found; noise alone turns them by about `noise_angle`.
    """

    layout: str
    swept: str
    seconds: float
    sweeps: int
    reads: float
    peak: int
    ceiling: int
    error: float
    angle: float
    noise_angle: float


def decompose_stack(stack: Stack, path: Path, layout: str, memory: str) -> Found:
    """Decompose by the command, in a process of its own, and compare with what was planted."""
    out = path.with_suffix(".zarr")
    words = [sys.executable, "-m", "bigsvd", "decompose", str(path), "--matrix", "/stack", "--out", str(out)]
    words += ["--rank", str(RANK), "--memory", memory, "--overwrite", "--quiet"]
    subprocess.run(words, check=False, stdout=subprocess.DEVNULL)
    factors = open_factors(out)
    record = factors.attributes
    # Noise adds its variance to every square and turns the vectors; the largest half stands far above it.
    strong = RANK // 2
    raised = np.sqrt(stack.values**2 + (DEVIATION**2 + 1 / 12) * max(stack.frames, stack.side**2))[:strong]
    overlap = np.linalg.svd(factors.right_vectors[:, :strong].T @ stack.images[:, :strong])[1]
    return Found(
        layout,
        record["plan"]["reasons"][0][1],
        record["seconds"],
        record["sweeps"],
        record["bytes_read"] / record["matrix_bytes"] / record["sweeps"],
        record["peak_resident_bytes"],
        record["memory_bytes"],
        float(np.max(np.abs(factors.singular_values[:strong] / raised - 1))),
        float(np.degrees(np.arccos(min(1.0, overlap[-1])))),
        # Noise adds a random vector of this length to a right vector of length one, to first order.
        float(np.degrees(np.arctan(DEVIATION * stack.side / stack.values[strong - 1]))),
    )


def main(arguments: Sequence[str] | None = None) -> int:
    """Write what is missing, decompose both layouts, print a line for each."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--frames", type=int, default=20_000)
    parser.add_argument("--side", type=int, default=512)
    parser.add_argument("--tile", type=int, nargs=2, default=(1_000, 32), metavar=("FRAMES", "SIDE"))
    parser.add_argument("--memory", default="2GiB")
    asked = parser.parse_args(arguments)
    asked.folder.mkdir(parents=True, exist_ok=True)
    stack = make_stack(asked.frames, asked.side)
    size = show_bytes(2 * stack.frames * stack.side**2)
    print(f"{show_count(stack.frames)} × {stack.side} × {stack.side} uint16, {size}; invented")
    for layout in LAYOUTS:
        path = asked.folder / f"stack-{layout}-{stack.frames}x{stack.side}.h5"
        if not path.exists():
            part = path.with_suffix(".part")
            seconds = write_stack(stack, part, layout, tuple(asked.tile))
            part.rename(path)
            print(f"{layout}: written in {show_seconds(seconds)}, {show_bytes(path.stat().st_size)}")
        found = decompose_stack(stack, path, layout, asked.memory)
        print(
            f"{layout}: {found.swept}; {show_seconds(found.seconds)} in {found.sweeps} sweeps,"
            f" {found.reads:.3f} × the file a sweep, pilot, probe and checks included; peak {show_bytes(found.peak)}"
            f" of {show_bytes(found.ceiling)}; values within {found.error:.1e}, images within {found.angle:.2f}°"
            f" (noise alone: {found.noise_angle:.2f}°)"
        )
    return 0


if __name__ == "__main__":
    sys.exit(main())

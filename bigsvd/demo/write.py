"""Write the invented scenario: an HDF5 imaging stack, a Zarr matrix, and what was planted in them."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from bigsvd.demo.blocks import block_random, made_in_order, rectangles, shuffled_deflate, usable_cores
from bigsvd.demo.scenario import (
    FRAME_HEIGHT,
    FRAME_NOISE,
    FRAME_WIDTH,
    INVENTED,
    SEED,
    Planted,
    night_watch,
    tide_water,
)
from bigsvd.errors import ResultError, ResultExistsError
from bigsvd.units import show_bytes

PLANTED_FILE = "planted.npz"
FRAME_CHUNK = (200, 4_096)  # sixteen image rows of 200 frames, 1.6 MB
SAMPLE_CHUNK = (500, 2_048)  # 4 MB
GZIP_LEVEL = 1

Progress = Callable[[str, int, int], None]


@dataclass(frozen=True)
class DemoFile:
    """One matrix of the demo, as written.

    Attributes
    ----------
    which : str
        ``night_watch`` or ``tide_water``: the name that ``compare_with_planted`` takes.
    path : Path
    matrix : str
        Path of the matrix inside the file.
    what : str
        The matrix in a few words.
    shape : (int, int)
    dtype : numpy.dtype
    planted_rank : int
        Number of planted components.
    stored_bytes : int
        Bytes on disk.
    """

    which: str
    path: Path
    matrix: str
    what: str
    shape: tuple[int, int]
    dtype: np.dtype
    planted_rank: int
    stored_bytes: int

    @property
    def decoded_bytes(self) -> int:
        """Bytes of the whole matrix in its stored type."""
        return self.shape[0] * self.shape[1] * self.dtype.itemsize


def write_demo(folder: Path, *, progress: Progress | None = None, scale: float = 1.0) -> list[DemoFile]:
    """Write both matrices of the invented scenario, and ``planted.npz`` beside them.

    Parameters
    ----------
    folder : Path
        Made if it is not there. Demo files already in it are replaced; anything else is left alone.
    progress : callable, optional
        Called with the name of the matrix, its decoded bytes done, and those in all.
    scale : float
        Share of the rows to write, in (0, 1].

    Returns
    -------
    list of DemoFile
        The imaging stack and the water matrix.

    Raises
    ------
    ResultExistsError
        If a file of the demo's name is there that the demo did not write.
    ResultError
        If the disk has too little room.

    Notes
    -----
    Cost: 1.6 GB decoded each at scale 1, less than 400 MB of memory. The bytes follow from the seed alone, however
    many threads make them (same numpy version and CPU kernel).
    """
    from threadpoolctl import threadpool_limits

    folder = Path(folder)
    plans = [(night_watch(scale), "night_watch.h5", _write_stack), (tide_water(scale), "tide_water.zarr", _write_water)]
    for name in (PLANTED_FILE, *(name for _, name, _ in plans)):
        _refuse_foreign(folder / name)
    folder.mkdir(parents=True, exist_ok=True)
    _refuse_full_disk(folder, plans[0][0], plans[1][0])

    files = []
    with threadpool_limits(1):
        for planted, name, write in plans:
            partial = folder / f"{name}.partial"
            _remove(partial)
            try:
                files.append(write(planted, partial, folder / name, progress))
            except BaseException:
                _remove(partial)
                raise
            _remove(folder / name)
            partial.rename(folder / name)
        _write_planted(folder / PLANTED_FILE, [planted for planted, _, _ in plans])
    return files


def _write_stack(planted: Planted, partial: Path, path: Path, progress: Progress | None) -> DemoFile:
    """Write frames × pixels as whole counts: HDF5, gzip + shuffle, chunks compressed in threads."""
    import h5py

    dtype = np.dtype("<u2")
    chunk = (min(FRAME_CHUNK[0], planted.shape[0]), FRAME_CHUNK[1])

    def encode(block: tuple[slice, slice]) -> bytes:
        counts = planted.block(*block)
        _add_noise(counts, planted.name, block, FRAME_NOISE)
        np.rint(counts, out=counts)
        np.maximum(counts, 0, out=counts)
        return shuffled_deflate(counts.astype(dtype), chunk, GZIP_LEVEL)

    with h5py.File(partial, "w") as file:
        file.attrs["statement"] = INVENTED
        frames = file.create_dataset(
            "camera/frames",
            planted.shape,
            dtype,
            chunks=chunk,
            compression="gzip",
            compression_opts=GZIP_LEVEL,
            shuffle=True,
        )
        frames.attrs.update(
            statement=INVENTED,
            layout="rows are frames, two seconds apart; columns are the pixels of one frame, row after row",
            frame_height=FRAME_HEIGHT,
            frame_width=FRAME_WIDTH,
            unit="counts",
        )
        done = 0
        for block, encoded in made_in_order(encode, rectangles(planted.shape, chunk), usable_cores()):
            frames.id.write_direct_chunk((block[0].start, block[1].start), encoded)
            done = _report(progress, planted, block, done, dtype)
    what = "imaging stack, frames × pixels of 160 × 256"
    size = partial.stat().st_size
    return DemoFile(planted.name, path, "/camera/frames", what, planted.shape, dtype, planted.rank, size)


def _write_water(planted: Planted, partial: Path, path: Path, progress: Progress | None) -> DemoFile:
    """Write samples × compounds in single precision: Zarr v3, zstd, chunks compressed in threads."""
    import zarr
    from zarr.codecs import ZstdCodec

    dtype = np.dtype("<f4")
    chunk = (min(SAMPLE_CHUNK[0], planted.shape[0]), SAMPLE_CHUNK[1])
    array = zarr.create_array(
        str(partial),
        shape=planted.shape,
        chunks=chunk,
        dtype=dtype,
        compressors=ZstdCodec(level=1),
        zarr_format=3,
        dimension_names=("sample", "compound"),
        attributes={"statement": INVENTED, "layout": "rows are water samples; columns are dissolved compounds"},
    )

    def encode(block: tuple[slice, slice]) -> None:
        signal = planted.block(*block)
        _add_noise(signal, planted.name, block, planted.noise)
        array[block] = signal

    done = 0
    for block, _ in made_in_order(encode, rectangles(planted.shape, chunk), usable_cores()):
        done = _report(progress, planted, block, done, dtype)
    what = "water samples × dissolved compounds"
    size = sum(part.stat().st_size for part in partial.rglob("*") if part.is_file())
    return DemoFile(planted.name, path, "/", what, planted.shape, dtype, planted.rank, size)


def _write_planted(path: Path, matrices: list[Planted]) -> None:
    """Write the singular triplets of every centred planted part, and the noise, as small named arrays."""
    arrays: dict[str, np.ndarray] = {"statement": np.array(INVENTED), "seed": np.array(SEED)}
    for planted in matrices:
        left, values, right = planted.factors()
        arrays |= {
            f"{planted.name}_left_vectors": left,
            f"{planted.name}_singular_values": values,
            f"{planted.name}_right_vectors": right,
            f"{planted.name}_noise": np.array(planted.noise),
        }
    partial = path.with_name(f"{path.name}.partial")
    with partial.open("wb") as file:
        np.savez(file, **arrays)  # type: ignore[arg-type]
    partial.replace(path)


def _add_noise(entries: np.ndarray, name: str, block: tuple[slice, slice], deviation: float) -> None:
    """Add Gaussian noise that follows from the place of the block alone."""
    rows, columns = block
    place = rows.start << 32 | columns.start
    noise = block_random(SEED, f"{name} noise", place).standard_normal(entries.shape, dtype="f4")
    noise *= np.float32(deviation)
    entries += noise


def _report(progress: Progress | None, planted: Planted, block: tuple[slice, slice], done: int, dtype: np.dtype) -> int:
    """Count a block as done, and say so."""
    rows, columns = block
    done += (rows.stop - rows.start) * (columns.stop - columns.start) * dtype.itemsize
    if progress:
        progress(planted.name, done, planted.shape[0] * planted.shape[1] * dtype.itemsize)
    return done


def _refuse_foreign(path: Path) -> None:
    """Raise unless nothing stands at `path`, or something that the demo wrote."""
    if (path.exists() or path.is_symlink()) and not _is_demo(path):
        raise ResultExistsError(
            f"the demo would write {path.name}, but {path} is there and was not written by the demo",
            remedy="Name another folder: bigsvd demo demo-data",
        )


def _is_demo(path: Path) -> bool:
    """Tell whether the file carries the statement that it is invented."""
    import h5py
    import zarr

    try:
        if path.suffix == ".h5":
            with h5py.File(path) as file:
                return bool(file.attrs["statement"] == INVENTED)
        if path.suffix == ".npz":
            with np.load(path) as arrays:
                return bool(arrays["statement"] == INVENTED)
        return bool(zarr.open_array(str(path), mode="r").attrs["statement"] == INVENTED)
    except (OSError, KeyError, ValueError, EOFError):
        return False


def _refuse_full_disk(folder: Path, stack: Planted, water: Planted) -> None:
    """Raise if the folder's disk cannot hold the files: gzip brings the counts to 0.4, zstd leaves noise as it is."""
    needed = int(0.4 * 2 * stack.shape[0] * stack.shape[1] + 4 * water.shape[0] * water.shape[1])
    free = shutil.disk_usage(folder).free
    if free < needed:
        raise ResultError(
            f"the demo needs {show_bytes(needed)} on the disk of {folder}, which has {show_bytes(free)} free",
            remedy="Name a folder on another disk: bigsvd demo DIR",
        )


def _remove(path: Path) -> None:
    """Remove a file or a folder, if it is there."""
    if path.is_dir() and not path.is_symlink():
        shutil.rmtree(path)
    else:
        path.unlink(missing_ok=True)

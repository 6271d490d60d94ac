"""One candidate, one file, one process: factors into an ``.npz``, the peak resident size as JSON on standard output.

    python bench/worker.py dask big.h5 factors.npz --rank 20 --iterator QR --iterations 2 --compute

Every candidate ends with its factors in files: bigsvd in the store that it always writes, the others by
``numpy.savez``.
"""

from __future__ import annotations

import argparse
import json
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from bench.exact import open_stored
from bench.group import join
from bench.peers import DIRECT_ASPECT

# Bands of the general-purpose libraries. Of 16, 64 and 128 MB the smallest was the fastest (3.4, 8.7, 11.5 s on 1 GB of
# plain HDF5).
BLOCK_BYTES = 16_000_000
# A band of whole stored chunks across the matrix may take so much; wider, blocks are parts of it.
MOST_BAND_BYTES = 64_000_000
# What is told of a run of bigsvd, beside every time.
TOLD = (
    *("sweeps", "predicted_sweeps", "bytes_read", "matrix_bytes", "precision", "width", "workers", "planned_bytes"),
    *("pilot_predicted_seconds", "pilot_predicted_sweeps", "timings", "phases"),
)


def main(arguments: list[str] | None = None) -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("candidate", choices=CANDIDATES)
    parser.add_argument("path", type=Path)
    parser.add_argument("result", type=Path, help=".npz for singular values and right vectors")
    parser.add_argument("--rank", type=int, default=20)
    parser.add_argument("--centred", action="store_true", help="subtract the mean of every column")
    parser.add_argument("--memory", default="768MiB", help="ceiling, for the candidate that takes one")
    parser.add_argument("--limit", help="data:BYTES, as:BYTES or group:FOLDER")
    parser.add_argument("--workers", type=int, help="threads of bigsvd")
    parser.add_argument("--iterator", choices=("QR", "power"), default="power", help="of svd_compressed")
    parser.add_argument(
        "--iterations", type=int, help="power iterations, or steps of LOBPCG; the library's own default"
    )
    parser.add_argument("--normalizer", choices=("auto", "QR", "LU", "none"), default="auto", help="of randomized_svd")
    parser.add_argument("--solver", choices=("arpack", "lobpcg"), default="arpack", help="of svds")
    parser.add_argument("--compute", action="store_true", help="compute=True: read the file again in every iteration")
    parser.add_argument("--double", action="store_true", help="convert to double before the products")
    parser.add_argument("--rust", action="store_true", help="read Zarr by the Rust pipeline")
    parser.add_argument("--auto-chunks", action="store_true", help="dask's chunks='auto' instead of small bands")
    parser.add_argument("--batch", type=int, default=1_000, help="rows of a batch of IncrementalPCA")
    parser.add_argument("--block-bytes", type=int, default=BLOCK_BYTES)
    given = parser.parse_args(arguments)
    if given.limit:
        set_limit(given.limit)
    told = CANDIDATES[given.candidate](given)
    print(json.dumps({"peak_bytes": peak_bytes(), **told}))


def set_limit(words: str) -> None:
    """Have the system refuse this process more memory.

    ``data`` counts what it may write to (RLIMIT_DATA), ``as`` every address (RLIMIT_AS), ``group`` also the pages of
    files that it reads and writes (a control group).
    """
    import resource

    which, _, size = words.partition(":")
    if which == "group":
        join(Path(size))
        return
    resource.setrlimit({"data": resource.RLIMIT_DATA, "as": resource.RLIMIT_AS}[which], (int(size), int(size)))


def peak_bytes() -> int:
    """Largest resident size of this process by the operating system's own record."""
    from bigsvd.machine import peak_resident_bytes

    return peak_resident_bytes()


def run_bigsvd(given: argparse.Namespace) -> dict[str, Any]:
    """bigsvd through its Python interface, its own checks included."""
    import bigsvd

    store = given.result.with_suffix(".zarr")
    factors = bigsvd.decompose(
        given.path,
        store,
        rank=given.rank,
        center="features" if given.centred else "none",
        memory=given.memory,
        workers=given.workers,
        overwrite=True,
    )
    np.savez(given.result, singular_values=factors.singular_values[:], right_vectors=factors.right_vectors[:])
    record, certificate = factors.attributes, factors.certificate
    return {name: value for name, value in record.items() if name in TOLD or name.endswith("seconds")} | {
        "route": record["plan"]["route"],
        "axis": record["plan"]["axis"],
        "pilot_share": record["plan"]["pilot_panels"] / record["plan"]["panels"],
        "decompose_peak_bytes": record["peak_resident_bytes"],
        "tolerance_met": bool(certificate.tolerance_met),
        "verdict": certificate.verdict,
        "lower": [float(value) for value in certificate.lower],
        "upper": [float(value) for value in certificate.upper],
    }


def _lazy(given: argparse.Namespace) -> Any:
    """The stored matrix as a dask array of floating-point numbers."""
    import dask.array as da

    matrix = _open(given)
    chunks: Any = "auto"
    if not given.auto_chunks:
        chunks = block_shape(matrix.shape, matrix.dtype.itemsize, matrix.chunks, given.block_bytes)
    lazy = da.from_array(matrix, chunks=chunks)
    # Integers have no products worth the name: single holds 16 bits exactly.
    lazy = lazy.astype("f8" if given.double else "f4") if given.double or lazy.dtype.kind != "f" else lazy
    return lazy - lazy.mean(axis=0, dtype="f8").astype(lazy.dtype) if given.centred else lazy


def run_dask(given: argparse.Namespace) -> dict[str, Any]:
    """dask.array.linalg.svd_compressed."""
    import dask
    import dask.array as da

    lazy = _lazy(given)
    iterations = {} if given.iterations is None else {"n_power_iter": given.iterations}
    # Single values at the end of a power iteration overflow: that is seen in the error, no warning is needed.
    with np.errstate(all="ignore"):
        lazily = da.linalg.svd_compressed(
            lazy, given.rank, iterator=given.iterator, seed=1, compute=given.compute, **iterations
        )
        left, values, right = dask.compute(*lazily)
    _save(given.result, left, values, right.T)
    return {"chunks": list(lazy.chunksize)}


def run_dask_svd(given: argparse.Namespace) -> dict[str, Any]:
    """dask.array.linalg.svd: tall-skinny QR of bands of whole rows, each taller than wide."""
    import dask
    import dask.array as da

    lazy = _lazy(given)
    rows = min(lazy.shape[0], max(lazy.chunksize[0], DIRECT_ASPECT * lazy.shape[1]))
    left, values, right = da.linalg.svd(lazy.rechunk((rows, lazy.shape[1])))
    left, values, right = dask.compute(left[:, : given.rank], values[: given.rank], right[: given.rank])
    _save(given.result, left, values, right.T)
    return {"chunks": [rows, lazy.shape[1]]}


def run_randomized(given: argparse.Namespace) -> dict[str, Any]:
    """sklearn.utils.extmath.randomized_svd on a memory map: of the file where it is plain, else of a decoded copy."""
    from sklearn.utils.extmath import randomized_svd

    matrix = _open(given)
    with tempfile.TemporaryDirectory(dir=given.result.parent) as folder:
        mapped = None if given.centred else _mapped(given.path, matrix)
        copied = mapped is None
        if mapped is None:
            places = bands(matrix, given.block_bytes)
            mean = _mean(matrix, places) if given.centred else np.zeros(1)
            mapped = np.lib.format.open_memmap(Path(folder) / "copy.npy", "w+", "f4", matrix.shape)
            for place in places:
                np.subtract(matrix[place], mean, out=mapped[place], casting="same_kind")
        iterations = "auto" if given.iterations is None else given.iterations
        with np.errstate(all="ignore"):
            left, values, right = randomized_svd(
                mapped, given.rank, n_iter=iterations, power_iteration_normalizer=given.normalizer, random_state=1
            )
        _save(given.result, left, values, right.T)
        # The file under a map cannot be removed everywhere.
        del mapped
    return {"copied": copied}


def _mapped(path: Path, matrix: Any) -> np.ndarray | None:
    """A map of a floating-point matrix that lies plain in an HDF5 file."""
    if path.is_dir() or matrix.chunks is not None or matrix.dtype.kind != "f":
        return None
    return np.memmap(path, matrix.dtype, "r", offset=matrix.id.get_offset(), shape=matrix.shape)


def run_svds(given: argparse.Namespace) -> dict[str, Any]:
    """scipy.sparse.linalg.svds on an operator that reads the file in bands for every product."""
    import warnings

    from scipy.sparse.linalg import LinearOperator, svds

    matrix = _open(given)
    places = bands(matrix, given.block_bytes)
    mean = _mean(matrix, places) if given.centred else np.zeros(matrix.shape[1])
    reads = 0

    def band(place: slice) -> np.ndarray:
        entries: np.ndarray = np.asarray(matrix[place])
        return entries - mean if given.centred else entries.astype("f8")

    def forward(vector: np.ndarray) -> np.ndarray:
        nonlocal reads
        reads += 1
        return np.concatenate([band(place) @ vector for place in places])

    def backward(vector: np.ndarray) -> np.ndarray:
        nonlocal reads
        reads += 1
        total = np.zeros((matrix.shape[1], *vector.shape[1:]))
        for place in places:
            total += band(place).T @ vector[place]
        return total

    operator = LinearOperator(
        matrix.shape, matvec=forward, rmatvec=backward, matmat=forward, rmatmat=backward, dtype="f8"
    )
    with warnings.catch_warnings():
        # LOBPCG warns of iterations that were not enough: the error beside the time says so.
        warnings.simplefilter("ignore")
        left, values, right = svds(operator, given.rank, solver=given.solver, maxiter=given.iterations, random_state=1)
    order = np.argsort(values)[::-1]
    _save(given.result, left[:, order], values[order], right[order].T)
    return {"reads": reads}


def run_incremental(given: argparse.Namespace) -> dict[str, Any]:
    """sklearn.decomposition.IncrementalPCA over batches; it always centres."""
    from sklearn.decomposition import IncrementalPCA

    if not given.centred:
        raise SystemExit("IncrementalPCA centres: add --centred")
    matrix = _open(given)
    rows = matrix.shape[0]
    # The last batch is joined to the one before where it has fewer rows than components.
    starts = [start for start in range(0, rows, given.batch) if rows - start >= given.rank]
    model = IncrementalPCA(given.rank)
    for start, stop in zip(starts, [*starts[1:], rows], strict=True):
        model.partial_fit(np.asarray(matrix[start:stop], dtype="f4"))
    _save(given.result, None, model.singular_values_, model.components_.T)
    return {"batch": given.batch}


def run_numpy(given: argparse.Namespace) -> dict[str, Any]:
    """numpy.linalg.svd of the whole matrix in memory, in double."""
    whole = np.asarray(_open(given)[...], dtype="f8")
    if given.centred:
        whole -= whole.mean(axis=0)
    left, values, right = np.linalg.svd(whole, full_matrices=False)
    _save(given.result, left[:, : given.rank], values[: given.rank], right[: given.rank].T)
    return {}


CANDIDATES: dict[str, Callable[[argparse.Namespace], dict[str, Any]]] = {
    "bigsvd": run_bigsvd,
    "dask": run_dask,
    "dask-svd": run_dask_svd,
    "randomized": run_randomized,
    "svds": run_svds,
    "incremental": run_incremental,
    "numpy": run_numpy,
}


def block_shape(
    shape: tuple[int, int], itemsize: int, chunks: tuple[int, int] | None, block_bytes: int
) -> tuple[int, int]:
    """Rows and columns of a block of about that many bytes: whole stored chunks, and whole rows where they fit."""
    step = 1 if chunks is None else chunks[0]
    rows = min(shape[0], max(step, block_bytes // (shape[1] * itemsize) // step * step))
    if chunks is None or rows * shape[1] * itemsize <= MOST_BAND_BYTES:
        return rows, shape[1]
    columns = max(chunks[1], block_bytes // (rows * itemsize) // chunks[1] * chunks[1])
    return rows, min(columns, shape[1])


def bands(matrix: Any, block_bytes: int) -> list[slice]:
    """Ranges of rows of about that many bytes, whole stored chunks."""
    step = 1 if matrix.chunks is None else matrix.chunks[0]
    rows = max(step, block_bytes // (matrix.shape[1] * matrix.dtype.itemsize) // step * step)
    return [slice(start, min(start + rows, matrix.shape[0])) for start in range(0, matrix.shape[0], rows)]


def _open(given: argparse.Namespace) -> Any:
    """The stored matrix as its own library gives it."""
    if given.rust:
        import zarr

        zarr.config.set({"codec_pipeline.path": "zarrs.ZarrsCodecPipeline"})
    return open_stored(given.path)


def _mean(matrix: Any, places: list[slice]) -> np.ndarray:
    total = np.zeros(matrix.shape[1])
    for place in places:
        total += np.asarray(matrix[place]).sum(axis=0, dtype="f8")
    total /= matrix.shape[0]
    return total


def _save(path: Path, left: np.ndarray | None, values: np.ndarray, right: np.ndarray) -> None:
    """Keep the factors; left vectors only where the candidate makes them."""
    if left is None:
        np.savez(path, singular_values=values, right_vectors=right)
    else:
        np.savez(path, singular_values=values, right_vectors=right, left_vectors=left)


if __name__ == "__main__":
    main()

"""One candidate, one file, one process: factors into an ``.npz``, the peak resident size as JSON on standard output.

    python bench/worker.py dask big.h5 factors.npz --rank 20 --iterator QR --iterations 2 --compute

Every candidate ends with its factors in files: bigsvd in the store that it always writes, the others by
``numpy.savez``.
"""

from __future__ import annotations

import argparse
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from bench.data import MATRIX

# Bands of the general-purpose libraries. Of 16, 64 and 128 MB the smallest was the fastest (3.4, 8.7, 11.5 s on 1 GB of
# plain HDF5).
BLOCK_BYTES = 16_000_000
STORED_ROWS = 1_000


def main(arguments: list[str] | None = None) -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("candidate", choices=CANDIDATES)
    parser.add_argument("path", type=Path)
    parser.add_argument("result", type=Path, help=".npz for singular values and right vectors")
    parser.add_argument("--rank", type=int, default=20)
    parser.add_argument("--centred", action="store_true", help="subtract the mean of every column")
    parser.add_argument("--memory", default="768MiB", help="ceiling, for the candidate that takes one")
    parser.add_argument("--iterator", choices=("QR", "power"), default="QR")
    parser.add_argument("--iterations", type=int, default=0, help="n_power_iter")
    parser.add_argument("--compute", action="store_true", help="compute=True: read the file again in every iteration")
    parser.add_argument("--double", action="store_true", help="convert to double before the products")
    parser.add_argument("--rust", action="store_true", help="read Zarr by the Rust pipeline")
    parser.add_argument("--block-bytes", type=int, default=BLOCK_BYTES)
    given = parser.parse_args(arguments)
    told = CANDIDATES[given.candidate](given)
    print(json.dumps({"peak_bytes": peak_bytes(), **told}))


def peak_bytes() -> int:
    """Largest resident size of this process by the operating system's own record."""
    from bigsvd.machine import peak_resident_bytes

    return peak_resident_bytes()


def run_bigsvd(given: argparse.Namespace) -> dict[str, Any]:
    """bigsvd through its Python interface, its own checks included."""
    import bigsvd

    store = given.result.with_suffix(".zarr")
    center = "features" if given.centred else "none"
    factors = bigsvd.decompose(given.path, store, rank=given.rank, center=center, memory=given.memory, overwrite=True)
    np.savez(given.result, singular_values=factors.singular_values[:], right_vectors=factors.right_vectors[:])
    record = factors.attributes
    wanted = ("sweeps", "bytes_read", "matrix_bytes", "precision", "workers", "planned_bytes", "timings")
    certificate = factors.certificate
    return {name: record[name] for name in wanted} | {
        "route": record["plan"]["route"],
        "predicted_seconds": record["predicted_seconds"],
        "tolerance_met": bool(certificate.tolerance_met),
        "verdict": certificate.verdict,
        "lower": [float(value) for value in certificate.lower],
        "upper": [float(value) for value in certificate.upper],
    }


def run_dask(given: argparse.Namespace) -> dict[str, Any]:
    """dask.array.linalg.svd_compressed on bands of whole rows."""
    import dask
    import dask.array as da

    matrix = _open(given)
    rows = band_rows(matrix.shape, matrix.dtype.itemsize, given.block_bytes)
    lazy = da.from_array(matrix, chunks=(rows, matrix.shape[1]))
    # Integers have no products worth the name: single holds 16 bits exactly.
    lazy = lazy.astype("f8" if given.double else "f4") if given.double or lazy.dtype.kind != "f" else lazy
    if given.centred:
        lazy = lazy - lazy.mean(axis=0, dtype="f8").astype(lazy.dtype)
    lazily = da.linalg.svd_compressed(
        lazy, given.rank, iterator=given.iterator, n_power_iter=given.iterations, seed=1, compute=given.compute
    )
    left, values, right = dask.compute(*lazily)
    _save(given.result, left, values, right.T)
    return {"block_rows": rows}


def run_svds(given: argparse.Namespace) -> dict[str, Any]:
    """scipy.sparse.linalg.svds on an operator that reads the file in bands for every product."""
    from scipy.sparse.linalg import LinearOperator, svds

    matrix = _open(given)
    rows = band_rows(matrix.shape, matrix.dtype.itemsize, given.block_bytes)
    bands = [slice(start, min(start + rows, matrix.shape[0])) for start in range(0, matrix.shape[0], rows)]
    mean = _mean(matrix, bands) if given.centred else np.zeros(matrix.shape[1])

    def band(place: slice) -> np.ndarray:
        entries: np.ndarray = np.asarray(matrix[place]) - mean
        return entries

    def forward(vector: np.ndarray) -> np.ndarray:
        return np.concatenate([band(place) @ vector for place in bands])

    def backward(vector: np.ndarray) -> np.ndarray:
        total = np.zeros((matrix.shape[1], *vector.shape[1:]))
        for place in bands:
            total += band(place).T @ vector[place]
        return total

    operator = LinearOperator(
        matrix.shape, matvec=forward, rmatvec=backward, matmat=forward, rmatmat=backward, dtype="f8"
    )
    left, values, right = svds(operator, given.rank, random_state=1)
    order = np.argsort(values)[::-1]
    _save(given.result, left[:, order], values[order], right[order].T)
    return {"block_rows": rows}


def run_incremental(given: argparse.Namespace) -> dict[str, Any]:
    """sklearn.decomposition.IncrementalPCA over bands; it always centres."""
    from sklearn.decomposition import IncrementalPCA

    if not given.centred:
        raise SystemExit("IncrementalPCA centres: add --centred")
    matrix = _open(given)
    rows = band_rows(matrix.shape, matrix.dtype.itemsize, given.block_bytes)
    model = IncrementalPCA(given.rank)
    for start in range(0, matrix.shape[0], rows):
        if matrix.shape[0] - start >= given.rank:
            model.partial_fit(np.asarray(matrix[start : start + rows], dtype="f4"))
    _save(given.result, None, model.singular_values_, model.components_.T)
    return {"block_rows": rows}


CANDIDATES: dict[str, Callable[[argparse.Namespace], dict[str, Any]]] = {
    "bigsvd": run_bigsvd,
    "dask": run_dask,
    "svds": run_svds,
    "incremental": run_incremental,
}


def band_rows(shape: tuple[int, int], itemsize: int, block_bytes: int) -> int:
    """Rows of a band of about that many bytes, whole stored chunks where a band holds more than one."""
    rows = max(1, block_bytes // (shape[1] * itemsize))
    return min(shape[0], max(STORED_ROWS, rows // STORED_ROWS * STORED_ROWS))


def _open(given: argparse.Namespace) -> Any:
    """The stored matrix as its own library gives it."""
    if given.path.is_dir():
        import zarr

        if given.rust:
            zarr.config.set({"codec_pipeline.path": "zarrs.ZarrsCodecPipeline"})
        return zarr.open_array(str(given.path), mode="r")
    import h5py

    # The file stays open as long as the process lives.
    return h5py.File(given.path, "r")[MATRIX]


def _mean(matrix: Any, bands: list[slice]) -> np.ndarray:
    total = np.zeros(matrix.shape[1])
    for place in bands:
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

"""Sparse counts: an invented file, and bigsvd on it against SciPy and dask at equal error.

    python bench/counts.py --folder /tmp/bench --rows 100000

The file is HDF5 laid out as AnnData 0.8 writes CSR (groups X, obs, var with their encoding attributes), made in blocks
of a thousand rows, so that any number of rows takes little memory. Its counts are invented: gene means and cell sizes
are log-normal, twelve programmes of cells raise or lower the genes that belong to them, and an entry is stored with
the probability that a negative binomial is above zero (its value is one more than a draw from one).

Every method runs in a process of its own and is timed with its reading. svds (ARPACK, an operator that centres
implicitly, CSR in memory) and dask's svd_compressed (dense blocks: it takes no sparse ones of SciPy) spend more effort
until their largest relative error in a singular value is no more than that of bigsvd. The truth is svds to rounding.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from scipy.sparse import csr_array
from scipy.sparse.linalg import LinearOperator, svds

from bench.worker import peak_bytes

BLOCK, PROGRAMMES, DISPERSION = 1_000, 12, 2.0
STORED_CHUNK = 2**16
# Effort that the others may spend: tolerances of ARPACK, power iterations of svd_compressed.
TOLERANCES = (1e-1, 1e-2, 1e-3, 1e-4, 1e-6, 1e-8, 1e-10, 0.0)
ITERATIONS = (0, 1, 2, 4, 8, 12)
METHODS = ("bigsvd", "svds", "dask")


# ------------------------------------------------------------------------------------------------------------ the file
class Recipe:
    """Invented counts, block by block.

    Parameters
    ----------
    columns : int
    density : float
        Share of the entries that are stored, on average.
    seed : int
    """

    def __init__(self, columns: int, density: float, seed: int) -> None:
        random = np.random.default_rng(seed)
        self.columns, self.seed = columns, seed
        self.gene = random.normal(0, 1.6, columns).astype(np.float32)
        member = random.random((PROGRAMMES, columns)) < 0.08
        self.programme = (random.normal(0, 1.2, (PROGRAMMES, columns)) * member).astype(np.float32)
        low, high = -12.0, 6.0
        while high - low > 1e-3:
            self.level = (low + high) / 2
            share = float(self._stored_probability(self._rate(0)).mean())
            low, high = (self.level, high) if share < density else (low, self.level)

    def _rate(self, block: int) -> np.ndarray:
        """Mean counts of a block of cells, shape (BLOCK, columns)."""
        random = np.random.default_rng([self.seed, 1, block])
        size = random.normal(0, 0.35, BLOCK)
        weight = random.dirichlet(np.full(PROGRAMMES, 0.25), BLOCK).astype(np.float32)
        rate = weight @ self.programme
        rate += self.gene + np.float32(self.level)
        rate += size[:, None].astype(np.float32)
        return np.exp(rate, out=rate)

    @staticmethod
    def _stored_probability(rate: np.ndarray) -> np.ndarray:
        """Probability that a negative binomial of these means is above zero."""
        return -np.expm1(-DISPERSION * np.log1p(rate / DISPERSION))

    def block(self, number: int) -> csr_array:
        """Counts of a thousand cells."""
        random = np.random.default_rng([self.seed, 2, number])
        rate = self._rate(number)
        stored = random.random(rate.shape, np.float32) < self._stored_probability(rate)
        row, column = np.nonzero(stored)
        values = 1 + random.poisson(random.gamma(DISPERSION, rate[row, column] / DISPERSION))
        pointers = np.concatenate([[0], np.cumsum(stored.sum(axis=1))])
        return csr_array((values.astype(np.float32), column.astype(np.int32), pointers), shape=rate.shape)


def write_counts(path: Path, rows: int, columns: int, density: float, compression: str | None, seed: int) -> None:
    """Write the file, block by block."""
    import h5py

    recipe = Recipe(columns, density, seed)
    options: dict[str, Any] = {"maxshape": (None,), "chunks": (STORED_CHUNK,)}
    if compression:
        options |= {"compression": compression, "compression_opts": 1, "shuffle": True}
    partial = path.with_suffix(".partial")
    with h5py.File(partial, "w") as file:
        file.attrs.update({"encoding-type": "anndata", "encoding-version": "0.1.0"})
        group = file.create_group("X")
        group.attrs.update({"encoding-type": "csr_matrix", "encoding-version": "0.1.0", "shape": [rows, columns]})
        data = group.create_dataset("data", (0,), "f4", **options)
        indices = group.create_dataset("indices", (0,), "i4", **options)
        pointers, filled = [np.zeros(1, np.int64)], 0
        for first in range(0, rows, BLOCK):
            part = recipe.block(first // BLOCK)[: min(BLOCK, rows - first)]
            for dataset, values in ((data, part.data), (indices, part.indices)):
                dataset.resize((filled + part.nnz,))
                dataset[filled:] = values
            pointers.append(part.indptr[1:].astype(np.int64) + filled)
            filled += part.nnz
        group.create_dataset("indptr", data=np.concatenate(pointers))
        for name, length, label in (("obs", rows, "cell"), ("var", columns, "gene")):
            frame = file.create_group(name)
            frame.attrs.update({"encoding-type": "dataframe", "encoding-version": "0.2.0", "_index": "_index"})
            frame.attrs.create("column-order", np.array([], "S1"))
            names = frame.create_dataset("_index", data=np.char.add(label, np.arange(length).astype("U")).astype("S"))
            names.attrs.update({"encoding-type": "string-array", "encoding-version": "0.2.0"})
    partial.rename(path)


def read_counts(path: Path) -> csr_array:
    """The whole matrix in memory, as SciPy holds it."""
    import h5py

    with h5py.File(path) as file:
        group = file["X"]
        parts = tuple(group[name][:] for name in ("data", "indices", "indptr"))
        return csr_array(parts, shape=tuple(group.attrs["shape"]))


# --------------------------------------------------------------------------------------------------------- the methods
def centred_operator(lines: csr_array) -> LinearOperator:
    """A − 1μᵀ without filling in zeros."""
    mean = np.asarray(lines.mean(axis=0))
    wide = lines.astype(np.float64)
    turned = wide.T.tocsr()
    return LinearOperator(
        lines.shape,
        matvec=lambda v: wide @ v - mean @ v,
        rmatvec=lambda u: turned @ u - mean * u.sum(),
        matmat=lambda v: wide @ v - mean @ v,
        rmatmat=lambda u: turned @ u - np.outer(mean, u.sum(axis=0)),
        dtype=np.float64,
    )


def by_svds(path: Path, rank: int, tolerance: float) -> np.ndarray:
    """Leading values by ARPACK."""
    start = np.random.default_rng(1).standard_normal(min(read_shape(path)))
    values = svds(centred_operator(read_counts(path)), rank, tol=tolerance, return_singular_vectors=True, v0=start)[1]
    return np.sort(values)[::-1]


def by_dask(path: Path, rank: int, iterations: int) -> np.ndarray:
    """Leading values by randomized compression of dense centred blocks."""
    import dask.array as da

    lines = read_counts(path)
    mean = np.asarray(lines.mean(axis=0))
    heights = tuple(min(BLOCK, lines.shape[0] - first) for first in range(0, lines.shape[0], BLOCK))

    def dense(block_info: Any = None) -> np.ndarray:
        (first, stop), _ = block_info[None]["array-location"]
        return np.asarray(lines[first:stop].toarray() - mean, np.float64)

    blocks = da.map_blocks(dense, chunks=(heights, (lines.shape[1],)), dtype=np.float64)
    values = da.linalg.svd_compressed(blocks, rank, n_power_iter=iterations, n_oversamples=rank + 10, seed=1)[1]
    return np.asarray(values.compute())


def by_bigsvd(path: Path, rank: int, memory: str, products: str) -> tuple[np.ndarray, dict[str, Any]]:
    """Leading values with their certificate."""
    import bigsvd

    factors = bigsvd.decompose(path, matrix="X", rank=rank, memory=memory, products=products)
    told = {name: factors.attributes[name] for name in ("sweeps", "precision", "planned_bytes")}
    told["products"] = dict(factors.attributes["plan"]["reasons"]).get("products", "")
    return np.asarray(factors.singular_values[:]), told | {"verdict": factors.certificate.verdict}


def read_shape(path: Path) -> tuple[int, int]:
    """Rows and columns, as the file says."""
    import h5py

    with h5py.File(path) as file:
        rows, columns = file["X"].attrs["shape"]
        return int(rows), int(columns)


def truth_of(path: Path, rank: int) -> np.ndarray:
    """Leading values to rounding, kept beside the file."""
    kept = path.with_name(f"{path.name}.truth-{rank}.npy")
    if not kept.is_file():
        np.save(kept, by_svds(path, rank, 0.0))
    found: np.ndarray = np.load(kept)
    return found


def one(words: list[str]) -> None:
    """Run one method in this process and print what it took."""
    path, rank, method, effort = Path(words[0]), int(words[1]), words[2], words[3]
    start, told = time.perf_counter(), {}
    if method == "bigsvd":
        memory, products = effort.split(",")
        values, told = by_bigsvd(path, rank, memory, products)
    else:
        by: Callable[[Path, int, Any], np.ndarray] = by_svds if method == "svds" else by_dask
        values = by(path, rank, float(effort) if method == "svds" else int(effort))
    taken = {"seconds": time.perf_counter() - start, "peak_bytes": peak_bytes(), "values": values.tolist()}
    print(json.dumps(taken | told))


def run(path: Path, rank: int, method: str, effort: object) -> dict[str, Any]:
    """Run one method in a process of its own."""
    words = [sys.executable, __file__, "--one", str(path), str(rank), method, str(effort)]
    done = subprocess.run(words, capture_output=True, text=True, check=False)
    if done.returncode:
        raise SystemExit(f"{method} ended with status {done.returncode}:\n{done.stderr[-2000:]}")
    found: dict[str, Any] = json.loads(done.stdout.splitlines()[-1])
    return found | {"method": method, "effort": str(effort)}


def compare(path: Path, rank: int, memory: str, products: str, methods: list[str]) -> list[dict[str, Any]]:
    """bigsvd, then every other with the least effort that errs no more."""
    truth = truth_of(path, rank)

    def error(found: dict[str, Any]) -> float:
        return float(np.max(np.abs(np.asarray(found.pop("values")) - truth) / truth))

    records: list[dict[str, Any]] = []
    wanted = 0.0
    for method in methods:
        efforts: tuple[object, ...] = {
            "bigsvd": (f"{memory},{products}",), "svds": TOLERANCES, "dask": ITERATIONS
        }[method]  # fmt: skip
        for effort in efforts:
            found = run(path, rank, method, effort)
            found["largest_error"] = error(found)
            if method == "bigsvd":
                wanted = found["largest_error"]
            if found["largest_error"] <= max(wanted, 1e-12):
                break
        records.append(found | {"as_accurate": found["largest_error"] <= max(wanted, 1e-12)})
        print(shown(records[-1]), flush=True)
    return records


def shown(record: dict[str, Any]) -> str:
    """A record in one line."""
    note = "" if record["as_accurate"] else "  (not as accurate)"
    more = f"  {record['products']}; {record['verdict']}" if record["method"] == "bigsvd" else ""
    return (
        f"{record['method']:8} {record['seconds']:8.1f} s  {record['peak_bytes'] / 2**20:7.0f} MiB"
        f"  error {record['largest_error']:.1e}  effort {record['effort']}{note}{more}"
    )


def main(arguments: list[str] | None = None) -> None:
    arguments = sys.argv[1:] if arguments is None else arguments
    if arguments[:1] == ["--one"]:
        one(arguments[1:])
        return
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--folder", type=Path, required=True, help="where the file lies, or is made")
    parser.add_argument("--rows", type=int, default=100_000)
    parser.add_argument("--columns", type=int, default=20_000)
    parser.add_argument("--density", type=float, default=0.05)
    parser.add_argument("--compression", choices=("none", "gzip"), default="gzip")
    parser.add_argument("--rank", type=int, default=20)
    parser.add_argument("--memory", default="1GiB", help="ceiling of bigsvd")
    parser.add_argument("--products", choices=("auto", "sparse", "dense"), default="auto")
    parser.add_argument("--methods", nargs="+", choices=METHODS, default=list(METHODS))
    parser.add_argument("--make-only", action="store_true", help="make the file and stop")
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args(arguments)
    name = f"counts-{given.rows}x{given.columns}-{given.density:g}-{given.compression}.h5ad"
    path = given.folder / name
    if not path.exists():
        start = time.perf_counter()
        compression = None if given.compression == "none" else given.compression
        write_counts(path, given.rows, given.columns, given.density, compression, given.seed)
        print(
            f"{path.name} made in {time.perf_counter() - start:.0f} s, {path.stat().st_size / 1e6:.0f} MB", flush=True
        )
    if not given.make_only:
        records = compare(path, given.rank, given.memory, given.products, given.methods)
        path.with_suffix(".json").write_text(json.dumps(records, indent=1))


if __name__ == "__main__":
    main()

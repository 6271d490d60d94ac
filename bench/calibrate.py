"""Measure every nominal rate of bigsvd/plan/rates.py on this machine, and print them as they stand there.

    python bench/calibrate.py

Small matrices are written, read, converted and multiplied by the functions of a run, with one worker and with two at
once: what two lose against one is the crowding. Processor time is taken, and of several runs the fastest counts, so
that a busy machine spoils little; calibrate on a quiet one all the same. Takes about two minutes, and 500 MB in the
folder for temporary files.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

import numpy as np
from scipy.sparse import csr_array

import bigsvd
from bench.data import make_recipe
from bigsvd.plan import NOMINAL, SHARED, UNIT_LINES, Geometry, Rate, Rates, fold_lines
from bigsvd.plan.geometry import cut
from bigsvd.plan.phases import IDLE
from bigsvd.plan.sparse import SPARSE_UNIT_LINES
from bigsvd.prepare import Preparation
from bigsvd.solve.dense import gram_eigen, orthonormalise, triangle_svd
from bigsvd.source import MatrixSpec, Source
from bigsvd.sweep import Control, PanelReader, Scratch, SweepTask, one_blas_thread, one_segment, segment
from bigsvd.sweep.events import Stopwatch

ROWS, COLUMNS = 8_000, 4_000
CHUNK, SMALL_CHUNK = (1_000, 2_000), (100, 100)
# Lines of panels so low that adding products up is seen.
LOW = 64
NARROW, WIDE = 24, 104
# Counts: so many genes, so many of them stored.
SPARSE_ROWS, SPARSE_COLUMNS, SPARSE_SHARE = 4_096, 20_000, 0.05
# A matrix this wide for AᴴA and Householder QR, whose cost grows with the square.
SQUARE = 1_000
RANK = 20
# A rate is told with so many figures; the rest is noise.
FIGURES = 2

Spent = dict[str, float]


class Bench:
    """Times work by phases, alone and by two workers at once.

    Parameters
    ----------
    runs : int
        Of which the fastest counts.
    folder : Path
    """

    def __init__(self, runs: int, folder: Path) -> None:
        self.runs, self.folder = runs, folder

    def rates(self, work: float, time_it: Callable[[int], Spent], phase: str, less: Spent | None = None) -> Rate:
        """A rate and its crowding, from worker-seconds of a phase; `less` was spent on something else in it."""
        alone, both = (min(time_it(workers)[phase] for _ in range(self.runs)) for workers in (1, 2))
        first, second = (less or {}).get("1", 0.0), (less or {}).get("2", 0.0)
        return rate(work, alone - first, both - second)

    def seconds(self, time_it: Callable[[int], Spent], phase: str) -> Spent:
        """Worker-seconds of a phase with one worker, and with two."""
        return {str(workers): min(time_it(workers)[phase] for _ in range(self.runs)) for workers in (1, 2)}


class ProcessorWatch(Stopwatch):
    """Takes the processor time of the thread, which other programs hardly change."""

    def start(self, phase: str) -> None:
        """End the present phase and begin another."""
        now = time.thread_time()
        if self._phase:
            self.seconds[self._phase] = self.seconds.get(self._phase, 0.0) + now - self._since
        self._phase, self._since = phase, now


def rate(work: float, alone: float, both: float) -> Rate:
    """So much work in so many worker-seconds."""
    alone = max(alone, 1e-9)
    return Rate(figures(work / alone), min(1.0, max(0.0, round(both / alone - 1, 2))))


def figures(value: float) -> float:
    """The leading figures."""
    return float(f"{value:.{FIGURES - 1}e}")


def together(workers: int, work: Callable[[int], None]) -> None:
    """Let all do their share at once; the first error of any is raised."""
    with ThreadPoolExecutor(workers) as pool:
        for share in [pool.submit(work, index) for index in range(workers)]:
            share.result()


def swept(source: Source, geometry: Geometry, workers: int, scratch: Scratch | None, **task: Any) -> Spent:
    """Worker-seconds by phase of one pass over all panels, a segment for each worker."""
    control = Control()
    asked = SweepTask(PanelReader(source, geometry, control), scratch=scratch, **task)
    panels = geometry.panels

    def work(index: int) -> None:
        one_segment.run_segment(asked, panels * index // workers, panels * (index + 1) // workers)

    together(workers, work)
    spent = control.spent()
    return {phase: spent.get(phase, 0.0) for phase in ("read", "convert", "products", "fold", "scratch")}


def panels_of(source: Source, lines: int = UNIT_LINES) -> Geometry:
    """Panels of a unit, or of a chunk where those are larger."""
    unit = min(source.spec.chunks[0], source.spec.shape[0])
    return cut(source.spec, 0, 0, 2**30, max(unit, lines))


# ------------------------------------------------------------------------------------------------------------ reading
def read_seconds(source: Source, workers: int) -> Spent:
    """Worker-seconds of reading all panels."""
    geometry = panels_of(source)
    reader = PanelReader(source, geometry, Control())
    spent = [0.0] * workers
    # Waiting for the lock of a library is time that counts.
    clock = time.perf_counter if "library" in source.spec.codecs else time.thread_time

    def work(index: int) -> None:
        buffer = reader.buffer()
        buffer.fill(0)
        start = clock()
        for panel in range(index, geometry.panels, workers):
            reader.fetch(panel, buffer)
        spent[index] = clock() - start

    together(workers, work)
    return {"read": sum(spent)}


def hdf5_file(path: Path, values: np.ndarray, **options: Any) -> Source:
    """Write a dataset and open it."""
    import h5py

    with h5py.File(path, "w") as file:
        file.create_dataset("x", data=values, **options)
    return bigsvd.open_matrix(path)


def zarr_store(path: Path, values: np.ndarray, compressors: Any, zarr_format: Any, **options: Any) -> Source:
    """Write an array and open it."""
    import zarr

    array = zarr.create_array(
        str(path), shape=values.shape, chunks=CHUNK, dtype=values.dtype, compressors=compressors,
        zarr_format=zarr_format, **options,
    )  # fmt: skip
    array[:] = values
    return bigsvd.open_matrix(path)


def reading(bench: Bench) -> dict[str, Any]:
    """Rates of fetching by storage class, of decoding by codec beyond that, and of entries of sparse matrices."""
    import hdf5plugin
    import numcodecs
    from zarr.codecs import Crc32cCodec, ZstdCodec

    floats, counts = sample("zarr-zstd"), sample("hdf5-gzip")
    folder = bench.folder
    np.save(folder / "x.npy", floats)
    chunked: dict[str, Any] = {"chunks": CHUNK}
    fetched = {
        "memory": bigsvd.open_matrix(floats),
        "npy": bigsvd.open_matrix(folder / "x.npy"),
        "plain": hdf5_file(folder / "plain.h5", floats),
        "compressed": hdf5_file(folder / "chunked.h5", floats, **chunked),
        "zarr": zarr_store(folder / "bare.zarr", floats, None, 3),
    }
    known = {
        name: bench.seconds(lambda workers, it=source: read_seconds(it, workers), "read")
        for name, source in fetched.items()
    }
    fetch = {name: rate(floats.nbytes, spent["1"], spent["2"]) for name, spent in known.items()}
    shuffled = {**chunked, "shuffle": True}
    gzipped = {**shuffled, "compression": "gzip", "compression_opts": 1}
    coded: list[tuple[str, tuple[str, ...], Source]] = [
        ("shuffle", (), hdf5_file(folder / "shuffle.h5", counts, **shuffled)),
        ("fletcher32", (), hdf5_file(folder / "fletcher.h5", counts, fletcher32=True, **chunked)),
        ("gzip", ("shuffle",), hdf5_file(folder / "gzip.h5", counts, **gzipped)),
        ("lzf", ("shuffle",), hdf5_file(folder / "lzf.h5", counts, compression="lzf", **shuffled)),
        ("szip", (), hdf5_file(folder / "szip.h5", counts, compression="szip", compression_opts=("nn", 8), **chunked)),
        ("lz4", (), hdf5_file(folder / "lz4.h5", counts, **chunked, **hdf5plugin.LZ4())),
        ("bitshuffle", (), hdf5_file(folder / "bits.h5", counts, **chunked, **hdf5plugin.Bitshuffle(cname="lz4"))),
        ("blosc2", (), hdf5_file(folder / "blosc2.h5", counts, **chunked, **hdf5plugin.Blosc2(cname="lz4"))),
        ("library", (), hdf5_file(folder / "offset.h5", counts, scaleoffset=0, **chunked)),
        ("zstd", (), zarr_store(folder / "zstd.zarr", floats, ZstdCodec(), 3)),
        ("zlib", (), zarr_store(folder / "zlib.zarr", counts, numcodecs.Zlib(1), 2)),
        ("blosc", (), zarr_store(folder / "blosc.zarr", floats, numcodecs.Blosc("lz4", 5, numcodecs.Blosc.SHUFFLE), 2)),
        ("crc32c", (), zarr_store(folder / "crc.zarr", floats, Crc32cCodec(), 3)),
    ]  # fmt: skip
    decode: dict[str, Rate] = {}
    for name, beside, source in coded:
        spent = read_twice(bench, source)
        size = source.spec.decoded_bytes
        under = [fetch[source.spec.storage], *(decode[other] for other in beside)]
        left = {workers: spent[workers] - sum(one.seconds(size, int(workers)) for one in under) for workers in spent}
        decode[name] = rate(size, *(max(left[workers], 0.02 * spent[workers]) for workers in ("1", "2")))
    small = hdf5_file(folder / "small.h5", floats[:1000], chunks=SMALL_CHUNK)
    spent = read_twice(bench, small)
    size = small.spec.decoded_bytes
    left = [max(1e-9, spent[str(w)] - fetch["compressed"].seconds(size, w)) for w in (1, 2)]
    chunk = rate(size / (SMALL_CHUNK[0] * SMALL_CHUNK[1] * floats.itemsize), *left)
    few, many = (sparse_file(folder / f"{each}.h5", each) for each in (1, COLUMNS // 10))
    bare, filled = read_twice(bench, few), read_twice(bench, many)
    fetch["sparse"] = rate(few.spec.decoded_bytes, bare["1"], bare["2"])
    entries = rate(float(ROWS * (COLUMNS // 10)), *(max(1e-9, filled[w] - bare[w]) for w in ("1", "2")))
    fetch["graph"] = NOMINAL.fetch["graph"]
    return {"fetch": fetch, "decode": decode, "chunk": chunk, "entries": entries}


def sparse_file(path: Path, each: int) -> Source:
    """Write a matrix compressed by rows, with so many entries in each, and open it."""
    import h5py

    random, stride = np.random.default_rng(1), COLUMNS // each
    places = np.arange(each) * stride + random.integers(0, stride, (ROWS, each))
    with h5py.File(path, "w") as file:
        group = file.create_group("x")
        group.attrs.update({"encoding-type": "csr_matrix", "shape": (ROWS, COLUMNS)})
        group["data"] = random.poisson(1.5, places.size).astype("f4") + 1
        group["indices"], group["indptr"] = places.astype("i4").ravel(), np.arange(ROWS + 1) * each
    return bigsvd.open_matrix(path)


def read_twice(bench: Bench, source: Source) -> Spent:
    """Seconds of reading with one worker, and with two."""
    return bench.seconds(lambda workers: read_seconds(source, workers), "read")


def sample(kind: str, rows: int = ROWS, columns: int = COLUMNS, spectrum: str = "exponential") -> np.ndarray:
    """A benchmark matrix, whose entries compress as those of the benchmark do."""
    recipe = make_recipe(kind, rows, columns, spectrum=spectrum)
    bands = [slice(first, first + 1_000) for first in range(0, rows, 1_000)]
    return np.concatenate([recipe.block((band, slice(0, columns))) for band in bands])


# ---------------------------------------------------------------------------------------------------------- computing
def converting(bench: Bench) -> dict[str, Any]:
    """Rates of what is done to every entry before it is multiplied."""
    counts = sample("hdf5-gzip")
    entries = float(counts.size)
    stored = {"single": counts.astype("f4"), "double": counts.astype("f8")}
    plain = Preparation(across_features=True, center=False, scale=False)
    found: dict[str, Any] = {"convert": {}, "energy": {}, "sums": {}}

    def convert(values: np.ndarray, work: str, preparation: Preparation, **flags: Any) -> Spent:
        source = bigsvd.open_matrix(values)
        task = {"preparation": preparation, "dtype": np.dtype(work), "kind": "basis", "add_energy": False} | flags
        geometry = panels_of(source)
        return bench.seconds(lambda workers: swept(source, geometry, workers, None, **task), "convert")

    def beside(spent: Spent, less: Spent) -> Rate:
        return rate(entries, *(max(spent[w] - less[w], 0.02 * spent[w]) for w in ("1", "2")))

    for name, work in (("single", "f4"), ("double", "f8")):
        bare = convert(stored[name], work, plain)
        found["ledger"] = rate(stored[name].nbytes, bare["1"], bare["2"])
        found["energy"][name] = beside(convert(stored[name], work, plain, add_energy=True), bare)
        shifted = replace(plain, center=True, shift=np.ones(COLUMNS, work))
        moved = convert(counts, work, shifted)
        found["convert"][name] = beside(moved, _ledger(counts, found["ledger"]))
        found["sums"][name] = beside(convert(counts, work, shifted, add_lines=True), moved)
        if name == "double":
            lines = Preparation(across_features=False, center=True, scale=False)
            found["statistics"] = beside(convert(counts, work, lines, line_features=True), moved)
            scaled = replace(shifted, scale=True, inverse_scale=np.ones(COLUMNS))
            found["learn"] = beside(convert(counts, work, scaled, add_lines=True, learn=True), moved)
    return found


def _ledger(values: np.ndarray, ledger: Rate) -> Spent:
    """Seconds that summing the words takes."""
    return {str(workers): ledger.seconds(values.nbytes, workers) for workers in (1, 2)}


def multiplying(bench: Bench) -> dict[str, Any]:
    """Rates of products, folds and scratch."""
    found: dict[str, Any] = {"products": {}, "per_entry": {}}
    plain = Preparation(across_features=True, center=False, scale=False)
    entries = float(ROWS * COLUMNS)
    for name, work in (("single", "f4"), ("double", "f8")):
        source = bigsvd.open_matrix(np.random.default_rng(1).standard_normal((ROWS, COLUMNS)).astype(work))

        def spent(columns: int, lines: int = UNIT_LINES, source: Source = source, work: str = work) -> Spent:
            block = np.full((COLUMNS, columns), 1 / COLUMNS, work)
            task = {"preparation": plain, "dtype": np.dtype(work), "kind": "basis", "block": block}
            geometry = panels_of(source, lines)
            return bench.seconds(lambda workers: swept(source, geometry, workers, None, **task), "products")

        few, many, low = spent(NARROW), spent(WIDE), spent(WIDE, LOW)
        units = {lines: -(-ROWS // lines) for lines in (UNIT_LINES, LOW)}
        # Beyond what adding up takes, low panels multiply as fast.
        added = {w: (low[w] - many[w]) / (units[LOW] - units[UNIT_LINES]) * units[UNIT_LINES] for w in ("1", "2")}
        if name == "single":
            found["accumulate"] = rate(float(units[UNIT_LINES] * WIDE * COLUMNS), added["1"], added["2"])
        slope = {w: (many[w] - few[w]) / (WIDE - NARROW) for w in ("1", "2")}
        found["products"][name] = rate(4 * entries, *(slope[w] - added[w] / WIDE for w in ("1", "2")))
        found["per_entry"][name] = rate(entries, *(max(few[w] - NARROW * slope[w], 0.02 * few[w]) for w in ("1", "2")))
    return found | _folding(bench) | _whole(bench)


class Lines:
    """Sparse lines in memory, as a source gives them.

    Parameters
    ----------
    lines : csr_array
    """

    def __init__(self, lines: csr_array) -> None:
        self.lines = lines
        self.spec = MatrixSpec(
            "lines in memory", lines.shape, lines.dtype, (1, lines.shape[1]), "sparse", nonzeros=lines.nnz,
            compressed_axis=0,
        )  # fmt: skip

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        out[...] = self.lines[rows[0] : rows[1], columns[0] : columns[1]].toarray()

    def read_lines(self, first: int, stop: int) -> csr_array:
        return self.lines[first:stop]

    def lines_nonzeros(self, first: int, stop: int) -> int:
        return int(self.lines.indptr[stop] - self.lines.indptr[first])

    def close(self) -> None:
        """Nothing is open."""


def leaving_out_zeros(bench: Bench) -> dict[str, Any]:
    """Rates of what is done to nonzeros: counts of which a share is stored, as wide as they come.

    What reading them takes, ``fetch["sparse"]`` and ``entries``, depends on the file; it stays as it is.
    """
    random = np.random.default_rng(1)
    stored = random.random((SPARSE_ROWS, SPARSE_COLUMNS), np.float32) < SPARSE_SHARE
    counts = csr_array(stored.astype(np.float32) * random.poisson(2, stored.shape).astype(np.float32))
    found: dict[str, Any] = {"spmm": {}}
    plain = Preparation(across_features=True, center=False, scale=False)
    shifted = replace(plain, center=True, shift=np.ones(SPARSE_COLUMNS))
    source = Lines(counts)
    for name, work in (("double", "f8"), ("single", "f4")):
        geometry = cut(source.spec, 0, 0, 2**30, SPARSE_UNIT_LINES, source.lines_nonzeros)

        def spent(
            phase: str,
            columns: int,
            made: Preparation = plain,
            work: str = work,
            geometry: Geometry = geometry,
            **flags: Any,
        ) -> Spent:
            block = np.full((SPARSE_COLUMNS, columns), 1 / SPARSE_COLUMNS, work) if columns else None
            task = {"preparation": made, "dtype": np.dtype(work), "kind": "basis", "block": block} | flags
            return bench.seconds(lambda workers: swept(source, geometry, workers, None, **task), phase)

        few, many = (spent("products", columns, add_energy=False) for columns in (NARROW, WIDE))
        found["spmm"][name] = rate(4.0 * counts.nnz * (WIDE - NARROW), *(many[w] - few[w] for w in ("1", "2")))
        if name == "double":
            bare, turned = spent("convert", 0, add_energy=False), spent("convert", NARROW, add_energy=False)
            summed = spent("convert", 0, shifted, add_lines=True)
            found["turn"] = rate(counts.nnz, *(max(turned[w] - bare[w], 1e-9) for w in ("1", "2")))
            found["nonzero_sums"] = rate(counts.nnz, *(max(summed[w] - bare[w], 1e-9) for w in ("1", "2")))
    return found


def _folding(bench: Bench) -> dict[str, Rate]:
    """Rates of folding and of scratch, from a matrix so narrow that products do not matter."""
    lines, across = 200_000, 128
    values = np.random.default_rng(1).standard_normal((lines, across))
    source = bigsvd.open_matrix(values)
    geometry = panels_of(source)
    basis = np.linalg.qr(np.random.default_rng(2).standard_normal((across, across)))[0]
    plain = Preparation(across_features=True, center=False, scale=False)

    def spent(workers: int) -> Spent:
        with tempfile.TemporaryDirectory(dir=bench.folder) as folder:
            scratch = Scratch(Path(folder), lines, np.dtype("f8"))
            target = scratch.add_block(WIDE)
            found = swept(source, geometry, workers, scratch, preparation=plain, dtype=np.dtype("f8"), kind="basis",
                          block=basis[:, :WIDE], target=target)  # fmt: skip
            again = [0.0] * workers

            def work(index: int) -> None:
                start = time.thread_time()
                for first in range(index * UNIT_LINES, lines, workers * UNIT_LINES):
                    scratch.read(first, min(first + UNIT_LINES, lines))
                again[index] = time.thread_time() - start

            together(workers, work)
            scratch.close()
        return {**found, "again": sum(again)}

    runs = {w: [spent(w) for _ in range(bench.runs)] for w in (1, 2)}
    fold, write, read = ([min(run[phase] for run in runs[w]) for w in (1, 2)] for phase in ("fold", "scratch", "again"))
    return {
        "fold": rate(3.0 * lines * WIDE**2, *fold),
        "scratch_write": rate(8.0 * lines * WIDE, *write),
        "scratch_read": rate(8.0 * lines * WIDE, *read),
    }


def _whole(bench: Bench) -> dict[str, Rate]:
    """Rates of AᴴA and of Householder QR of the matrix itself."""
    lines = 4 * fold_lines(SQUARE)
    source = bigsvd.open_matrix(np.random.default_rng(1).standard_normal((lines, SQUARE)))
    plain = Preparation(across_features=True, center=False, scale=False)
    geometry = panels_of(source)
    found = {}
    for name, kind, phase, flops in (("gram", "gram", "products", 1.0), ("qr", "fold", "fold", 2.0)):
        task = {"preparation": plain, "dtype": np.dtype("f8"), "kind": kind}
        found[name] = bench.rates(
            flops * lines * SQUARE**2, lambda workers, it=task: swept(source, geometry, workers, None, **it), phase
        )
    return found


def dense(bench: Bench) -> dict[str, Rate]:
    """Rates of what the caller does alone."""
    random = np.random.default_rng(1)
    across, block, width = 5_000, 80, 120
    basis = np.linalg.qr(random.standard_normal((across, width)))[0]
    columns = random.standard_normal((across, block))
    square = random.standard_normal((SQUARE, SQUARE))
    triangle = np.triu(random.standard_normal((300, 300)))

    def least(work: Callable[[], object]) -> float:
        found = []
        for _ in range(bench.runs + 1):
            start = time.perf_counter()
            work()
            found.append(time.perf_counter() - start)
        return min(found)

    join = least(lambda: orthonormalise(columns.copy(), basis))
    return {
        "basis": Rate(figures(12.0 * across * block * (width + block) / join)),
        "eigen": Rate(figures(SQUARE**3 / least(lambda: gram_eigen(square @ square.T)))),
        "svd": Rate(figures(300**3 / least(lambda: triangle_svd(triangle)))),
    }


# --------------------------------------------------------------------------------------------------------- whole runs
RUN = """
import json, sys, tempfile
from pathlib import Path
import bigsvd
with tempfile.TemporaryDirectory(dir=sys.argv[2]) as folder:
    options = {"rank": int(sys.argv[3]), "center": "none", "route": "krylov", "workers": 2}
    factors = bigsvd.decompose(sys.argv[1], Path(folder) / "out", **options)
record = factors.attributes
taken = {name: one["measured"] for name, one in record["phases"].items()}
print(json.dumps(taken | {name: record[name] for name in ("sweeps", "width")}))
"""


def whole_runs(bench: Bench, rates: Rates) -> dict[str, Any]:
    """What every run takes for start, slices and result, from small runs, each in a process of its own."""
    # Slices of the first are 66 × 256, of the second 1,000 × 300.
    square, long = (20_000, 5_000), (300_000, 300)
    taken = {}
    for shape in (square, long):
        path = bench.folder / f"{shape[0]}.npy"
        np.save(path, sample("hdf5-gzip", *shape, spectrum="inverse"))
        runs = [_run(bench, path) for _ in range(bench.runs)]
        taken[shape] = {name: min(run[name] for run in runs) for name in runs[0]}
    # What is written, beside taking left vectors from scratch twice.
    size = {shape: 8.0 * sum(shape) * RANK for shape in taken}
    left = {shape: run["store"] - _tall_seconds(shape[0], run["width"], rates) for shape, run in taken.items()}
    store = Rate(figures((size[long] - size[square]) / max(1e-2, left[long] - left[square])))
    # Beside what workers wait for the last of eight segments.
    waiting = taken[square]["waiting"] - IDLE / 8 * sum(taken[square][phase] for phase in SHARED)
    return {
        "store": store,
        "start_seconds": figures(taken[square]["start"]),
        "sweep_seconds": figures(max(0.01, waiting / taken[square]["sweeps"])),
        "slice_seconds": figures(taken[square]["slices"] / 3),
        "slice": Rate(figures(3 * 1_000 * 300**2 / max(1e-3, taken[long]["slices"] - taken[square]["slices"]))),
        "store_seconds": figures(max(0.01, left[square] - store.seconds(size[square]))),
    }


def _tall_seconds(lines: int, width: float, rates: Rates) -> float:
    """Seconds of taking left vectors from scratch twice."""
    flops = 2.0 * lines * (width**2 + 2 * width * RANK)
    return 2 * (rates.scratch_read.seconds(8.0 * lines * width) + rates.products["double"].seconds(flops))


def _run(bench: Bench, path: Path) -> dict[str, float]:
    """Seconds of every phase of one run."""
    words = [sys.executable, "-c", RUN, str(path), str(bench.folder), str(RANK)]
    found: dict[str, float] = json.loads(subprocess.run(words, check=True, capture_output=True, text=True).stdout)
    return found


# -------------------------------------------------------------------------------------------------------------- all
def calibrate(bench: Bench) -> Rates:
    """Measure everything."""
    found: dict[str, Any] = {}
    # The class of the clock is looked up by its name at every segment.
    segment.Stopwatch = ProcessorWatch  # type: ignore[misc]
    with one_blas_thread():
        for part in (reading, converting, multiplying, leaving_out_zeros, dense):
            print(f"{part.__name__} …", file=sys.stderr, flush=True)
            found |= part(bench)
    rates = replace(NOMINAL, **found)
    print("whole runs …", file=sys.stderr, flush=True)
    return replace(rates, **whole_runs(bench, rates))


def as_code(rates: Rates) -> str:
    """The expression that stands in bigsvd/plan/rates.py."""
    lines = ["NOMINAL = Rates("]
    for field in fields(rates):
        value = getattr(rates, field.name)
        if isinstance(value, Mapping):
            inside = [f'        "{name}": {_shown(one)},' for name, one in value.items()]
            lines += [f"    {field.name}={{", *inside, "    },"]
        else:
            lines.append(f"    {field.name}={_shown(value)},")
    return "\n".join([*lines, ")"])


def _shown(value: Rate | float) -> str:
    """A rate or a number as code."""
    if isinstance(value, Rate):
        return f"Rate({value.alone:.3g}, {value.crowding:g})" if value.crowding else f"Rate({value.alone:.3g})"
    return f"{value:.3g}"


def main(arguments: list[str] | None = None) -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--runs", type=int, default=3, help="of which the fastest counts")
    given = parser.parse_args(arguments)
    start = time.perf_counter()
    with tempfile.TemporaryDirectory() as folder:
        rates = calibrate(Bench(given.runs, Path(folder)))
    print(as_code(rates))
    print(f"{time.perf_counter() - start:.0f} s", file=sys.stderr)


if __name__ == "__main__":
    main()

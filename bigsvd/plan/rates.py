"""Nominal rates: what costs are compared with. Data, so that a command makes the same choices on every machine."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass


@dataclass(frozen=True)
class Rate:
    """How fast workers do one kind of work.

    Attributes
    ----------
    alone : float
        Work per second of one worker that has the machine to itself.
    crowding : float
        Each further worker slows every one by this share of its time: 0 for work inside the processor, 1 where only one
        worker at a time gets on.
    """

    alone: float
    crowding: float = 0.0

    def seconds(self, work: float, workers: int = 1) -> float:
        """Worker-seconds that so much work takes when so many workers share it."""
        return work / self.alone * (1 + self.crowding * (workers - 1))


@dataclass(frozen=True)
class Rates:
    """All rates, by the names of storage classes, codecs and working precisions.

    Attributes
    ----------
    fetch : mapping of str to Rate
        Decoded bytes, by storage class, with nothing to be decoded.
    decode : mapping of str to Rate
        Decoded bytes, by codec, beyond that. ``library`` also stands for codecs that are not listed.
    chunk : Rate
        Chunks found and taken apart.
    ledger : Rate
        Bytes summed up to notice a file that changes.
    convert, energy, sums : mapping of str to Rate
        Entries converted and centred; squared and summed; summed by column. By working precision.
    statistics, learn : Rate
        Entries of lines that are features; entries of columns whose scale is learnt.
    products : mapping of str to Rate
        Floating-point operations of A·B and AᴴY, by working precision.
    per_entry : mapping of str to Rate
        Entries that products pass once, however few columns there are.
    accumulate : Rate
        Entries of AᴴY added to their sums in double.
    gram, fold, qr : Rate
        Floating-point operations of AᴴA, of folds by products, of Householder QR.
    eigen, svd : Rate
        n³ of the eigenvalues and vectors of a Hermitian matrix; of a singular value decomposition.
    basis : Rate
        Floating-point operations on the basis between sweeps.
    scratch_write, scratch_read : Rate
        Bytes of Y.
    store : Rate
        Bytes of the result written, checked and read back.
    start_seconds, sweep_seconds, slice_seconds, store_seconds : float
        What begins every run; every pass over the panels; every slice; every result.
    """

    fetch: Mapping[str, Rate]
    decode: Mapping[str, Rate]
    chunk: Rate
    ledger: Rate
    convert: Mapping[str, Rate]
    energy: Mapping[str, Rate]
    sums: Mapping[str, Rate]
    statistics: Rate
    learn: Rate
    products: Mapping[str, Rate]
    per_entry: Mapping[str, Rate]
    accumulate: Rate
    gram: Rate
    fold: Rate
    qr: Rate
    eigen: Rate
    svd: Rate
    basis: Rate
    scratch_write: Rate
    scratch_read: Rate
    store: Rate
    start_seconds: float
    sweep_seconds: float
    slice_seconds: float
    store_seconds: float


# Calibrated by bench/calibrate.py on two cores of 2.6 GHz with AVX-512, file in the page cache.
NOMINAL = Rates(
    fetch={
        "memory": Rate(8.0e9, 0.3),
        "npy": Rate(4.0e9, 0.3),
        "plain": Rate(4.0e9, 0.3),
        "compressed": Rate(4.0e9, 0.3),
        "zarr": Rate(4.0e9, 0.3),
        "graph": Rate(0.5e9, 1.0),
    },
    decode={
        "gzip": Rate(0.35e9),
        "zlib": Rate(0.35e9),
        "shuffle": Rate(5e9),
        "fletcher32": Rate(2e9),
        "crc32c": Rate(5e9),
        "lzf": Rate(0.5e9),
        "szip": Rate(0.15e9),
        "lz4": Rate(2e9),
        "zstd": Rate(1.5e9),
        "bitshuffle": Rate(1e9),
        "blosc": Rate(2e9),
        "blosc2": Rate(2e9),
        "library": Rate(0.2e9, 1.0),
    },
    chunk=Rate(30_000),
    ledger=Rate(15e9, 0.2),
    convert={"single": Rate(1.5e9), "double": Rate(1.2e9)},
    energy={"single": Rate(1.5e9), "double": Rate(1.5e9)},
    sums={"single": Rate(3e9), "double": Rate(3e9)},
    statistics=Rate(0.4e9),
    learn=Rate(0.4e9),
    products={"single": Rate(106e9), "double": Rate(55e9)},
    per_entry={"single": Rate(5e9), "double": Rate(2.2e9)},
    accumulate=Rate(1.2e9, 0.2),
    gram=Rate(50e9),
    fold=Rate(25e9),
    qr=Rate(15e9),
    eigen=Rate(2e9),
    svd=Rate(0.8e9),
    basis=Rate(40e9),
    scratch_write=Rate(2e9),
    scratch_read=Rate(2e9),
    store=Rate(0.2e9),
    start_seconds=0.3,
    sweep_seconds=0.01,
    slice_seconds=0.06,
    store_seconds=0.06,
)

# A complex multiplication and addition are four of each.
COMPLEX_FACTOR = 4.0

# Resident size of the interpreter with every library loaded and its thread stacks, bytes. Measured by
# tests/flow/test_promises.py, which fails when it no longer covers what an empty run needs.
BASE_BYTES = 136 * 2**20
# Packing buffers that BLAS keeps for every thread that multiplies, bytes.
BLAS_BYTES = 12 * 2**20

# Share of the matrix that the exact check on slices reads, for the estimate of bytes.
NOMINAL_SHARE_OF_SLICES = 0.01

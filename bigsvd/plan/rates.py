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
    entries : Rate
        Stored entries of a sparse matrix read, checked and put in their places; ``sparse`` above clears the buffer.
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
    spmm : mapping of str to Rate
        Floating-point operations of products without zeros, by working precision.
    turn, nonzero_sums : Rate
        Nonzeros converted and turned for AᴴY; squared and summed.
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
    slice : Rate
        Longer side times the square of the shorter, of a slice that is decomposed twice.
    start_seconds, sweep_seconds, slice_seconds, store_seconds : float
        What begins every run; every pass over the panels; every slice; every result.
    """

    fetch: Mapping[str, Rate]
    decode: Mapping[str, Rate]
    entries: Rate
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
    spmm: Mapping[str, Rate]
    turn: Rate
    nonzero_sums: Rate
    gram: Rate
    fold: Rate
    qr: Rate
    eigen: Rate
    svd: Rate
    basis: Rate
    scratch_write: Rate
    scratch_read: Rate
    store: Rate
    slice: Rate
    start_seconds: float
    sweep_seconds: float
    slice_seconds: float
    store_seconds: float


# Calibrated by bench/calibrate.py on two cores of 2.6 GHz with AVX-512, file in the page cache.
NOMINAL = Rates(
    fetch={
        "memory": Rate(9.3e09),
        "npy": Rate(9.8e09, 0.11),
        "plain": Rate(9.9e09, 0.14),
        "compressed": Rate(6.8e09),
        "zarr": Rate(7e09),
        "sparse": Rate(1.6e10, 0.03),
        "graph": Rate(5e08, 1),
    },
    entries=Rate(2.4e08),
    decode={
        "shuffle": Rate(7.3e09, 0.36),
        "fletcher32": Rate(4e09, 0.09),
        "gzip": Rate(1.4e09),
        "lzf": Rate(1.4e09),
        "szip": Rate(2.6e08),
        "lz4": Rate(7.8e09, 0.03),
        "bitshuffle": Rate(2.7e09, 0.04),
        "blosc2": Rate(2.3e09, 0.03),
        "library": Rate(4.9e08, 1),
        "zstd": Rate(1.2e09, 0.15),
        "zlib": Rate(4.1e08),
        "blosc": Rate(4.2e09, 0.11),
        "crc32c": Rate(9.4e09, 0.16),
    },
    chunk=Rate(1.1e05, 0.41),
    ledger=Rate(2.5e10),
    convert={
        "single": Rate(2.5e09),
        "double": Rate(1.2e09, 0.1),
    },
    energy={
        "single": Rate(1.4e09, 0.04),
        "double": Rate(3e09, 0.2),
    },
    sums={
        "single": Rate(2.7e09, 0.32),
        "double": Rate(4.9e09, 0.18),
    },
    statistics=Rate(5e08, 0.24),
    learn=Rate(8.2e08),
    products={
        "single": Rate(2e11, 0.09),
        "double": Rate(9.6e10, 0.04),
    },
    per_entry={
        "single": Rate(1.9e09),
        "double": Rate(1.4e09, 0.01),
    },
    accumulate=Rate(1.1e09),
    spmm={
        "single": Rate(8.5e09, 0.01),
        "double": Rate(3.8e09, 0.04),
    },
    turn=Rate(8.5e07, 0.39),
    nonzero_sums=Rate(1.2e08, 0.16),
    gram=Rate(8.7e10),
    fold=Rate(2.8e10),
    qr=Rate(3.1e10),
    eigen=Rate(5.1e09),
    svd=Rate(2.7e09),
    basis=Rate(5e10),
    scratch_write=Rate(1.8e09),
    scratch_read=Rate(7.8e09, 0.06),
    store=Rate(5e8),
    slice=Rate(2.5e9),
    start_seconds=0.35,
    sweep_seconds=0.02,
    slice_seconds=0.055,
    store_seconds=0.03,
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

"""Nominal rates: what costs are compared with. Data, so that a command makes the same choices on every machine."""

from __future__ import annotations

# Decoded bytes per second that one worker reads, by storage class (calibrated on two cores of 2.4–2.6 GHz, file in the
# page cache).
READ_RATE = {
    "memory": 4.0e9,
    "npy": 1.5e9,
    "plain": 1.2e9,
    "compressed": 0.20e9,
    "zarr": 0.35e9,
    "graph": 0.5e9,
}

# Floating-point operations per second of one worker: real products in single and double, Householder QR, dense SVD.
PRODUCT_RATE = {"single": 66e9, "double": 32e9}
QR_RATE = 10e9
DENSE_RATE = 4e9
# A complex multiplication and addition are four of each.
COMPLEX_FACTOR = 4.0

# Resident size of the interpreter with every library loaded and its thread stacks, bytes. Measured by
# tests/flow/test_promises.py, which fails when it no longer covers what an empty run needs.
BASE_BYTES = 136 * 2**20
# Packing buffers that BLAS keeps for every thread that multiplies, bytes.
BLAS_BYTES = 12 * 2**20

# Share of the matrix that the exact check on slices reads, for the estimate of bytes.
NOMINAL_SHARE_OF_SLICES = 0.01

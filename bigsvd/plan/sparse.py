"""What sparse panels take in memory, and what the work on their nonzeros costs."""

from __future__ import annotations

from typing import TYPE_CHECKING

from bigsvd.plan.rates import Rate, Rates
from bigsvd.prepare import PIECE_NONZEROS
from bigsvd.source import MatrixSpec

if TYPE_CHECKING:
    from bigsvd.plan.plan import Plan

# Lines of a sparse panel that are multiplied at a time. AᴴY adds up a matrix as large as the block, whatever the
# nonzeros: at 0.5 % and 134 columns that is 6 % of the products with 2,048 lines, 25 % with 512. And of 2,048 lines Y
# stays in the second cache while the turned nonzeros gather from it (1.7 times as fast).
SPARSE_UNIT_LINES = 2048
# Columns in which rounding of single is measured at a time.
MEASURED_COLUMNS = 16
_SHORT, _LONG = 4, 8


def index_bytes(spec: MatrixSpec) -> int:
    """Bytes of the place of a nonzero in its line."""
    return _SHORT if max(spec.shape) < 2**31 else _LONG


def sparse_bytes(spec: MatrixSpec, lines: int, nonzeros: int) -> int:
    """Bytes of so many lines without their zeros: values, places and pointers."""
    return nonzeros * (spec.dtype.itemsize + index_bytes(spec)) + (lines + 1) * index_bytes(spec)


def matrix_bytes(spec: MatrixSpec, products: str) -> int:
    """Bytes of the whole matrix in the form in which its panels are multiplied."""
    if products == "dense" or spec.nonzeros is None or spec.compressed_axis is None:
        return spec.decoded_bytes
    return sparse_bytes(spec, spec.shape[spec.compressed_axis], spec.nonzeros)


def sparse_work_bytes(spec: MatrixSpec, across: int, nonzeros: int, block: int) -> int:
    """What a worker holds beside a sparse panel of so many nonzeros and the lines of Y.

    Parameters
    ----------
    spec : MatrixSpec
    across : int
    nonzeros : int
        Of the densest panel.
    block : int
        Columns multiplied.

    Returns
    -------
    int
        Values in the working precision and turned to be multiplied the other way, both once more in double where
        rounding is measured; the product AᴴY; vectors across for sums; pieces for squares and sums.
    """
    entry, index = 16 if spec.dtype.kind == "c" else 8, index_bytes(spec)
    turned = nonzeros * (2 * (entry + index) + 2 * entry) + 2 * (across + 1) * index
    measured = 5 * MEASURED_COLUMNS * across * entry
    pieces = max(PIECE_NONZEROS, across) * (4 * entry + 2 * _LONG)
    return turned + measured + pieces + 12 * across * entry + block * across * entry


def stored_share(spec: MatrixSpec) -> float:
    """Share of the entries that are stored; one where all are."""
    if spec.nonzeros is None:
        return 1.0
    return spec.nonzeros / max(1, spec.shape[0] * spec.shape[1])


def nonzero_costs(plan: Plan, share: float, *, energies: bool, sums: bool, rates: Rates) -> list[tuple[float, Rate]]:
    """Work on the nonzeros of a share of the matrix, products apart, as amounts with their rates.

    Words are summed up; values converted and turned; squares and sums taken, of lines that are features always.
    """
    entries = share * stored_share(plan.spec) * plan.spec.shape[0] * plan.spec.shape[1]
    parts = entries * (2 if plan.spec.dtype.kind == "c" else 1)
    costs = [(share * matrix_bytes(plan.spec, "sparse"), rates.ledger), (entries, rates.turn)]
    prepared = plan.centred or plan.scaled
    if energies:
        costs.append((parts, rates.nonzero_sums))
    if prepared and not plan.geometry.lines_are_samples:
        costs.append((2 * parts, rates.nonzero_sums))
    if sums and plan.scaled and plan.geometry.lines_are_samples:
        costs.append((parts, rates.nonzero_sums))
    return costs

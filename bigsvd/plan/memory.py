"""What a plan will hold in memory, term by term, phase by phase."""

from __future__ import annotations

from dataclasses import dataclass

from bigsvd.plan.geometry import Geometry, most_segments
from bigsvd.plan.rates import BASE_BYTES, BLAS_BYTES
from bigsvd.plan.sparse import matrix_bytes, sparse_work_bytes
from bigsvd.plan.widths import Widths
from bigsvd.source import MatrixSpec
from bigsvd.units import show_bytes, show_count

# Units wider than this are cut into tiles, and converted once for each of the two products.
WIDEST_UNIT = 8192
TILE_COLUMNS = 4096
# Lines gathered before a Householder fold: several times the width, so that the old triangle is a small part of it.
LEAST_FOLD_LINES = 1024
# Lines of Y that are turned into left vectors at a time (solve reads so many).
TALL_LINES = 4096
# Entries of a slice that is checked exactly, and the copies of them that both ways of solving it hold.
SLICE_ENTRIES = 600_000
SLICE_COPIES = 8
# A sparse panel that is kept, beside its arrays.
SPARSE_PANEL_BYTES = 4096


@dataclass(frozen=True)
class MemoryTerm:
    """One term of the memory plan."""

    size: int
    what: str


def fold_lines(width: int) -> int:
    """Lines gathered before a fold of `width` columns."""
    return max(LEAST_FOLD_LINES, 2 * width)


def tile_columns(across: int) -> int:
    """Columns of a unit that are converted at a time."""
    return across if across <= WIDEST_UNIT else TILE_COLUMNS


def memory_terms(
    spec: MatrixSpec,
    geometry: Geometry,
    route: str,
    widths: Widths,
    *,
    workers: int,
    leaves: int,
    pilot_bytes: int,
    hold_pilot: bool,
    resident: bool,
    scaled: bool,
    result_bytes: int,
) -> tuple[MemoryTerm, ...]:
    """Terms of the phase that needs most.

    Parameters
    ----------
    spec, geometry, route, widths
        The candidate plan.
    workers : int
        Threads that each hold a panel and its working buffers.
    leaves : int
        Segments per wave; two waves may be alive.
    pilot_bytes : int
        The sample held for the pilot.
    hold_pilot : bool
        Whether the sample is held until the first sweep reaches it.
    resident : bool
        Whether the whole matrix is held in its stored type.
    scaled : bool
        Whether features are scaled.
    result_bytes : int
        What writing the result holds.

    Returns
    -------
    tuple of MemoryTerm
        Their sum is the planned peak.
    """
    entry = 16 if spec.dtype.kind == "c" else 8
    n = geometry.across
    column = n * entry
    whole_spectrum = route in ("gram", "tsqr", "direct")
    folded = n + 1 if route in ("tsqr", "direct") else widths.limit + 1
    triangle = folded**2 * entry
    panel = 0 if resident else geometry.panel_bytes
    unit = geometry.unit_lines * (3 * widths.block + widths.limit) * entry
    if geometry.nonzeros is None:
        unit += (geometry.unit_lines + widths.block) * tile_columns(n) * entry
    else:
        unit += sparse_work_bytes(spec, n, geometry.nonzeros, widths.block)
    fold = 3 * (fold_lines(folded) + folded) * folded * entry
    leaf = widths.block * column + (widths.limit + 1) ** 2 * entry + 4 * column
    if route == "gram":
        leaf = max(leaf, n * column + 4 * column)
    if route in ("tsqr", "direct"):
        leaf = max(leaf, triangle + 4 * column)
    # Two waves of leaves exist, but a sum waits only for a neighbour that is still running: every worker holds one of
    # its own and leaves at most one waiting on each level of the tree; the root of the earlier wave waits to be folded.
    # Beside them the caller holds the total of all earlier waves.
    segments = most_segments(leaves)
    live = min(2 * segments, workers * segments.bit_length() + 1) + 1
    held = [MemoryTerm(BASE_BYTES, "interpreter and libraries")]
    if spec.decode_bytes:
        # Kept from one read to the next, hence in every phase.
        held.append(MemoryTerm(workers * spec.decode_bytes, f"buffers in which {workers} workers decode"))
    if spec.held_bytes:
        held.append(MemoryTerm(spec.held_bytes, "held for reading: pointers, places, means"))
    if resident:
        held.append(_resident(spec, geometry))
    held.append(
        MemoryTerm(
            2 * widths.limit * column, f"basis and its products, {show_count(widths.limit)} columns of {show_count(n)}"
        )
    )
    # The sample multiplies fewer columns than a sweep, and is given back before the first.
    small = min(widths.start, widths.block) * column
    pilot = [
        MemoryTerm(pilot_bytes, "pilot sample in its stored type"),
        MemoryTerm(workers * (unit + BLAS_BYTES), f"working buffers of {workers} workers"),
        # Products without zeros hold the directions twice more: in the order of their rows, and scaled.
        MemoryTerm((live + (6 if geometry.sparse else 4)) * small, "sums and directions of the sample"),
    ]
    reading = [
        MemoryTerm(workers * panel, f"{workers} panels in flight, {show_bytes(panel)} each"),
        MemoryTerm(
            workers * (unit + fold + BLAS_BYTES), f"working buffers of {workers} workers: conversion, products, QR"
        ),
        MemoryTerm(live * leaf, f"partial sums of up to {live} segments, {show_bytes(leaf)} each"),
        # The caller folds one wave while the workers are at the next: two triangles stacked, and LAPACK's two copies.
        MemoryTerm(6 * triangle, "folding one wave upon the earlier ones"),
        MemoryTerm(widths.block * column, f"columns being multiplied, {show_count(widths.block)}"),
    ]
    if geometry.sparse and scaled:
        reading.append(MemoryTerm(widths.block * column, "the same columns, scaled as the entries would be"))
    if hold_pilot and pilot_bytes:
        reading.append(MemoryTerm(pilot_bytes, "the panel that gave the first mean"))
    dense = n * column if whole_spectrum else 0
    growing = [
        MemoryTerm(5 * widths.block * column + 6 * dense, "new directions: residuals and their QR, small dense steps")
    ]
    lines = min(TALL_LINES, geometry.lines)
    writing = [
        MemoryTerm(
            result_bytes + 4 * lines * 2 * widths.limit * entry,
            "left vectors from scratch, writing and reading back the result",
        )
    ]
    slices = SLICE_ENTRIES * SLICE_COPIES * entry + workers * BLAS_BYTES
    checking = [MemoryTerm(slices, "a slice, decomposed the same way and by LAPACK")]
    phases = [reading, growing, checking, writing, *([pilot] if pilot_bytes else [])]
    return (*held, *max(phases, key=lambda terms: sum(term.size for term in terms)))


def _resident(spec: MatrixSpec, geometry: Geometry) -> MemoryTerm:
    """The whole matrix, held panel by panel."""
    if not geometry.sparse:
        return MemoryTerm(spec.decoded_bytes, "the whole matrix, held in its stored type")
    size = matrix_bytes(spec, "sparse") + geometry.panels * SPARSE_PANEL_BYTES
    return MemoryTerm(size, "the whole matrix, held without its zeros")


def total(terms: tuple[MemoryTerm, ...]) -> int:
    """Sum of the terms, bytes."""
    return sum(term.size for term in terms)

"""From an outcome to a result store: left and right vectors, certificate with its slices, record."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Literal

import numpy as np

from bigsvd.certify import SliceCheck
from bigsvd.drive.file_order import FileOrder, Sorter
from bigsvd.drive.keeping import KeptRun
from bigsvd.drive.outcome import Outcome
from bigsvd.drive.probe import Forecast
from bigsvd.drive.record import run_record, spectrum_record
from bigsvd.factors import Factors, FactorsWriter, StoredAxes
from bigsvd.solve import TallVectors, column_phases
from bigsvd.sweep import Control

Side = Literal["left", "right"]


def write_result(
    out: Path | None,
    outcome: Outcome,
    checks: tuple[SliceCheck, ...],
    foreseen: Forecast,
    control: Control,
    kept: KeptRun | None,
    *,
    overwrite: bool,
    started: float,
    held_before: int,
) -> Factors:
    """Write the factors: tall vectors from scratch, the others from memory, then everything that is known of them.

    Parameters
    ----------
    out : Path or None
        None keeps the result in memory.
    outcome : Outcome
    checks : tuple of SliceCheck
    foreseen : Forecast
    control : Control
    kept : KeptRun or None
        Holds the lock of `out`.
    overwrite : bool
        Whether a result at `out` may be replaced.
    started : float
        ``time.perf_counter()`` at the start.
    held_before : int
        Resident size before the run, bytes.

    Returns
    -------
    Factors
        Opened from where they were written.
    """
    plan, certificate = outcome.plan, outcome.certificate
    rank = certificate.rank
    tall_side: Side = "left" if plan.geometry.lines_are_samples else "right"
    basis_side: Side = "right" if plan.geometry.lines_are_samples else "left"
    tall = TallVectors(outcome.scratch, outcome.state, outcome.ritz, certificate.null, plan.request.seed)
    basis = outcome.state.used @ outcome.ritz.rotation[:, :rank]
    if tall_side == "right":
        # The swept matrix is Aᵀ = U Σ Vᴴ, so A = conj(V) Σ Uᵀ: the right vectors of A are conj(U).
        tall.fix_phase()
        phase = tall.phase
    else:
        phase = column_phases(basis)
        tall.phase = phase
    basis = basis * phase
    with FactorsWriter(
        out,
        shape=(plan.samples, plan.features),
        rank=rank,
        dtype=outcome.scratch.dtype,
        overwrite=overwrite,
        lock=kept.folder.lock if kept else None,
        axes=None if plan.spec.unfolding is None else StoredAxes.of(plan.spec.unfolding),
        sample_names=plan.sample_names,
        feature_names=plan.feature_names,
    ) as writer:
        control.begin("write", (plan.samples + plan.features) * rank * outcome.scratch.dtype.itemsize)
        conjugate = tall_side == "right"
        along, across = (FileOrder(plan.spec, axis) for axis in (plan.geometry.axis, 1 - plan.geometry.axis))
        gram = np.zeros((rank, rank), outcome.scratch.dtype)
        for start, block in _in_file_order(tall, along, outcome, gram):
            writer.write_vectors(tall_side, start, block.conj() if conjugate else block)
            control.advance(block.nbytes, read=0)
        for start, block in across.blocks(basis):
            writer.write_vectors(basis_side, start, block.conj() if conjugate else block)
            control.advance(block.nbytes, read=0)
        features = across if plan.geometry.lines_are_samples else along
        defects = {
            tall_side: float(np.linalg.norm(gram - np.eye(rank))),
            basis_side: float(np.linalg.norm(basis.conj().T @ basis - np.eye(rank))),
        }
        sound = all(check.within_bounds for check in checks)
        certificate = replace(
            certificate, left_defect=defects["left"], right_defect=defects["right"], slices=checks,
            tolerance_met=certificate.tolerance_met and sound,
            verdict=certificate.verdict if sound else f"{certificate.verdict}; bounds broken on slices of the file",
        )  # fmt: skip
        record = run_record(outcome, foreseen, control, started, held_before)
        record["remarks"] += writer.names_remarks
        return writer.finish(
            singular_values=certificate.value,
            column_mean=features.restore(outcome.mean),
            column_scale=1.0 / features.restore(outcome.inverse_scale),
            spectrum=spectrum_record(outcome, certificate),
            certificate=certificate,
            attributes=record
            | {
                "resumed": kept.journal.resumed if kept else 0,
                "earlier_seconds": kept.journal.earlier_seconds if kept else 0.0,
            },
        )


def _in_file_order(
    tall: TallVectors, order: FileOrder, outcome: Outcome, gram: np.ndarray
) -> Iterator[tuple[int, np.ndarray]]:
    """Yield (first line, lines) of the tall vectors in file order, and add UᴴU to `gram`."""
    if order.same:
        for start, block in tall.blocks():
            gram += block.conj().T @ block
            yield start, block
        return
    sorter = Sorter(order, outcome.scratch.folder, len(gram), outcome.scratch.dtype)
    try:
        for start, block in tall.blocks():
            gram += block.conj().T @ block
            sorter.put(start, block)
        yield from sorter.blocks()
    finally:
        sorter.close()

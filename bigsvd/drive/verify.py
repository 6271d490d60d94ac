"""A second look at a result: the factors against themselves, and against the matrix in a sweep that knows no solver."""

from __future__ import annotations

import time
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from bigsvd.certify import SliceCheck
from bigsvd.drive.file_order import FileOrder
from bigsvd.drive.slices import check_slices
from bigsvd.errors import OptionError
from bigsvd.factors import Factors
from bigsvd.plan import Plan
from bigsvd.prepare import Preparation
from bigsvd.source import Source
from bigsvd.sweep import Control, Engine, PanelReader, Scratch, SweepTask
from bigsvd.units import show_shape

ROWS = 8192
# What orthonormality and order may miss by rounding alone.
DEFECT = 1e-10


@dataclass(frozen=True)
class Check:
    """One thing that was checked: what was found and what is allowed."""

    name: str
    found: float
    allowed: float

    @property
    def ok(self) -> bool:
        """Whether it holds; a NaN does not."""
        return bool(self.found <= self.allowed)


@dataclass(frozen=True)
class Verification:
    """What a second look found.

    Attributes
    ----------
    agrees : bool
    checks : tuple of Check
    slices : tuple of SliceCheck
        Fresh slices; empty without the matrix.
    bytes_read : int
        Decoded bytes read from the matrix.
    seconds : float
    """

    agrees: bool
    checks: tuple[Check, ...]
    slices: tuple[SliceCheck, ...]
    bytes_read: int
    seconds: float


def verify_factors(
    factors: Factors,
    source: Source | None,
    plan: Plan | None,
    control: Control,
    folder: Path,
    seed: int | None,
    started: float,
) -> Verification:
    """Check factors against themselves and, with a source, against the matrix.

    Parameters
    ----------
    factors : Factors
        Opened, so that its own checksums already hold.
    source : Source or None
    plan : Plan or None
        How to sweep the source; given with it.
    control : Control
    folder : Path
        For scratch.
    seed : int or None
        Of the slices.
    started : float
        ``time.perf_counter()`` at the start.

    Returns
    -------
    Verification
    """
    checks = _inner_checks(factors)
    slices: tuple[SliceCheck, ...] = ()
    if source is not None and plan is not None:
        _require_same_shape(factors, plan)
        checks += _outer_checks(factors, source, plan, control, folder)
        fresh = seed if seed is not None else int(factors.attributes["seed"]) + 1
        slices = check_slices(source, plan, str(factors.attributes["precision"]), folder, control, seed=fresh)
    agrees = all(check.ok for check in checks) and all(check.within_bounds for check in slices)
    return Verification(agrees, tuple(checks), slices, control.bytes_read, time.perf_counter() - started)


def _require_same_shape(factors: Factors, plan: Plan) -> None:
    """Refuse another matrix, or another part of one, before it is read."""
    if (plan.samples, plan.features) != factors.shape:
        raise OptionError(
            f"the result is of {show_shape(factors.shape)} samples and features, the matrix given has"
            f" {show_shape((plan.samples, plan.features))}",
            evidence=[f"matrix: {plan.spec.name}", f"result of: {factors.attributes['source']['name']}"],
            remedy="Give the matrix that the result was made from, with the options by which it was read.",
        )


def _inner_checks(factors: Factors) -> list[Check]:
    """What can be seen without the matrix."""
    values = factors.singular_values
    certificate = factors.certificate
    steps = np.diff(values)
    return [
        Check("left vectors: ‖UᴴU − I‖", _defect(factors.left_vectors), DEFECT),
        Check("right vectors: ‖VᴴV − I‖", _defect(factors.right_vectors), DEFECT),
        Check("singular values: largest step upwards", float(max(0.0, steps.max(initial=0.0))), 0.0),
        Check(
            "intervals: values outside their own",
            float(np.sum((values < certificate.lower) | (values > certificate.upper))),
            0.0,
        ),
    ]


def _defect(vectors: Any) -> float:
    """‖XᴴX − I‖_F of an array on disk."""
    rank = vectors.shape[1]
    gram = np.zeros((rank, rank), np.complex128 if np.dtype(vectors.dtype).kind == "c" else np.float64)
    for start in range(0, vectors.shape[0], ROWS):
        block = vectors[start : start + ROWS]
        gram += block.conj().T @ block
    return float(np.linalg.norm(gram - np.eye(rank)))


def _outer_checks(factors: Factors, source: Source, plan: Plan, control: Control, folder: Path) -> list[Check]:
    """One sweep in double: AV against UΣ, AᴴAV against VΣ², the energy."""
    geometry = plan.geometry
    values, certificate = factors.singular_values, factors.certificate
    wide = np.dtype(np.complex128 if plan.spec.dtype.kind == "c" else np.float64)
    conjugate = not geometry.lines_are_samples
    short = factors.left_vectors if conjugate else factors.right_vectors
    tall = factors.right_vectors if conjugate else factors.left_vectors
    along, across = (FileOrder(plan.spec, axis) for axis in (geometry.axis, 1 - geometry.axis))
    block = np.ascontiguousarray(across.swept(np.asarray(short[:])), dtype=wide)
    if conjugate:
        block = block.conj()
    preparation = Preparation(geometry.lines_are_samples, plan.centred, plan.scaled)
    if geometry.lines_are_samples:
        mean, scale = across.swept(factors.column_mean), across.swept(factors.column_scale)
        preparation = preparation.learnt(mean.astype(wide), 1.0 / scale, wide)
    scratch = Scratch(folder, geometry.lines, wide)
    engine = Engine(plan.workers)
    try:
        target = scratch.add_block(block.shape[1])
        scratch.map = np.zeros((0, 0), wide)
        task = SweepTask(
            PanelReader(source, geometry, control), preparation, wide, "basis", block, scratch=scratch, target=target,
            line_features=conjugate and (plan.centred or plan.scaled),
        )  # fmt: skip
        control.begin("verify", plan.spec.decoded_bytes)
        sums = engine.sweep(task, plan.waves)
        assert sums.products is not None
        second = sums.products.conj().T
        off = np.zeros(len(values))
        for start in range(0, geometry.lines, ROWS):
            stop = min(start + ROWS, geometry.lines)
            vectors = np.asarray(tall[start:stop] if along.same else factors.rows_at(tall, along.ranks(start, stop)))
            difference = scratch.read(start, stop) - (vectors.conj() if conjugate else vectors) * values
            off += np.sum(np.abs(difference) ** 2, axis=0)
    finally:
        engine.close()
        scratch.close()
    top = float(values[0]) if len(values) and values[0] > 0 else 1.0
    scale = np.maximum(values, top * 1e-12)
    residual = np.linalg.norm(second - block * values**2, axis=0) / scale
    slack = 10 * certificate.rounding + 1e-9 * top
    excess = residual - (certificate.residual * (1 + 1e-6) + slack)
    live = ~certificate.null
    return [
        Check(
            "AᴴU − VΣ: largest column" if conjugate else "AV − UΣ: largest column",
            float(np.sqrt(off.max(initial=0.0))),
            slack,
        ),
        Check(
            f"{'AV − UΣ' if conjugate else 'AᴴU − VΣ'}: excess over the certified residual",
            float(max(0.0, excess[live].max(initial=0.0))),
            0.0,
        ),
        Check(
            "energy: relative difference",
            abs(sums.energy - certificate.total_energy) / max(certificate.total_energy, 1e-300),
            1e-6,
        ),
    ]

"""What the certificate says after every sweep, for five spectra: the table in docs/method.md.

Each matrix is 6,000 × 1,500 with exactly known singular values, in memory, swept as a file would be. The columns:

    index       widest interval by index, u_i − θ_i over θ_i, of the components that are not in the bulk
    residual    widest interval by residuals alone, √2·‖r_i‖ over θ_i
    error       largest |θ_i − σ_i| / σ_i
    missed      the bound on ‖A(I − VVᴴ)‖, over its true value

    python bench/spectra.py
"""

from __future__ import annotations

import argparse
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

import bigsvd
from bigsvd.certify import spectrum_intervals
from bigsvd.drive import Outcome, run
from bigsvd.plan import Request, make_plan
from bigsvd.sweep import Control, one_blas_thread

ROWS, COLUMNS, RANK = 6_000, 1_500, 20
CEILING = 2**30
TOLERANCE = 1e-3
# The residual rule is followed so far; the run itself stops earlier.
MOST_SWEEPS = 8


@dataclass(frozen=True)
class Case:
    """A spectrum, and how many of its leading values stand out of the bulk."""

    values: Callable[[np.ndarray], np.ndarray]
    clear: int = RANK


def noise(count: int) -> np.ndarray:
    """Singular values of Gaussian noise, divided by where its bulk ends for large matrices, √m + √n."""
    block = np.random.default_rng(99).standard_normal((ROWS, count))
    values: np.ndarray = np.linalg.svd(block, compute_uv=False) / (np.sqrt(ROWS) + np.sqrt(count))
    return values


SPIKES = np.linspace(4, 1.4, 15)
CASES = {
    "exponential, 10^(−i/10)": Case(lambda i: 10.0 ** (-i / 10)),
    "1/i": Case(lambda i: 1.0 / i),
    "1/√i": Case(lambda i: i**-0.5),
    "15 spikes of 4 … 1.4 over a flat bulk of 1": Case(lambda i: np.r_[SPIKES, np.ones(len(i) - 15)], clear=15),
    "15 spikes of 4 … 1.4 over Gaussian noise up to 1": Case(lambda i: np.r_[SPIKES, noise(len(i) - 15)], clear=15),
}


def planted(values: np.ndarray, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """U·diag(values)·Vᵀ and V; the columns of U have mean zero, so that centring changes no value."""
    random = np.random.default_rng(seed)
    left = np.linalg.qr(np.column_stack([np.ones(ROWS), random.standard_normal((ROWS, COLUMNS))]))[0][:, 1:]
    right = np.linalg.qr(random.standard_normal((COLUMNS, COLUMNS)))[0]
    return (left * values) @ right.T, right


def swept(matrix: np.ndarray, sweeps: int, tolerance: float) -> Outcome:
    """A run that ends after so many sweeps at the latest."""
    source = bigsvd.open_matrix(matrix)
    request = Request(rank=RANK, route="krylov", max_sweeps=sweeps, tolerance=tolerance)
    plan = make_plan(source.spec, request, ceiling=CEILING, processors=2)
    with tempfile.TemporaryDirectory() as folder, one_blas_thread():
        outcome = run(source, plan, Control(), Path(folder))
        outcome.scratch.close()
    return outcome


def residual_width(outcome: Outcome, clear: int) -> float:
    """Widest interval θ ∓ ‖r‖/√2, relative; r = s/θ."""
    evidence = outcome.evidence
    theta = evidence.theta[:clear]
    return float(np.max(np.sqrt(2) * evidence.residual_norms[:clear] / theta**2))


def line(sweeps: int, outcome: Outcome, case: Case, values: np.ndarray, right: np.ndarray) -> str:
    """One line of the table."""
    theta, clear = outcome.evidence.theta, case.clear
    lower, upper = spectrum_intervals(outcome.evidence)
    index = float(np.max((upper[:clear] - lower[:clear]) / theta[:clear]))
    error = float(np.max(np.abs(theta[:clear] - values[:clear]) / values[:clear]))
    basis = outcome.state.used
    remainder = np.linalg.norm(values[:, None] * (right.T - (right.T @ basis) @ basis.T), 2)
    certificate = outcome.certificate
    counts = "/".join(str(int(np.sum(certificate.state == code))) for code in range(3))
    return (
        f"{sweeps:>6}  {outcome.state.width:>5}  {index:>9.1e}  {residual_width(outcome, clear):>9.1e}  {error:>9.1e}"
        f"  {certificate.missed_bound / remainder:>6.2f}  {int(certificate.index_proved.sum()):>6}  {counts:>9}"
    )


def main() -> None:
    """Print the table."""
    argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter).parse_args()
    for seed, (name, case) in enumerate(CASES.items()):
        values = case.values(np.arange(1.0, COLUMNS + 1))
        matrix, right = planted(values, 2 * seed + 1)
        factors = bigsvd.decompose(matrix, rank=RANK, route="krylov", tolerance=TOLERANCE, memory=CEILING)
        facts, stop = factors.attributes, factors.attributes["sweeps"]
        print(f"\n{name}: stops after {stop} sweeps, {facts['bytes_read'] / facts['matrix_bytes']:.2f} reads")
        print(f"    {factors.certificate.verdict}")
        print("sweeps  width      index   residual      error  missed  proved  res/op/bk")
        for sweeps in range(1, stop + 1):
            print(line(sweeps, swept(matrix, sweeps, TOLERANCE), case, values, right), flush=True)
        for sweeps in range(1, MOST_SWEEPS + 1):
            if residual_width(swept(matrix, sweeps, 1e-12), case.clear) <= TOLERANCE:
                print(f"residuals alone would stop after {sweeps}")
                break
        else:
            print(f"residuals alone would not stop within {MOST_SWEEPS}")


if __name__ == "__main__":
    main()

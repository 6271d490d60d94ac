"""What the journal of a run takes on the device: arithmetic on its plan."""

from __future__ import annotations

from bigsvd.plan import Plan

# Of every sweep the last two sums stay, and of one a third is being written.
KEPT = 2
# Names, shapes and checksums of a record; what the folder says of the run.
_HEADER = 4096
# Sums of a record that have one entry a column: line sums, squares, lowest, highest.
_ROWS = 4


def journal_bytes(plan: Plan) -> int:
    """Bound the bytes of the journal over the sweeps that a plan expects.

    Parameters
    ----------
    plan : Plan

    Returns
    -------
    int
        Bytes at the most at any time; each further sweep adds two records. Scratch is not counted.
    """
    records = _records(plan)
    pilot = plan.geometry.across * (plan.widths.start + _ROWS) * _entry(plan) + _HEADER
    return KEPT * sum(records) + max(records) + pilot + _HEADER


def _records(plan: Plan) -> list[int]:
    """Bytes of a record of every sweep."""
    widths = plan.widths
    basis = [widths.start + widths.test]
    if plan.route == "krylov":
        basis += [widths.grow + 2 * widths.test] * (plan.nominal_sweeps - 1)
    records = [_record(plan, columns * plan.geometry.across) for columns in basis]
    if plan.route != "krylov":
        # The whole spectrum comes first: AᴴA, or the triangle that all rows were folded into.
        records.insert(0, _record(plan, (plan.geometry.across + 1) ** 2))
    return records


def _record(plan: Plan, entries: int) -> int:
    """Bytes of one record that holds so many entries of products or of a whole spectrum."""
    geometry, width = plan.geometry, plan.widths.limit + 1
    # Where features are lines, every line has its mean, scale and whether it is constant.
    lines = 0 if geometry.lines_are_samples else 3 * geometry.lines
    entries += width**2 + _ROWS * geometry.across + 3 * width + lines
    return entries * _entry(plan) + 8 * geometry.panels + _HEADER


def _entry(plan: Plan) -> int:
    """Bytes of an entry."""
    return 16 if plan.spec.dtype.kind == "c" else 8

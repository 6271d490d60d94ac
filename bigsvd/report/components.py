"""The table of components: one line each, with value, interval, shares, state, order and angle."""

from __future__ import annotations

import numpy as np

from bigsvd.certify import STATES, Certificate
from bigsvd.report.layout import table, wrap
from bigsvd.report.numbers import show_angle, show_interval, show_share, show_up
from bigsvd.units import show_count

# Up to so many components are listed; of more, the first and the last.
MOST_LINES = 60
FIRST_LINES, LAST_LINES = 40, 10
MOST_TIES = 6
HEADER = ("no.", "value", "interval", "share", "cumul.", "state", "order", "vectors")


def shares(certificate: Certificate) -> tuple[np.ndarray, np.ndarray]:
    """Share of every component in the total energy ‖A‖²_F, and the running sum; zeros for a zero matrix."""
    total = certificate.total_energy
    share = certificate.value**2 / total if total > 0 else np.zeros(certificate.rank)
    return share, np.minimum(np.cumsum(share), 1.0)


def component_lines(certificate: Certificate, width: int) -> list[str]:
    """Lay out the components of a result.

    Parameters
    ----------
    certificate : Certificate
        What is known of them.
    width : int
        Cells of a line, for the remarks below the table.

    Returns
    -------
    list of str
        Beyond 60 components the middle is counted instead of listed.
    """
    rank = certificate.rank
    share, cumulative = shares(certificate)
    listed = list(range(rank))
    rows: list[list[str]] = []
    if rank > MOST_LINES:
        listed = [*range(FIRST_LINES), *range(rank - LAST_LINES, rank)]
    for i in listed:
        if rank > MOST_LINES and i == rank - LAST_LINES:
            rows.append([_left_out(certificate, FIRST_LINES, rank - LAST_LINES)])
        rows.append(
            [
                str(i + 1),
                *show_interval(*(float(part[i]) for part in (certificate.value, certificate.lower, certificate.upper))),
                show_share(float(share[i])),
                show_share(float(cumulative[i])),
                _state(certificate, i),
                "yes" if certificate.index_proved[i] else "–",
                _angle(certificate, i),
            ]
        )
    lines = table(HEADER, rows, "rrlrrlll")
    for remark in _remarks(certificate, listed):
        lines += wrap(remark, width)
    return lines


def ties(certificate: Certificate) -> list[tuple[int, int, float]]:
    """Groups of components whose angle bound is for their joint subspace: first, last (from 0), radians."""
    found: dict[tuple[int, int], float] = {}
    for i in np.flatnonzero(np.isfinite(certificate.angle_bound)):
        group = int(certificate.tied_first[i]), int(certificate.tied_last[i])
        if group[0] < group[1]:
            found[group] = max(found.get(group, 0.0), float(certificate.angle_bound[i]))
    return [(*group, bound) for group, bound in sorted(found.items())]


def _state(certificate: Certificate, i: int) -> str:
    """The state of one component, zero and noise marked."""
    word = STATES[certificate.state[i]]
    if certificate.null[i]:
        return "zero" if word == "resolved" else f"{word}, zero"
    return word + "*" if certificate.below_noise[i] else word


def _angle(certificate: Certificate, i: int) -> str:
    """What is known of the vectors of one component."""
    if not np.isfinite(certificate.angle_bound[i]):
        return "no bound"
    first, last = int(certificate.tied_first[i]), int(certificate.tied_last[i])
    if first < last:
        return f"tied with {first + 1}–{last + 1}"
    return f"≤ {show_angle(float(certificate.angle_bound[i]))}"


def _left_out(certificate: Certificate, start: int, stop: int) -> str:
    """Count the components that are not listed."""
    states = certificate.state[start:stop]
    counts = [
        f"{show_count(int(np.sum(states == code)))} {word}"
        for code, word in enumerate(STATES)
        if np.any(states == code)
    ]
    return f"  …  {show_count(stop - start)} more, {start + 1}–{stop}: {', '.join(counts)}"


def _remarks(certificate: Certificate, listed: list[int]) -> list[str]:
    """What the words of the table mean, of those that occur in it."""
    remarks = [
        "Order yes: the interval holds the singular value of this number. Vectors: their angle to the true ones."
    ]
    groups = ties(certificate)
    if groups:
        named = [f"{first + 1}–{last + 1} within {show_angle(bound)}" for first, last, bound in groups[:MOST_TIES]]
        more = f" and {len(groups) - MOST_TIES} more groups" if len(groups) > MOST_TIES else ""
        remarks.append(f"Tied: only the space that they span together is known: {', '.join(named)}{more}.")
    if np.any(certificate.state == STATES.index("bulk")):
        remarks.append(
            "Bulk: neighbours too close to tell apart; the interval holds, the vector is not to be read singly."
        )
    if np.any(certificate.state == STATES.index("open")):
        remarks.append("Open: not yet known to the tolerance; more sweeps (--max-sweeps) may resolve it.")
    if np.any(certificate.null):
        end = show_up(float(np.max(certificate.upper[certificate.null])))
        remarks.append(f"Zero: no larger than rounding ({end}); the vectors only complete the basis.")
    if np.any(certificate.below_noise[listed]):
        remarks.append("* not distinguishable from rounding.")
    return remarks

"""Pure parts of the benchmark: errors, medians, the choice of the peer's setting, the lines of the tables."""

from __future__ import annotations

import statistics
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from bigsvd.units import show_bytes

# A peer that works in single cannot come nearer than this, whatever it is asked: no more is asked of it.
LEAST_ERROR = 1e-6


@dataclass(frozen=True)
class Errors:
    """How far factors are from the truth.

    Attributes
    ----------
    value : float
        Largest relative error among the k leading singular values; infinite where a value is missing or not finite.
    angle : float
        Largest principal angle between the spans of the k leading right vectors, radians.
    """

    value: float
    angle: float


def errors_of(values: np.ndarray, right: np.ndarray, true_values: np.ndarray, true_right: np.ndarray) -> Errors:
    """Compare k values (k,) and right vectors (n, k) with the leading ones of the truth."""
    rank = true_right.shape[1]
    if len(values) < rank or not np.all(np.isfinite(values)) or not np.all(np.isfinite(right)):
        return Errors(float("inf"), float(np.pi / 2))
    given = np.asarray(values[:rank], dtype="f8")
    value = float(np.max(np.abs(given - true_values[:rank]) / true_values[:rank]))
    basis = np.linalg.qr(np.asarray(right[:, :rank], dtype="f8"))[0]
    # The sine by the part left over keeps its figures where the cosine is one to rounding.
    left_over = basis - true_right @ (true_right.T @ basis)
    sine = float(np.linalg.norm(left_over, 2))
    return Errors(value, float(np.arcsin(min(1.0, sine))))


@dataclass
class Candidate:
    """One way to the factors, with what its runs showed.

    Attributes
    ----------
    name : str
        As the tables call it.
    arguments : list of str
        For `bench/worker.py`.
    once : bool
        Only for the record: a single run.
    """

    name: str
    arguments: list[str]
    once: bool = False
    seconds: list[float] = field(default_factory=list)
    processor_seconds: list[float] = field(default_factory=list)
    peak_bytes: list[int] = field(default_factory=list)
    errors: Errors | None = None
    told: dict[str, Any] = field(default_factory=dict)

    @property
    def median(self) -> float:
        return statistics.median(self.seconds)

    @property
    def processor_median(self) -> float:
        return statistics.median(self.processor_seconds)

    @property
    def peak(self) -> int:
        return max(self.peak_bytes)

    def as_json(self) -> dict[str, Any]:
        assert self.errors is not None
        return {
            "name": self.name,
            "arguments": self.arguments,
            "seconds": self.seconds,
            "processor_seconds": self.processor_seconds,
            "median_seconds": self.median,
            "peak_bytes": self.peak_bytes,
            "value_error": self.errors.value,
            "angle_error": self.errors.angle,
            "told": self.told,
        }


def least_iterations(error_at: Callable[[int], float], target: float, *, first: int, most: int) -> int | None:
    """Smallest number of iterations whose error is at most `target`, searched from a guess; None above `most`.

    `error_at` is called once a number, as seldom as the guess is good.
    """
    tries = min(first, most)
    if error_at(tries) <= target:
        while tries and error_at(tries - 1) <= target:
            tries -= 1
        return tries
    while tries < most:
        tries += 1
        if error_at(tries) <= target:
            return tries
    return None


def target_error(own: float) -> float:
    """What a peer has to reach to count as equal."""
    return max(own, LEAST_ERROR)


def table(headings: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    """Lines of a Markdown table, columns aligned so that it reads in a terminal too; all but the first to the right."""
    widths = [max(len(row[i]) for row in (headings, *rows)) for i in range(len(headings))]

    def line(cells: Sequence[str]) -> str:
        first = cells[0].ljust(widths[0])
        return f"| {' | '.join([first, *(cell.rjust(w) for cell, w in zip(cells[1:], widths[1:], strict=True))])} |"

    rule = [("-" * w) if i == 0 else f"{'-' * (w - 1)}:" for i, w in enumerate(widths)]
    return [line(headings), line(rule), *(line(row) for row in rows)]


HEADINGS = ("candidate", "seconds (runs)", "processor s", "ratio", "of processor s", "value error", "angle", "peak")


def candidate_rows(candidates: Sequence[Candidate], ceiling: int) -> list[list[str]]:
    """Cells of one case; ratios are over the first candidate. No time without its error."""
    own = candidates[0]
    rows = []
    for each in candidates:
        assert each.errors is not None
        low, high, count = min(each.seconds), max(each.seconds), len(each.seconds)
        spread = f"{each.median:.1f} ({low:.1f}–{high:.1f}, {count})" if count > 1 else f"{each.median:.1f} (1)"
        over = " over" if each.peak > ceiling else ""
        rows.append(
            [
                each.name,
                spread,
                f"{each.processor_median:.1f}",
                "1" if each is own else f"{each.median / own.median:.2f}",
                "1" if each is own else f"{each.processor_median / own.processor_median:.2f}",
                f"{each.errors.value:.1e}",
                f"{each.errors.angle:.1e}",
                f"{show_bytes(each.peak)}{over}",
            ]
        )
    return rows

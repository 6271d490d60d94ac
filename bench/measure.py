"""Pure parts of the benchmark: errors, candidates and their medians, the choice of the peer's setting."""

from __future__ import annotations

import statistics
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

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

    def worst(self, other: Errors | None) -> Errors:
        """The larger of both, each."""
        return self if other is None else Errors(max(self.value, other.value), max(self.angle, other.angle))


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
    one_blas_thread : bool
        Where the candidate brings threads of its own.
    centred : bool
        The candidate cannot but centre: it is held against the centred truth.
    first_written : bool
        What a user would write first, defaults throughout.
    others_pipeline : bool
        Decodes by what its library does not take by itself; shown, never the best general-purpose setting.
    failures : list of str
        Why runs did not end, in words.
    """

    name: str
    arguments: list[str]
    one_blas_thread: bool = False
    centred: bool = False
    first_written: bool = False
    others_pipeline: bool = False
    seconds: list[float] = field(default_factory=list)
    processor_seconds: list[float] = field(default_factory=list)
    peak_bytes: list[int] = field(default_factory=list)
    own_peak_bytes: list[int] = field(default_factory=list)
    errors: Errors | None = None
    failures: list[str] = field(default_factory=list)
    told: list[dict[str, Any]] = field(default_factory=list)

    @property
    def median(self) -> float:
        return statistics.median(self.seconds)

    @property
    def processor_median(self) -> float:
        return statistics.median(self.processor_seconds)

    @property
    def peak(self) -> int:
        return max(self.peak_bytes)

    @property
    def own_peak(self) -> int:
        """Without mapped files, which the system takes back where memory is short."""
        return max(self.own_peak_bytes)

    @property
    def value_error(self) -> float:
        return float("inf") if self.errors is None else self.errors.value

    def as_json(self) -> dict[str, Any]:
        found = {
            "name": self.name,
            "arguments": self.arguments,
            "first_written": self.first_written,
            "centred": self.centred,
            "others_pipeline": self.others_pipeline,
            "failures": self.failures,
        }
        if self.errors is None:
            return found
        return found | {
            "seconds": self.seconds,
            "processor_seconds": self.processor_seconds,
            "median_seconds": self.median,
            "median_processor_seconds": self.processor_median,
            "peak_bytes": self.peak_bytes,
            "own_peak_bytes": self.own_peak_bytes,
            "value_error": self.errors.value,
            "angle_error": self.errors.angle,
            "told": self.told,
        }


class TooSlowError(Exception):
    """A setting did not end in time: more iterations would not either."""


def least_iterations(error_at: Callable[[int], float], target: float, *, first: int, most: int) -> int | None:
    """Smallest number of iterations whose error is at most `target`, searched from a guess; None above `most`.

    `error_at` is called once a number, as seldom as the guess is good; it raises `TooSlowError` to end the search.
    """
    found = None
    try:
        tries = min(first, most)
        if error_at(tries) <= target:
            found = tries
            while tries and error_at(tries - 1) <= target:
                tries -= 1
                found = tries
            return found
        while tries < most:
            tries += 1
            if error_at(tries) <= target:
                return tries
    except TooSlowError:
        pass
    return found


def target_error(own: float) -> float:
    """What a peer has to reach to count as equal."""
    return max(own, LEAST_ERROR)


def best_peer(own: Candidate, peers: Sequence[Candidate], ceiling: int) -> Candidate | None:
    """The fastest peer of equal error that keeps to the ceiling with all that it cannot hand back.

    Pages of a mapped file count in the resident size, but the system takes them where memory is short: they are not
    held against a peer.
    """
    target = target_error(own.value_error)
    equal = [
        peer
        for peer in peers
        if peer.value_error <= target and peer.own_peak <= ceiling and not peer.others_pipeline and not peer.centred
    ]
    return min(equal, key=lambda peer: peer.median, default=None)


def phase_times(told: dict[str, Any]) -> list[tuple[str, float, float]]:
    """(phase, predicted, measured) seconds on the clock, from what a result says of its phases."""
    return [(name, float(each["predicted"]), float(each["measured"])) for name, each in told["phases"].items()]

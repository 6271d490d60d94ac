"""The time a run may take: whether another sweep fits, and when to stop reading so that the result is in place."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

# What is predicted for the end of a run may take so much longer, and a second more.
RESERVE = 1.5
LEAST_RESERVE = 1.0
# A sweep is begun if it fits with this to spare.
MARGIN = 1.1


@dataclass(frozen=True)
class Deadline:
    """When the result is to be in place.

    Attributes
    ----------
    until : float
        Seconds since 1970.
    closing : float
        Predicted seconds from the last sweep to the result in place: slices, writing, reading back.
    clock : callable
        Seconds since 1970.
    """

    until: float
    closing: float
    clock: Callable[[], float] = time.time

    @property
    def reserve(self) -> float:
        """Seconds set aside for slices, writing and reading back."""
        return RESERVE * self.closing + LEAST_RESERVE

    @property
    def read_until(self) -> float:
        """When reading has to end, seconds since 1970."""
        return self.until - self.reserve

    def allows(self, seconds: float) -> bool:
        """Whether a sweep that is predicted to take so long still fits."""
        return self.clock() + MARGIN * seconds <= self.read_until

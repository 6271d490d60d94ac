"""The certificate: what is known of every component, how strongly, and the verdict in words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

STATES = ("resolved", "open", "bulk")
_ARRAYS = (
    "value",
    "lower",
    "upper",
    "residual",
    "state",
    "index_proved",
    "angle_bound",
    "tied_first",
    "tied_last",
    "null",
    "below_noise",
)


@dataclass(frozen=True)
class SliceCheck:
    """One slice of the user's file, decomposed by the run's own route and by LAPACK.

    Attributes
    ----------
    rows, columns : (int, int)
        The half-open rectangle, in stored order.
    rank : int
        Components resolved in the slice.
    value_difference : float
        Largest |σ_i − σ_i(LAPACK)| / σ_1 of these.
    angle : float
        Largest angle between vectors (of ties: subspaces) with a proved bound and the exact ones, radians; NaN for
        none.
    within_bounds : bool
        Every interval held its true value, every angle its bound, in the bulk too.
    """

    rows: tuple[int, int]
    columns: tuple[int, int]
    rank: int
    value_difference: float
    angle: float
    within_bounds: bool


@dataclass(frozen=True, eq=False)
class Certificate:
    """What a run proves about its k leading components, in the order of decreasing value.

    Attributes
    ----------
    value, lower, upper : ndarray, shape (k,)
        Singular values and the ends of their intervals. Distinct singular values of the matrix can be
        matched with the intervals, one each; where `index_proved`, interval i holds σ_i itself.
    residual : ndarray, shape (k,)
        ‖Aᴴu_i − σ_i v_i‖, with its rounding term, where panels hold samples (AV = UΣ then holds to rounding);
        ‖A v_i − σ_i u_i‖ where they hold features (AᴴU = VΣ then holds).
    state : ndarray of int8, shape (k,)
        Index into ``STATES``: resolved (width within the tolerance), open, or in the bulk.
    index_proved : ndarray of bool, shape (k,)
        Interval i is about σ_i, and either a gap further on is proved (so that nothing was missed above it) or the
        interval is within the tolerance.
    angle_bound : ndarray, shape (k,)
        Upper bound of the angle between each vector (for tied components: the subspace of the tie) and the
        true one, radians, the larger of left and right; NaN where there is none.
    tied_first, tied_last : ndarray of int, shape (k,)
        First and last component (from 0) of the group the angle bound speaks of; equal when it is the vector's own.
    null, below_noise : ndarray of bool, shape (k,)
        Components whose value is zero to rounding (vectors completed), and those not distinguishable from rounding.
    missed_bound : float
        Upper bound of the largest singular value outside the computed subspace.
    missed_how : str
        The statement it rests on.
    failure_probability : float
        Probability that `missed_bound`, and all that rests on it, is wrong; 0 where it is deterministic.
    rounding : float
        Largest rounding term included in `residual`.
    rounding_how : str
        ``proved`` or ``measured``.
    captured_share, total_energy : float
        Σ σ_i² / ‖A‖²_F, and ‖A‖²_F.
    left_defect, right_defect : float
        ‖UᴴU − I‖ and ‖VᴴV − I‖ (Frobenius) of the factors as stored.
    tolerance : float
        Wanted relative width of the intervals.
    strict : bool
        Whether components in the bulk count as unmet.
    tolerance_met : bool
    verdict : str
        All of it in a sentence or two.
    slices : tuple of SliceCheck
    """

    value: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    residual: np.ndarray
    state: np.ndarray
    index_proved: np.ndarray
    angle_bound: np.ndarray
    tied_first: np.ndarray
    tied_last: np.ndarray
    null: np.ndarray
    below_noise: np.ndarray
    missed_bound: float
    missed_how: str
    failure_probability: float
    rounding: float
    rounding_how: str
    captured_share: float
    total_energy: float
    tolerance: float
    strict: bool
    tolerance_met: bool
    verdict: str
    left_defect: float = float("nan")
    right_defect: float = float("nan")
    slices: tuple[SliceCheck, ...] = ()

    @property
    def rank(self) -> int:
        """Number of components k."""
        return len(self.value)

    @property
    def state_words(self) -> tuple[str, ...]:
        """The state of every component in words."""
        return tuple(STATES[code] for code in self.state)

    def arrays(self) -> dict[str, np.ndarray]:
        """Per-component parts, each of shape (k,), as they are stored."""
        return {name: getattr(self, name) for name in _ARRAYS}

    def facts(self) -> dict[str, Any]:
        """All other parts, as plain JSON values."""
        facts = {name: value for name, value in self.__dict__.items() if name not in _ARRAYS and name != "slices"}
        return facts | {"slices": [asdict(check) for check in self.slices]}

    @classmethod
    def restore(cls, arrays: Mapping[str, np.ndarray], facts: Mapping[str, Any]) -> Certificate:
        """Build the certificate again from its stored parts."""
        slices = tuple(
            SliceCheck(**{**check, "rows": tuple(check["rows"]), "columns": tuple(check["columns"])})
            for check in facts["slices"]
        )
        rest = {name: value for name, value in facts.items() if name != "slices"}
        parts: dict[str, Any] = {name: np.asarray(arrays[name]) for name in _ARRAYS}
        return cls(**parts, **rest, slices=slices)

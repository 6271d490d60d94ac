"""What every segment of one sweep does with its panels."""

from __future__ import annotations

import threading
from dataclasses import dataclass, field

import numpy as np

from bigsvd.prepare import ImplicitBlock, Preparation, implicit_block
from bigsvd.sweep.panels import PanelReader
from bigsvd.sweep.scratch import Scratch


@dataclass(frozen=True, eq=False)
class SweepTask:
    """What every segment of one sweep does with its panels.

    Attributes
    ----------
    reader : PanelReader
    preparation : Preparation
    dtype : numpy.dtype
        Working precision of conversion and products.
    kind : str
        ``basis`` multiplies by `block`; ``gram`` builds AᴴA; ``fold`` folds the panels themselves.
    block : ndarray, shape (across, width), or None
        Columns to multiply, in working precision.
    scratch : Scratch or None
        Where Y goes and earlier columns come from; None where only the products are wanted.
    target : int
        Number of the scratch block that is written.
    ones : bool
        Whether a column of ones is folded first, so that dropping it centres the triangle exactly.
    add_energy : bool
        Whether the energy is summed, which also tells NaN, infinity and overflow. Of a file whose words are those of
        an earlier sweep all this is known.
    add_lines : bool
        Whether the lines are summed, for the mean.
    learn : bool
        Whether squares and extremes per column are taken.
    line_features : bool
        Whether line statistics are taken (lines are features).
    sampled : frozenset of int
        Panels whose first unit is recomputed in double, to measure rounding.
    only_count : threading.Event
        Set once an entry was not finite: from then on such entries are counted, nothing else.
    implicit : ImplicitBlock or None
        What sparse panels are multiplied with.
    """

    reader: PanelReader
    preparation: Preparation
    dtype: np.dtype
    kind: str
    block: np.ndarray | None = None
    scratch: Scratch | None = None
    target: int = 0
    ones: bool = False
    add_energy: bool = True
    add_lines: bool = False
    learn: bool = False
    line_features: bool = False
    sampled: frozenset[int] = frozenset()
    only_count: threading.Event = field(default_factory=threading.Event)
    implicit: ImplicitBlock | None = field(init=False, default=None)

    def __post_init__(self) -> None:
        if self.reader.geometry.sparse and self.block is not None:
            made = implicit_block(self.block, self.preparation, self.wide)
            object.__setattr__(self, "implicit", made)

    @property
    def wide(self) -> np.dtype:
        """Type of all sums."""
        return np.dtype(np.complex128 if self.dtype.kind == "c" else np.float64)

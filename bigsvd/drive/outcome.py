"""What sweeps certify, and what a run leaves in memory and scratch when it stops."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bigsvd.certify import Certificate, Evidence
from bigsvd.plan import Plan
from bigsvd.solve import Ritz, State
from bigsvd.sweep import Scratch


@dataclass(frozen=True, eq=False)
class Answer:
    """What a whole sweep certified, and what the run knew then."""

    ritz: Ritz
    evidence: Evidence
    certificate: Certificate
    sweeps: int
    precision: str


@dataclass(frozen=True, eq=False)
class Outcome:
    """What a run leaves in memory and scratch when it stops.

    Attributes
    ----------
    plan : Plan
    state : State
    ritz : Ritz
    evidence : Evidence
    certificate : Certificate
    scratch : Scratch
        To be closed by the caller.
    mean, inverse_scale : ndarray, shape (features,)
        Statistics of the features, in units of the file.
    constant : int
        Constant features.
    sweeps : int
    precision : str
    remarks : tuple of str
    out_of_time : bool
        The deadline came first: this is what the last whole sweep certified.
    expected_sweeps : int or None
        Sweeps that the pilot let expect; None where it did not tell.
    """

    plan: Plan
    state: State
    ritz: Ritz
    evidence: Evidence
    certificate: Certificate
    scratch: Scratch
    mean: np.ndarray
    inverse_scale: np.ndarray
    constant: int
    sweeps: int
    precision: str
    remarks: tuple[str, ...]
    out_of_time: bool = False
    expected_sweeps: int | None = None

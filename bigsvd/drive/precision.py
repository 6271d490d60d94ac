"""Whether products may be made in single precision: decided on the pilot, and questioned after every sweep."""

from __future__ import annotations

import numpy as np

from bigsvd.certify import BULK_WIDTH, STATES, Certificate, Evidence, crowded, measured_rounding
from bigsvd.plan import crowd_reach
from bigsvd.solve import Pilot

# Rounding above this share of the tolerance: double.
ROUNDING_SHARE = 0.25
# An interval this many times as wide as its rounding is not wide by rounding.
ROUNDING_PART = 4


def single_is_enough(pilot: Pilot, rank: int, units: int, tolerance: float, *, strict: bool) -> bool:
    """Whether rounding measured on the pilot stays below a quarter of the tolerance for every wanted component.

    Parameters
    ----------
    pilot : Pilot
    rank : int
    units : int
        Of a whole sweep.
    tolerance : float
    strict : bool
        Neighbours in a bulk are to be told apart too.
    """
    if pilot.rounding is None:
        return False
    tall, product = measured_rounding(pilot.rounding, units)
    wanted = pilot.theta[:rank]
    # Values in the rounding of the sample say nothing; those above it decide.
    wanted = wanted[wanted > np.sqrt(pilot.energy) * 1e-7]
    if not len(wanted):
        return False
    width = 2 * (product[: len(wanted)] / wanted / np.sqrt(2) + tall) / wanted
    allowed = np.full(len(wanted), tolerance)
    if not strict:
        # Neighbours in a bulk of noise need not be told apart, only bounded.
        allowed[crowded(pilot.theta, len(wanted), crowd_reach(rank))] = BULK_WIDTH
    return bool(np.all(width <= ROUNDING_SHARE * allowed))


def rounding_too_large(evidence: Evidence, certificate: Certificate) -> bool:
    """Whether single precision spends more than its share of the tolerance on a component that is still open."""
    theta = np.maximum(evidence.theta[: certificate.rank], 1e-150)
    rounding = evidence.product_rounding[: certificate.rank] / theta / np.sqrt(2) + evidence.value_rounding
    width = certificate.upper - certificate.lower
    waiting = certificate.state == STATES.index("open")
    if certificate.strict:
        waiting |= certificate.state == STATES.index("bulk")
    spent = 2 * rounding > ROUNDING_SHARE * certificate.tolerance * theta
    # While convergence is what is missing, single goes on.
    return bool(np.any(waiting & spent & (width < ROUNDING_PART * 2 * rounding)))

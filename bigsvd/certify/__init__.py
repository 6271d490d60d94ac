"""What a run proves: intervals, order, angles, the bound on what was missed, the verdict. Imports no solver."""

from bigsvd.certify.certificate import STATES, Certificate, SliceCheck
from bigsvd.certify.evidence import Evidence, WholeSpectrum
from bigsvd.certify.intervals import BULK_WIDTH
from bigsvd.certify.missed import CHAIN_FAILURE, ChainState, chain_bound, energy_bound, least_projection
from bigsvd.certify.order import index_bounds, upper_ends
from bigsvd.certify.rounding import (
    SumDepth,
    fold_rounding,
    gamma,
    gram_rounding,
    measured_rounding,
    product_rounding,
    tall_rounding,
    triangle_rounding,
)
from bigsvd.certify.verdict import certify, crowded, rounding_limited, spectrum_intervals

__all__ = [
    "BULK_WIDTH",
    "CHAIN_FAILURE",
    "STATES",
    "Certificate",
    "ChainState",
    "Evidence",
    "SliceCheck",
    "SumDepth",
    "WholeSpectrum",
    "certify",
    "chain_bound",
    "crowded",
    "energy_bound",
    "fold_rounding",
    "gamma",
    "gram_rounding",
    "index_bounds",
    "least_projection",
    "measured_rounding",
    "product_rounding",
    "rounding_limited",
    "spectrum_intervals",
    "tall_rounding",
    "triangle_rounding",
    "upper_ends",
]

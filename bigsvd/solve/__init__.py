"""How the basis is found: pilot, growth, restart, whole spectra, statistics of the first sweep, tall vectors."""

from bigsvd.solve.grow import carry_chains, gaussian_directions, grow_block, start_block
from bigsvd.solve.pilot import Pilot, expected_sweeps, take_pilot
from bigsvd.solve.state import Aside, Chain, Ritz, State
from bigsvd.solve.statistics import Learnt, correct_gram, correct_products, first_statistics, in_range, learn
from bigsvd.solve.tall import TallVectors, column_phases
from bigsvd.solve.whole import from_gram, from_triangle

__all__ = [
    "Aside",
    "Chain",
    "Learnt",
    "Pilot",
    "Ritz",
    "State",
    "TallVectors",
    "carry_chains",
    "column_phases",
    "correct_gram",
    "correct_products",
    "expected_sweeps",
    "first_statistics",
    "from_gram",
    "from_triangle",
    "gaussian_directions",
    "grow_block",
    "in_range",
    "learn",
    "start_block",
    "take_pilot",
]

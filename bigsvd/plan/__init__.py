"""Pure arithmetic on specs: axis, panels, route, widths, memory, time. Opens nothing."""

from bigsvd.plan.geometry import Geometry
from bigsvd.plan.memory import UNIT_COLUMNS, UNIT_LINES, MemoryTerm, fold_lines
from bigsvd.plan.plan import Plan, make_plan
from bigsvd.plan.rates import BASE_BYTES, READ_RATE
from bigsvd.plan.request import Request
from bigsvd.plan.widths import Widths, crowd_reach

__all__ = [
    "BASE_BYTES",
    "READ_RATE",
    "UNIT_COLUMNS",
    "UNIT_LINES",
    "Geometry",
    "MemoryTerm",
    "Plan",
    "Request",
    "Widths",
    "crowd_reach",
    "fold_lines",
    "make_plan",
]

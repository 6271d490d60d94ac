"""Pure arithmetic on specs: axis, panels, route, widths, memory, time. Opens nothing."""

from bigsvd.plan.choose import make_plan
from bigsvd.plan.geometry import UNIT_LINES, Geometry
from bigsvd.plan.memory import SLICE_ENTRIES, TALL_LINES, MemoryTerm, fold_lines, tile_columns
from bigsvd.plan.phases import CALLER, SHARED, Costs, pass_costs, predict
from bigsvd.plan.plan import Plan
from bigsvd.plan.rates import BASE_BYTES, NOMINAL, NOMINAL_SHARE_OF_SLICES, Rate, Rates
from bigsvd.plan.request import DEFAULT_MAX_RANK, DEFAULT_RANK, Request
from bigsvd.plan.sparse import MEASURED_COLUMNS, sparse_bytes
from bigsvd.plan.widths import Widths, crowd_reach, krylov_widths

__all__ = [
    "BASE_BYTES",
    "CALLER",
    "DEFAULT_MAX_RANK",
    "DEFAULT_RANK",
    "MEASURED_COLUMNS",
    "NOMINAL",
    "NOMINAL_SHARE_OF_SLICES",
    "SHARED",
    "SLICE_ENTRIES",
    "TALL_LINES",
    "UNIT_LINES",
    "Costs",
    "Geometry",
    "MemoryTerm",
    "Plan",
    "Rate",
    "Rates",
    "Request",
    "Widths",
    "crowd_reach",
    "fold_lines",
    "krylov_widths",
    "make_plan",
    "pass_costs",
    "predict",
    "sparse_bytes",
    "tile_columns",
]

"""The result store: its layout, atomic writing, opening and the check of its own digests."""

from bigsvd.factors.layout import plan_names, store_cost
from bigsvd.factors.lock import OutputLock
from bigsvd.factors.opening import open_factors
from bigsvd.factors.place import Place, check_output, is_whole
from bigsvd.factors.result import Factors
from bigsvd.factors.stored_axes import StoredAxes
from bigsvd.factors.writer import FactorsWriter

__all__ = [
    "Factors",
    "FactorsWriter",
    "OutputLock",
    "Place",
    "StoredAxes",
    "check_output",
    "is_whole",
    "open_factors",
    "plan_names",
    "store_cost",
]

"""The result store: its layout, atomic writing, opening and the check of its own digests."""

from bigsvd.factors.layout import store_cost
from bigsvd.factors.opening import open_factors
from bigsvd.factors.place import check_output
from bigsvd.factors.result import Factors
from bigsvd.factors.writer import FactorsWriter

__all__ = ["Factors", "FactorsWriter", "check_output", "open_factors", "store_cost"]

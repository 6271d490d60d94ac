"""Where a matrix comes from: files and arrays behind one interface."""

from bigsvd.source.access import Access
from bigsvd.source.axis_choice import AxisChoice
from bigsvd.source.candidate import Candidate
from bigsvd.source.complete import check_complete
from bigsvd.source.open import open_source, survey
from bigsvd.source.spec import MatrixSpec, Source
from bigsvd.source.unfolding import Side, Unfolding

__all__ = [
    "Access",
    "AxisChoice",
    "Candidate",
    "MatrixSpec",
    "Side",
    "Source",
    "Unfolding",
    "check_complete",
    "open_source",
    "survey",
]

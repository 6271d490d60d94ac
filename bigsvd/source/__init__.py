"""Where a matrix comes from: files and arrays behind one interface."""

from bigsvd.source.access import Access
from bigsvd.source.candidate import Candidate
from bigsvd.source.complete import check_complete
from bigsvd.source.open import open_source, survey
from bigsvd.source.spec import LineNonzeros, LineSource, MatrixSpec, Source, line_counter

__all__ = [
    "Access",
    "Candidate",
    "LineNonzeros",
    "LineSource",
    "MatrixSpec",
    "Source",
    "check_complete",
    "line_counter",
    "open_source",
    "survey",
]

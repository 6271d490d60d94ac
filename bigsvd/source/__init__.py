"""Where a matrix comes from: files and arrays behind one interface."""

from bigsvd.source.access import Access
from bigsvd.source.axes import CONTRADICTORY
from bigsvd.source.candidate import Candidate
from bigsvd.source.complete import check_complete
from bigsvd.source.names import Names, repeated, showable
from bigsvd.source.names import to_text as names_to_text
from bigsvd.source.names_derived import join_names, take_names
from bigsvd.source.open import find_names, open_source, survey
from bigsvd.source.spec import MatrixSpec, Source
from bigsvd.source.stamp import FileStamp, digest

__all__ = [
    "CONTRADICTORY",
    "Access",
    "Candidate",
    "FileStamp",
    "MatrixSpec",
    "Names",
    "Source",
    "check_complete",
    "digest",
    "find_names",
    "join_names",
    "names_to_text",
    "open_source",
    "repeated",
    "showable",
    "survey",
    "take_names",
]

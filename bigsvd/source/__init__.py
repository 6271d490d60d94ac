"""Where a matrix comes from: files and arrays behind one interface."""

from bigsvd.source.candidate import Candidate
from bigsvd.source.open import open_source, survey
from bigsvd.source.spec import MatrixSpec, Source

__all__ = ["Candidate", "MatrixSpec", "Source", "open_source", "survey"]

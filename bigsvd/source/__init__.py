"""Where a matrix comes from: files and arrays behind one interface."""

from bigsvd.source.access import Access
from bigsvd.source.candidate import Candidate
from bigsvd.source.complete import check_complete
from bigsvd.source.open import open_source, survey
from bigsvd.source.packing import Packing
from bigsvd.source.rectangle import fill_by_bands, require_rectangle, tile_bytes, tiles
from bigsvd.source.spec import LineNonzeros, LineSource, MatrixSpec, Missing, Source, line_counter
from bigsvd.source.stamp import digest

__all__ = [
    "Access",
    "Candidate",
    "LineNonzeros",
    "LineSource",
    "MatrixSpec",
    "Missing",
    "Packing",
    "Source",
    "check_complete",
    "digest",
    "fill_by_bands",
    "line_counter",
    "open_source",
    "require_rectangle",
    "survey",
    "tile_bytes",
    "tiles",
]

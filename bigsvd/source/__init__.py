"""Where a matrix comes from: files and arrays behind one interface."""

from bigsvd.source.access import Access
from bigsvd.source.axes import CONTRADICTORY
from bigsvd.source.axis_choice import AxisChoice
from bigsvd.source.candidate import Candidate
from bigsvd.source.complete import check_complete
from bigsvd.source.names import Names, repeated, showable
from bigsvd.source.names import to_text as names_to_text
from bigsvd.source.names_derived import join_names, take_names
from bigsvd.source.open import find_names, open_source, survey
from bigsvd.source.packing import Packing
from bigsvd.source.rectangle import fill_by_bands, require_rectangle, tile_bytes, tiles
from bigsvd.source.spec import LineNonzeros, LineSource, MatrixSpec, Missing, Source, line_counter
from bigsvd.source.stamp import FileStamp, digest
from bigsvd.source.unfolding import Side, Unfolding

__all__ = [
    "CONTRADICTORY",
    "Access",
    "AxisChoice",
    "Candidate",
    "FileStamp",
    "LineNonzeros",
    "LineSource",
    "MatrixSpec",
    "Missing",
    "Names",
    "Packing",
    "Side",
    "Source",
    "Unfolding",
    "check_complete",
    "digest",
    "fill_by_bands",
    "find_names",
    "join_names",
    "line_counter",
    "names_to_text",
    "open_source",
    "repeated",
    "require_rectangle",
    "showable",
    "survey",
    "take_names",
    "tile_bytes",
    "tiles",
]

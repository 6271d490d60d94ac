"""What is made of stored entries on the way to a panel: joined, decoded, chosen, completed, mapped."""

from bigsvd.adapt.census import Census, TileCount, count_tile
from bigsvd.adapt.missing import MissingSource
from bigsvd.adapt.open import open_adapted
from bigsvd.adapt.reading import Reading

__all__ = ["Census", "MissingSource", "Reading", "TileCount", "count_tile", "open_adapted"]

"""What is made of stored entries on the way to a panel: joined, decoded, chosen, completed, mapped."""

from bigsvd.adapt.open import open_adapted
from bigsvd.adapt.reading import Reading

__all__ = ["Reading", "open_adapted"]

"""How the user wants a matrix to be read: everything that decides what its entries are."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Any

from bigsvd.source import Access, AxisChoice


@dataclass(frozen=True)
class Reading:
    """Options of reading, as the user gave them. A source made with them has them in its fingerprint.

    Attributes
    ----------
    absent, follow_links
        See `Access`.
    sample_axes, region, mask
        See `AxisChoice`.
    """

    absent: str = "refuse"
    follow_links: bool = False
    sample_axes: Any = None
    region: Any = None
    mask: Any = None

    @property
    def access(self) -> Access:
        """What is allowed while a file is opened."""
        return Access(self.absent, self.follow_links)

    @property
    def axes(self) -> AxisChoice:
        """What becomes of the axes of an array."""
        return AxisChoice(self.sample_axes, self.region, self.mask)

    @classmethod
    def names(cls) -> frozenset[str]:
        """Names of the options."""
        return frozenset(field.name for field in fields(cls))

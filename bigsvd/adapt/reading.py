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
    absent, follow_links, sparse_format
        See `Access`.
    sample_axes, region, mask
        See `AxisChoice`.
    raw : bool
        Take packed entries as they are stored.
    missing : str
        What becomes of missing entries, a word of `POLICIES`.
    level : int or None
        Of an image in several resolutions, which; 0, the full one, by default.
    row_names, column_names : str or None
        Where the names of rows and columns stand: a path inside the file of the matrix, ``FILE:PATH``, a text file
        with a name a line, or an .npy file of text. By default where the layout of the file keeps them.
    """

    absent: str = "refuse"
    follow_links: bool = False
    sample_axes: Any = None
    region: Any = None
    mask: Any = None
    sparse_format: str | None = None
    raw: bool = False
    missing: str = "refuse"
    level: int | None = None
    row_names: str | None = None
    column_names: str | None = None

    @property
    def access(self) -> Access:
        """What is allowed while a file is opened."""
        return Access(self.absent, self.follow_links, self.sparse_format)

    @property
    def axes(self) -> AxisChoice:
        """What becomes of the axes of an array."""
        return AxisChoice(self.sample_axes, self.region, self.mask)

    @classmethod
    def names(cls) -> frozenset[str]:
        """Names of the options."""
        return frozenset(field.name for field in fields(cls))

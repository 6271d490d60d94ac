"""How the user wants a matrix to be read: everything that decides what its entries are."""

from __future__ import annotations

from dataclasses import dataclass, fields

from bigsvd.source import Access


@dataclass(frozen=True)
class Reading:
    """Options of reading, as the user gave them. A source made with them has them in its fingerprint.

    Attributes
    ----------
    absent, follow_links, sparse_format
        See `Access`.
    raw : bool
        Take packed entries as they are stored.
    missing : str
        What becomes of missing entries, a word of `POLICIES`.
    """

    absent: str = "refuse"
    follow_links: bool = False
    sparse_format: str | None = None
    raw: bool = False
    missing: str = "refuse"

    @property
    def access(self) -> Access:
        """What is allowed while a file is opened."""
        return Access(self.absent, self.follow_links, self.sparse_format)

    @classmethod
    def names(cls) -> frozenset[str]:
        """Names of the options."""
        return frozenset(field.name for field in fields(cls))

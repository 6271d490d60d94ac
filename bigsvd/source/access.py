"""What the user allows a reader: to fill what was never written, and to follow links out of the file's own folder."""

from __future__ import annotations

from dataclasses import dataclass

from bigsvd.errors import OptionError

ABSENT = ("refuse", "fill")


@dataclass(frozen=True)
class Access:
    """How a file may be read.

    Attributes
    ----------
    absent : {"refuse", "fill"}
        Whether chunks that were never written stop the run, or are read as the fill value that the file declares.
    follow_links : bool
        Whether other files outside the file's own folder are opened, to which links in it lead.

    Raises
    ------
    OptionError
        If `absent` is another word.
    """

    absent: str = "refuse"
    follow_links: bool = False

    def __post_init__(self) -> None:
        if self.absent not in ABSENT:
            raise OptionError(f"--absent {self.absent} is not a choice", remedy=f"Choose one of: {', '.join(ABSENT)}.")

    @property
    def fills(self) -> bool:
        """Whether chunks that were never written are read as the fill value."""
        return self.absent == "fill"


STRICT = Access()

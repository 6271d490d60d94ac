"""What the user allows a reader: to fill what was never written, and to follow links out of the file's own folder."""

from __future__ import annotations

from dataclasses import dataclass

from bigsvd.errors import OptionError

ABSENT = ("refuse", "fill")
SPARSE_FORMATS = ("csr", "csc")


@dataclass(frozen=True)
class Access:
    """How a file may be read.

    Attributes
    ----------
    absent : {"refuse", "fill"}
        Whether chunks that were never written stop the run, or are read as the fill value that the file declares.
    follow_links : bool
        Whether other files outside the file's own folder are opened, to which links in it lead.
    sparse_format : {"csr", "csc"} or None
        Whether a sparse group that does not say it is compressed by rows or by columns.

    Raises
    ------
    OptionError
        If `absent` or `sparse_format` is another word.
    """

    absent: str = "refuse"
    follow_links: bool = False
    sparse_format: str | None = None

    def __post_init__(self) -> None:
        if self.absent not in ABSENT:
            raise OptionError(f"--absent {self.absent} is not a choice", remedy=f"Choose one of: {', '.join(ABSENT)}.")
        if self.sparse_format not in (None, *SPARSE_FORMATS):
            raise OptionError(
                f"--sparse-format {self.sparse_format} is not a choice",
                remedy=f"Choose one of: {', '.join(SPARSE_FORMATS)}.",
            )

    @property
    def fills(self) -> bool:
        """Whether chunks that were never written are read as the fill value."""
        return self.absent == "fill"


STRICT = Access()

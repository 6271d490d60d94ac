"""From what the user names to the matrix that is decomposed: each step takes a source and gives one."""

from __future__ import annotations

from typing import Any

from bigsvd.adapt.reading import Reading
from bigsvd.source import Source, open_source


def open_adapted(where: Any, matrix: str | None = None, reading: Reading | None = None) -> Source:
    """Open a matrix as the user wants it read.

    Parameters
    ----------
    where, matrix
        See `open_source`.
    reading : Reading, optional

    Returns
    -------
    Source
        In this order, each only where it is asked for or the file calls for it: axes unfolded, files joined, packed
        entries decoded, rows and columns chosen, missing entries filled, entries mapped.
    """
    reading = reading or Reading()
    return open_source(where, matrix, reading.access, reading.axes)

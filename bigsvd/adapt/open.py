"""From what the user names to the matrix that is decomposed: each step takes a source and gives one."""

from __future__ import annotations

from typing import Any

from bigsvd.adapt.levels import choose_level
from bigsvd.adapt.missing import MissingSource, check_policy
from bigsvd.adapt.names import name_axes
from bigsvd.adapt.packed import decode_packed
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
        In this order, each only where it is asked for or the file calls for it: axes unfolded, files joined, axes
        named, packed entries decoded, rows and columns chosen, missing entries filled, entries mapped.
    """
    reading = reading or Reading()
    check_policy(reading.missing)
    matrix = choose_level(where, matrix, reading.level, reading.access)
    source = open_source(where, matrix, reading.access, reading.axes)
    source = name_axes(source, reading.row_names, reading.column_names, reading.access)
    source = decode_packed(source, raw=reading.raw)
    return source if reading.missing == "refuse" else MissingSource(source, reading.missing)

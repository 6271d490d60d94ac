"""Whether all of a matrix is there, asked before long work: libraries answer zeros for what was never written."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol, runtime_checkable

import numpy as np

from bigsvd.errors import DamagedSourceError
from bigsvd.source.rectangle import show_chunk
from bigsvd.source.spec import MatrixSpec, Source
from bigsvd.units import show_count

SHOWN = 3


@runtime_checkable
class Stored(Protocol):
    """A source whose stored parts can be counted without reading them."""

    def require_complete(self) -> None:
        """Refuse a matrix of which parts are absent."""
        ...


def check_complete(source: Source) -> None:
    """Refuse a matrix of which stored parts are absent, without reading entries.

    Parameters
    ----------
    source : Source
        Arrays in memory and dask arrays are complete by nature.

    Raises
    ------
    DamagedSourceError
        If chunks, shards, chunks inside a shard, external files or sources of a virtual dataset are absent or
        short; counts them and names the first.
    SourceChangedError
        If the file is not the one that was opened.

    Notes
    -----
    Cost: one walk over the chunk index or one listing of the store, a byte a chunk held; for sharded arrays also
    the index of each shard.
    """
    if isinstance(source, Stored):
        source.require_complete()


def refuse_absent(absent: np.ndarray, spec: MatrixSpec, chunks: tuple[int, int], meant: str) -> None:
    """Raise if any chunk of a grid is marked as absent; `meant` is the remedy if it holds only the fill value."""
    if absent.any():
        raise absent_error(
            spec,
            count_absent(int(np.count_nonzero(absent)), f"{show_count(absent.size)} chunks"),
            [show_chunk(place, spec.shape, chunks) for place in first_places(absent)],
            meant,
        )


def count_absent(count: int, whole: str) -> str:
    """Say how many of the whole are absent.

    >>> count_absent(1, "80 chunks")
    '1 of 80 chunks is absent'
    """
    return f"{show_count(count)} of {whole} {'is' if count == 1 else 'are'} absent"


def first_places(marked: np.ndarray) -> list[tuple[int, int]]:
    """Coordinates of the first marked chunks, in storage order."""
    columns = marked.shape[1]
    return [(int(n) // columns, int(n) % columns) for n in np.flatnonzero(marked)[:SHOWN]]


def absent_error(spec: MatrixSpec, count: str, places: Sequence[str], meant: str) -> DamagedSourceError:
    """Say which chunks are absent, and why that is not taken for zeros."""
    return DamagedSourceError(
        f"{spec.name} is not complete: {count}",
        evidence=[
            *(
                f"first absent: {place}" if number == 0 else f"also absent: {place}"
                for number, place in enumerate(places)
            ),
            "an absent chunk would be read as the fill value; one left out on purpose cannot be told from a lost one",
        ],
        remedy=f"Copy the data again from its origin. If those chunks are meant to hold only the fill value: {meant}",
    )

"""Whether all of a matrix is there, asked before long work: libraries answer zeros for what was never written."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Protocol, runtime_checkable

import numpy as np

from bigsvd.errors import DamagedSourceError
from bigsvd.source.access import Access
from bigsvd.source.fill import FillError
from bigsvd.source.rectangle import show_chunk
from bigsvd.source.spec import Absent, MatrixSpec, Source, count_absent
from bigsvd.source.stamp import digest

SHOWN = 3


@runtime_checkable
class Stored(Protocol):
    """A source whose stored parts can be counted without reading them."""

    def require_complete(self) -> None:
        """Refuse a matrix of which parts are absent, or note those that the user accepts in its spec."""
        ...


def check_complete(source: Source) -> None:
    """Refuse a matrix of which stored parts are absent, without reading entries.

    Parameters
    ----------
    source : Source
        Arrays in memory and dask arrays are complete by nature. Where it was opened with ``absent="fill"``, chunks
        that were never written are counted in ``source.spec.absent`` instead; other files must be complete all the
        same.

    Raises
    ------
    DamagedSourceError
        If chunks, shards, chunks inside a shard, external files or sources of a virtual dataset are absent or
        short; counts them and names the first. If they are to be filled, and the fill value is no finite entry.
    SourceChangedError
        If the file is not the one that was opened.

    Notes
    -----
    Cost: one walk over the chunk index or one listing of the store, a byte a chunk held; for sharded arrays also
    the index of each shard.
    """
    if isinstance(source, Stored):
        source.require_complete()


def first_chunks(absent: np.ndarray, shape: tuple[int, ...], chunks: tuple[int, ...]) -> list[str]:
    """Places of the first marked chunks of the grid of an array, in storage order."""
    return [show_chunk(place, shape, chunks) for place in first_places(absent)]


def first_places(marked: np.ndarray) -> list[tuple[int, ...]]:
    """Coordinates of the first marked chunks, in storage order."""
    return [tuple(map(int, np.unravel_index(n, marked.shape))) for n in np.flatnonzero(marked)[:SHOWN]]


def settle_absent(
    spec: MatrixSpec,
    count: int,
    of: int,
    places: Sequence[str],
    access: Access,
    fill: Callable[[], np.generic],
    meant: str,
) -> MatrixSpec:
    """Refuse absent chunks, or note in the spec that they are read as the fill value.

    Parameters
    ----------
    spec : MatrixSpec
    count, of : int
        Absent chunks, and all there should be; 0 returns the spec as it is.
    places : sequence of str
        Where the first of them lie.
    access : Access
    fill : callable
        Returns the fill value; raises `FillError`.
    meant : str
        How to write them, if they hold only the fill value.
    """
    if not count:
        return spec
    if not access.fills:
        raise absent_error(spec, count_absent(count, of), places, meant)
    try:
        value = fill()
    except FillError as error:
        raise DamagedSourceError(
            f"{spec.name} is not complete: {count_absent(count, of)}, and cannot be filled",
            evidence=[str(error), *(f"absent: {place}" for place in places)],
            remedy=f"Leave out --absent fill, and {meant}",
        ) from error
    absent = Absent(count, of, tuple(places), str(value))
    # Chunks that turn up later make another matrix.
    fingerprint = digest(spec.fingerprint, absent)
    return replace(spec, absent=absent, cautions=(*spec.cautions, absent.words), fingerprint=fingerprint)


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
        remedy="Copy the data again from its origin. If those chunks are meant to hold only the fill value: add"
        f" --absent fill, or {meant}",
    )

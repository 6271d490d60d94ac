"""One read of the whole matrix before it is planned, which counts what is missing and takes means of what is there."""

from __future__ import annotations

from collections import deque
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import replace

import numpy as np

from bigsvd.adapt import Census, MissingSource, TileCount, count_tile
from bigsvd.plan import BASE_BYTES, Plan
from bigsvd.source import MatrixSpec, Source, tile_bytes, tiles
from bigsvd.sweep import Control

# Tiles that wait for a worker or to be added up, per worker.
AHEAD = 2


def settle_missing(source: MissingSource, plan: Plan, control: Control) -> Source:
    """Count missing entries, and fill or leave them out as the source's policy says.

    Parameters
    ----------
    source : MissingSource
    plan : Plan
        Of the matrix as it is before: says which axis holds the samples, and what memory there is.
    control : Control
        Counts what is read; carries a wish to stop.

    Returns
    -------
    Source

    Raises
    ------
    NonFiniteError
        As `MissingSource.settled`.

    Notes
    -----
    Cost: one read. Tiles follow from the chunks alone and are added up in their order, so the means are the same bits
    whatever the workers, and again when a run is gone on with.
    """
    spec = source.spec
    census = Census(spec.shape, 1 if plan.request.samples == "rows" else 0, spec.dtype)
    if source.counts:
        room = plan.planned_bytes - BASE_BYTES - spec.held_bytes
        shape = _tiled(spec, room)
        # Of a tile there are its entries and a mask.
        each = spec.decode_bytes + 2 * tile_bytes(shape)
        workers = max(1, min(plan.workers, room // each))
        control.begin("missing", spec.decoded_bytes)
        _count(source, shape, census, control, workers)
        control.account("start")
    return source.settled(census)


def _tiled(spec: MatrixSpec, room: int) -> MatrixSpec:
    """The spec by which tiles are cut: in parts of a chunk where memory has no room for a whole one."""
    most = max(1, (room - spec.decode_bytes) // 2)
    while tile_bytes(spec) > most and spec.chunks != (1, 1):
        longer = 0 if spec.chunks[0] > 1 else 1
        chunks = list(spec.chunks)
        chunks[longer] = -(-chunks[longer] // 2)
        edges = (None, spec.edges[1]) if longer == 0 else (spec.edges[0], None)
        spec = replace(spec, chunks=(chunks[0], chunks[1]), edges=edges)
    return spec


def _count(source: Source, shape: MatrixSpec, census: Census, control: Control, workers: int) -> None:
    """Count tile by tile, a few at a time, and add up in order."""
    spec, axis = source.spec, census.feature_axis

    def one(rows: tuple[int, int], columns: tuple[int, int]) -> TileCount:
        values = np.empty((rows[1] - rows[0], columns[1] - columns[0]), spec.dtype)
        source.read(rows, columns, values)
        return count_tile(values, axis)

    waiting: deque[tuple[tuple[tuple[int, int], tuple[int, int]], Future[TileCount]]] = deque()

    def add() -> None:
        (rows, columns), counted = waiting.popleft()
        census.add(rows, columns, counted.result())
        control.advance((rows[1] - rows[0]) * (columns[1] - columns[0]) * spec.dtype.itemsize)

    with ThreadPoolExecutor(workers, thread_name_prefix="bigsvd-count") as pool:
        try:
            for tile in tiles(shape, (0, spec.shape[0]), (0, spec.shape[1])):
                waiting.append((tile, pool.submit(one, *tile)))
                if len(waiting) > AHEAD * workers:
                    add()
            while waiting:
                add()
        except BaseException:
            pool.shutdown(cancel_futures=True)
            raise

"""Blocks of a large file: made in threads, written in order, each with random numbers of its own."""

from __future__ import annotations

import os
import zlib
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from typing import TypeVar

import numpy as np

Block = TypeVar("Block")
Made = TypeVar("Made")


def block_random(seed: int, stream: str, block: int) -> np.random.Generator:
    """Return the random numbers of one block, whoever makes it and whenever.

    Parameters
    ----------
    seed : int
        The 64-bit key.
    stream : str
        What they are for; streams do not overlap.
    block : int
        Number of the block.

    Returns
    -------
    numpy.random.Generator
        Philox4x64 with the counter starting at (0, 0, block, hash of stream).
        Method: Salmon, Moraes, Dror, Shaw, Proc. SC11 (2011).
    """
    counter = np.array([0, 0, block, zlib.crc32(stream.encode())], dtype="u8")
    return np.random.Generator(np.random.Philox(key=seed, counter=counter))


def rectangles(shape: tuple[int, int], size: tuple[int, int]) -> list[tuple[slice, slice]]:
    """Cut a matrix into rectangles of at most `size`, row by row.

    >>> rectangles((3, 4), (2, 4))
    [(slice(0, 2, None), slice(0, 4, None)), (slice(2, 3, None), slice(0, 4, None))]
    """
    return [
        (slice(row, min(row + size[0], shape[0])), slice(column, min(column + size[1], shape[1])))
        for row in range(0, shape[0], size[0])
        for column in range(0, shape[1], size[1])
    ]


def usable_cores() -> int:
    """Count the cores that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def made_in_order(make: Callable[[Block], Made], blocks: Iterable[Block], workers: int) -> Iterator[tuple[Block, Made]]:
    """Make blocks in threads and hand them out in their order, at most `workers` + 2 alive at a time."""
    pool = ThreadPoolExecutor(workers)
    waiting: deque[tuple[Block, Future[Made]]] = deque()
    try:
        for block in blocks:
            waiting.append((block, pool.submit(make, block)))
            if len(waiting) > workers:
                first, future = waiting.popleft()
                yield first, future.result()
        while waiting:
            first, future = waiting.popleft()
            yield first, future.result()
    finally:
        pool.shutdown(cancel_futures=True)


def shuffled_deflate(block: np.ndarray, chunk: tuple[int, int], level: int) -> bytes:
    """Encode a block as HDF5's shuffle and gzip filters would: bytes grouped by place, then a zlib stream.

    Parameters
    ----------
    block : ndarray, shape at most `chunk`
        In the byte order of the file; filled up with zeros to a whole chunk, as HDF5 stores it.
    chunk : tuple of two int
        Rows and columns of a chunk of the file.
    level : int
        Of zlib, 1 to 9.

    Returns
    -------
    bytes
        For ``write_direct_chunk`` with no filter left out.
    """
    if block.shape != chunk:
        whole = np.zeros(chunk, block.dtype)
        whole[: block.shape[0], : block.shape[1]] = block
        block = whole
    grouped = np.ascontiguousarray(block).view("u1").reshape(-1, block.dtype.itemsize).T
    return zlib.compress(grouped.tobytes(), level)

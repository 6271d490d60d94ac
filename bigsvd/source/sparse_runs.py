"""Runs of a list of numbers, read so that no chunk is decoded twice by readers that follow one another."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable

import numpy as np

from bigsvd.source.spec import Source

# Entries that are read or converted at a time: their buffers stay in the processor's cache, their overhead is small.
BATCH_ENTRIES = 2**17
Check = Callable[[np.ndarray, int], None]


class Runs:
    """Reads runs of a list; of chunks that a run cuts, the last is kept for the run that begins in it.

    Parameters
    ----------
    source : Source
        The list as a matrix of one row.
    """

    def __init__(self, source: Source) -> None:
        self.source = source
        self.dtype = source.spec.dtype
        self._length = source.spec.shape[1]
        self._chunk = source.spec.chunks[1]
        # As many as threads have read at once: each was taken by one thread for the length of a read.
        self._kept: deque[tuple[int, np.ndarray]] = deque()

    @property
    def held_bytes(self) -> int:
        """Most bytes that a thread holds beside what it reads into: a chunk, and a batch that is converted."""
        batch = min(self._step(), self._length)
        kept = self._chunk * self.dtype.itemsize if self._chunk > 1 else 0
        return self.source.spec.decode_bytes + kept + batch * self.dtype.itemsize

    def forget(self) -> None:
        """Drop the kept chunks."""
        self._kept.clear()

    def announce(self, start: int, stop: int) -> None:
        """Have the system fetch a run that will be read soon."""
        announce = getattr(self.source, "announce", None)
        if announce is not None and start < stop:
            announce((0, 1), (start, stop))

    def read(self, start: int, stop: int, out: np.ndarray, check: Check | None = None) -> None:
        """Read entries start … stop into `out`, which may be of another type.

        Parameters
        ----------
        start, stop : int
        out : ndarray, shape (stop - start,)
        check : callable, optional
            Takes each batch as it is stored, and the place of its first entry, before it is converted.
        """
        step = self._step()
        while start < stop:
            end = min(stop, (start // step + 1) * step)
            batch = out[: end - start] if out.dtype == self.dtype else np.empty(end - start, self.dtype)
            self._fill(start, end, batch)
            if check is not None:
                check(batch, start)
            if batch.dtype != out.dtype:
                out[: end - start] = batch
            out, start = out[end - start :], end

    def _step(self) -> int:
        """Entries of a batch: whole chunks."""
        return self._chunk * max(1, BATCH_ENTRIES // self._chunk)

    def _fill(self, start: int, stop: int, out: np.ndarray) -> None:
        """Read whole chunks straight, and cut ones through the kept chunk; a list without chunks straight as well."""
        chunk = self._chunk
        if chunk == 1:
            self.source.read((0, 1), (start, stop), out[np.newaxis])
            return
        begin = -(-start // chunk) * chunk
        end = stop if stop == self._length else stop // chunk * chunk
        if start < begin:
            cut = min(stop, begin)
            self._cut(begin // chunk - 1, start, cut, out[: cut - start])
            out, start = out[cut - start :], cut
        if start < end:
            self.source.read((0, 1), (start, end), out[np.newaxis, : end - start])
            out, start = out[end - start :], end
        if start < stop:
            self._cut(stop // chunk, start, stop, out)

    def _cut(self, number: int, start: int, stop: int, out: np.ndarray) -> None:
        """Copy a part of one chunk, which is kept whole."""
        kept = self._taken(number)
        if kept is None or kept[0] != number:
            first = number * self._chunk
            size = min(self._chunk, self._length - first)
            buffer = kept[1] if kept is not None else np.empty(self._chunk, self.dtype)
            kept = number, buffer
            self.source.read((0, 1), (first, first + size), buffer[np.newaxis, :size])
        first = number * self._chunk
        out[...] = kept[1][start - first : stop - first]
        self._kept.append(kept)

    def _taken(self, number: int) -> tuple[int, np.ndarray] | None:
        """The kept chunk of this number, else another whose buffer may be used; None where all are in use."""
        for _ in range(len(self._kept)):
            try:
                kept = self._kept.popleft()
            except IndexError:
                return None
            if kept[0] == number:
                return kept
            self._kept.append(kept)
        try:
            return self._kept.popleft()
        except IndexError:
            return None

"""The tall products Y = A·B on disk: blocks written once, and the map from what is stored to the present basis."""

from __future__ import annotations

import contextlib
import os
import shutil
import tempfile
from pathlib import Path

import numpy as np


class Scratch:
    """Columns of Y, one file per block, read and written by ranges of lines from several threads.

    Parameters
    ----------
    folder : Path
        Where a private folder is made; removed by `close`.
    lines : int
        Lines of Y.
    dtype : numpy.dtype
        float64 or complex128.

    Attributes
    ----------
    map : ndarray, shape (stored columns, width)
        Y of the present basis is (stored columns) · map, up to a constant row that centring removes. Restarts and
        re-expressions change the map, never the files.
    """

    def __init__(self, folder: Path, lines: int, dtype: np.dtype) -> None:
        self.folder = Path(tempfile.mkdtemp(prefix=".bigsvd-scratch-", dir=folder))
        self.lines = lines
        self.dtype = np.dtype(dtype)
        self.map = np.zeros((0, 0), self.dtype)
        self._files: list[tuple[int, int]] = []

    @property
    def stored(self) -> int:
        """Columns stored so far."""
        return sum(columns for _, columns in self._files)

    @property
    def stored_bytes(self) -> int:
        """Bytes on disk."""
        return self.lines * self.stored * self.dtype.itemsize

    def add_block(self, columns: int) -> int:
        """Make room for a block of columns; return its number."""
        handle = os.open(self.folder / f"block-{len(self._files):02d}", os.O_RDWR | os.O_CREAT | os.O_EXCL, 0o600)
        os.ftruncate(handle, self.lines * columns * self.dtype.itemsize)
        self._files.append((handle, columns))
        return len(self._files) - 1

    def drop_last_block(self) -> None:
        """Forget a block whose sweep is to be made again."""
        handle, _ = self._files.pop()
        os.close(handle)
        (self.folder / f"block-{len(self._files):02d}").unlink()

    def write(self, block: int, start: int, values: np.ndarray) -> None:
        """Write lines start … of a block."""
        handle, columns = self._files[block]
        data = np.ascontiguousarray(values, self.dtype).data.cast("B")
        offset = start * columns * self.dtype.itemsize
        while data:
            done = os.pwrite(handle, data, offset)
            data, offset = data[done:], offset + done

    def read(self, start: int, stop: int, blocks: int | None = None) -> np.ndarray:
        """Read lines start … stop of the first `blocks` blocks (all by default), shape (lines, columns)."""
        chosen = self._files[:blocks]
        out = np.empty((stop - start, sum(columns for _, columns in chosen)), self.dtype)
        first = 0
        for handle, columns in chosen:
            part = np.empty((stop - start, columns), self.dtype)
            view = part.data.cast("B")
            offset = start * columns * self.dtype.itemsize
            while view:
                done = os.preadv(handle, [view], offset)
                if done == 0:
                    raise OSError(f"scratch file in {self.folder} ended early: something else has changed it")
                view, offset = view[done:], offset + done
            out[:, first : first + columns] = part
            first += columns
        return out

    def close(self) -> None:
        """Delete the files."""
        for handle, _ in self._files:
            with contextlib.suppress(OSError):
                os.close(handle)
        self._files = []
        shutil.rmtree(self.folder, ignore_errors=True)

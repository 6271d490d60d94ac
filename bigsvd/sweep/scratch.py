"""The tall products Y = A·B on disk: blocks written once, and the map from what is stored to the present basis."""

from __future__ import annotations

import contextlib
import os
import shutil
import tempfile
from pathlib import Path

import numpy as np

# Random bytes behind the lines of every block.
MARK_BYTES = 16


class Scratch:
    """Columns of Y, one file per block, read and written by ranges of lines from several threads.

    Parameters
    ----------
    folder : Path
        Where a private folder is made; removed by `close`.
    own : bool
        `folder` is already ours alone: what an earlier process wrote there is used again, and the caller removes it.
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

    def __init__(self, folder: Path, lines: int, dtype: np.dtype, *, own: bool = False) -> None:
        self._own = own
        self.folder = folder if own else Path(tempfile.mkdtemp(prefix=".bigsvd-scratch-", dir=folder))
        self.lines = lines
        self.dtype = np.dtype(dtype)
        self.map = np.zeros((0, 0), self.dtype)
        self._files: list[tuple[int, int]] = []
        self._made = 0
        self._marks: list[bytes] = []

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
        flags = os.O_RDWR | os.O_CREAT | os.O_CLOEXEC | os.O_NOFOLLOW | (0 if self._own else os.O_EXCL)
        # Names are not used again: a run that goes on finds under each what that very sweep wrote.
        handle = os.open(self._path(self._made), flags, 0o600)
        self._made += 1
        size = self.lines * columns * self.dtype.itemsize
        if os.fstat(handle).st_size == size + MARK_BYTES:
            mark = os.pread(handle, MARK_BYTES, size)
        else:
            mark = os.urandom(MARK_BYTES)
            _empty(handle, size, mark)
        self._marks.append(mark)
        self._files.append((handle, columns))
        return len(self._files) - 1

    @property
    def last_mark(self) -> str:
        """What tells the block made last from others that had its name; sums kept elsewhere belong to one of them."""
        return self._marks[-1].hex() if self._marks else ""

    def drop_last_block(self) -> None:
        """Forget a block whose sweep is to be made again, and free its disk.

        Its name and mark stay, so that a run that goes on need not read that sweep again to drop it.
        """
        handle, columns = self._files.pop()
        _empty(handle, self.lines * columns * self.dtype.itemsize, self._marks.pop())
        os.close(handle)

    def leave_last_block(self) -> None:
        """Forget a block whose sweep was cut, but keep its file for the run that goes on."""
        handle, _ = self._files.pop()
        self._marks.pop()
        os.close(handle)

    def flush(self) -> None:
        """Return when what was written is on the device."""
        for handle, _ in self._files:
            os.fdatasync(handle)

    def write(self, block: int, start: int, values: np.ndarray) -> None:
        """Write lines start … of a block."""
        handle, columns = self._files[block]
        data = np.ascontiguousarray(values, self.dtype).data.cast("B")
        offset = start * columns * self.dtype.itemsize
        while data:
            try:
                done = os.pwrite(handle, data, offset)
            except OSError as error:
                raise OSError(error.errno, error.strerror, str(self.folder)) from error
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

    def _path(self, number: int) -> Path:
        """File of the block that was made as that number."""
        return self.folder / f"block-{number:02d}"

    def close(self) -> None:
        """Close the files, and delete them unless the folder is the caller's."""
        for handle, _ in self._files:
            with contextlib.suppress(OSError):
                os.close(handle)
        self._files = []
        if not self._own:
            shutil.rmtree(self.folder, ignore_errors=True)


def _empty(handle: int, size: int, mark: bytes) -> None:
    """Make a block of zeros, which take no room on most devices; its mark comes last."""
    os.ftruncate(handle, 0)
    os.pwrite(handle, mark, size)

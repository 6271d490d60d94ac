"""Buffers that threads decode with: made once, lent to one thread at a time, and used again for every chunk."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from contextlib import contextmanager

import numpy as np


class Workspace:
    """The buffers of one thread; each grows to the largest size that was asked of it."""

    def __init__(self) -> None:
        self._buffers: dict[int, np.ndarray] = {}

    def buffer(self, number: int, size: int) -> np.ndarray:
        """Buffer of a number, of at least so many bytes; holds whatever was in it."""
        found = self._buffers.get(number)
        if found is None or found.size < size:
            # The old one goes first, so that both are never held.
            self._buffers.pop(number, None)
            found = None
            found = self._buffers[number] = np.empty(size, np.uint8)
        return found


class Workspaces:
    """As many workspaces as threads have read at once."""

    def __init__(self) -> None:
        self._idle: deque[Workspace] = deque()

    @contextmanager
    def lent(self) -> Iterator[Workspace]:
        """Lend one for the length of a read."""
        try:
            workspace = self._idle.pop()
        except IndexError:
            workspace = Workspace()
        try:
            yield workspace
        finally:
            self._idle.append(workspace)

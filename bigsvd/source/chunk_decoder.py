"""From the stored bytes of a chunk to entries in a panel, by whatever chain of filters or codecs."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Protocol

import numpy as np

from bigsvd.source.codecs import Stretch
from bigsvd.source.positional import fill_from, read_box
from bigsvd.source.rectangle import as_matrix
from bigsvd.source.unshuffle import unshuffle
from bigsvd.source.workspace import Workspace

# Stored bytes before which a chunk may begin, so that entries in a buffer stay aligned.
_ALIGNED = 64
_STORED, _FIRST, _SECOND = 0, 1, 2


class ChunkError(Exception):
    """A chunk that does not decode: where it stands in the grid, and lines that say what was found and expected."""

    def __init__(self, coordinates: tuple[int, ...], *evidence: str) -> None:
        super().__init__(*evidence)
        self.coordinates = coordinates
        self.evidence = evidence


class Stage(Protocol):
    """One step that the writer made, and how it is undone."""

    def undo(self, held: Stretch, free: Stretch) -> Stretch:
        """Undo it from one stretch of bytes into another, or in place; return where the bytes are."""
        ...

    def room(self, decoded: int) -> int:
        """Free bytes that it wants before what it is given, for a chunk of so many bytes."""
        ...

    def shuffles(self, item: int) -> bool:
        """Whether it is the byte shuffle of entries of this size."""
        ...


def most_stored(decoded: int) -> int:
    """Bytes beyond which no chain of filters makes a chunk grow.

    Incompressible bytes grow by less than 1 %, with frames and tables beside them, but by 7 of 8 in bitshuffle's
    smallest blocks.
    """
    return 2 * decoded + 2**16


def decode_bytes(decoded: int) -> int:
    """Most bytes held beside the panel to decode chunks of so many bytes.

    Stored bytes, the result of one stage, and for chains of several codecs, Blosc2 and SZIP a third buffer; and a
    constant for frames, bands and what codecs keep of their own, of which at most 1.6 MiB were measured (gzip, LZF and
    Zstandard in one chain, chunks of 16 MB).
    """
    return 3 * decoded + 3 * 2**20


class ChunkDecoder:
    """Undoes a chain and puts the wanted part of a chunk where it belongs.

    Parameters
    ----------
    stages : sequence of Stage
        In the order in which the writer applied them.
    dtype : numpy.dtype
        Type of the stored entries.
    chunk : tuple of int
        Shape of a whole chunk.
    column_major : bool
        Whether entries lie in Fortran order.
    """

    def __init__(
        self, stages: Sequence[Stage], dtype: np.dtype, chunk: tuple[int, ...], *, column_major: bool = False
    ) -> None:
        self._stages = tuple(stages)
        self._dtype = dtype
        self._chunk = chunk
        self._column_major = column_major
        self.bytes = math.prod(chunk) * dtype.itemsize
        self.most_stored = most_stored(self.bytes)
        wanted = max((stage.room(self.bytes) for stage in self._stages), default=0)
        self._room = -(-wanted // _ALIGNED) * _ALIGNED

    def read(
        self, descriptor: int, offset: int, size: int, part: tuple[slice, ...], out: np.ndarray, workspace: Workspace,
        skipped: int = 0,
    ) -> None:  # fmt: skip
        """Read a chunk of so many stored bytes from a file, and decode it; otherwise as `decode`."""
        every = (1 << len(self._stages)) - 1
        if skipped & every == every and not self._column_major:
            # Nothing was done to its bytes: the chunk is a small contiguous array, of which a part is read.
            if size != self.bytes:
                raise ValueError(f"{size:,} bytes are stored as they are, a chunk has {self.bytes:,}")
            box = tuple((along.start, along.stop) for along in part)
            read_box(descriptor, offset, self._chunk, self._dtype, box, out)
            return
        held = self.place_for(size, workspace)
        fill_from(descriptor, offset, held.bytes.data)
        self.decode(held, part, out, workspace, skipped)

    def place_for(self, size: int, workspace: Workspace) -> Stretch:
        """Where the stored bytes of a chunk are to be read to."""
        if size > self.most_stored:
            raise ValueError(f"{size:,} bytes are stored; no filter makes so many of {self.bytes:,}")
        return Stretch(workspace.buffer(_STORED, self._room + size), self._room, self._room + size)

    def decode(
        self, held: Stretch, part: tuple[slice, ...], out: np.ndarray, workspace: Workspace, skipped: int = 0
    ) -> None:
        """Decode a chunk.

        Parameters
        ----------
        held : Stretch
            Stored bytes, from `place_for`; may be written over.
        part : tuple of slice
            What is wanted of the chunk, along each axis.
        out : ndarray
            Native type, shape of that part; any strides.
        workspace : Workspace
            Of the calling thread.
        skipped : int
            Bit i is set where the writer did not apply stage i.

        Raises
        ------
        ValueError, or what a codec raises
            If the bytes do not decode to exactly one chunk.
        """
        item = self._dtype.itemsize
        todo = [stage for number, stage in enumerate(self._stages) if not skipped >> number & 1]
        shuffled = bool(todo) and item > 1 and not self._column_major and todo[0].shuffles(item)
        # Where the part is no rectangle, entries are brought together in a buffer before they are put into place.
        flat = as_matrix(self._chunk, part, out) if shuffled else None
        if flat is not None:
            todo.pop(0)
        straight = None if flat is not None else self._straight(out)
        while todo:
            stage = todo.pop()
            if not todo and straight is not None:
                free = Stretch(straight, 0, self.bytes)
            else:
                free = self._free(held, workspace, self.bytes if not todo else self.most_stored)
            held = stage.undo(held, free)
        if held.size != self.bytes:
            raise ValueError(f"it decodes to {held.size:,} bytes, a chunk has {self.bytes:,}")
        if held.buffer is straight:
            return
        if flat is not None:
            unshuffle(held.bytes, self._dtype, *flat, workspace)
            return
        order = self._chunk[::-1] if self._column_major else self._chunk
        entries = held.bytes.view(self._dtype).reshape(order)
        out[...] = (entries.T if self._column_major else entries)[part]

    def _straight(self, out: np.ndarray) -> np.ndarray | None:
        """The panel itself as bytes, where a whole chunk lies in it in one piece and as it is stored."""
        fits = out.shape == self._chunk and out.flags.c_contiguous and self._dtype.isnative
        return out.reshape(-1).view(np.uint8) if fits and not self._column_major else None

    def _free(self, held: Stretch, workspace: Workspace, size: int) -> Stretch:
        """A free stretch in a buffer other than the one that holds the bytes now."""
        number = _SECOND if held.buffer is workspace.buffer(_FIRST, 0) else _FIRST
        return Stretch(workspace.buffer(number, self._room + size), self._room, self._room + size)

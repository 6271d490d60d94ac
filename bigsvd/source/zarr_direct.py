"""Chunks of a Zarr array taken from their files and decoded by the calling thread, without zarr-python's pipeline.

zarr-python decodes through an event loop and a pool of threads of its own, into buffers of its own. Where all codecs
are known (`zarr_codecs`), a chunk file, or an inner chunk of a shard, is read and decoded straight into the panel.
"""

from __future__ import annotations

import contextlib
import os
import stat
from collections.abc import Callable
from functools import partial
from typing import Protocol

import numpy as np

from bigsvd.errors import BigsvdError
from bigsvd.source.chunk_decoder import ChunkDecoder, ChunkError
from bigsvd.source.codecs import FramingUnknownError
from bigsvd.source.persist import persist
from bigsvd.source.positional import announce
from bigsvd.source.rectangle import Box, clip_box, inside, touched
from bigsvd.source.workspace import Workspace, Workspaces
from bigsvd.source.zarr_metadata import ZarrMetadata

Fill = Callable[[Box, np.ndarray], None]


class ChunkAbsentError(ChunkError):
    """A chunk that was never written, or is gone."""


class Accepted(Protocol):
    """Which chunks may be absent."""

    def __call__(self, chunk: tuple[int, ...], inner: tuple[int, ...] | None = None) -> np.generic | None:
        """Value of an absent chunk, or of one inside a shard by its place there; None where it must be there."""
        ...


def _none_accepted(chunk: tuple[int, ...], inner: tuple[int, ...] | None = None) -> np.generic | None:
    return None


class ZarrFiles:
    """Reads boxes of an array whose chunks are files in a directory.

    Parameters
    ----------
    opened : callable
        Opens the file of a chunk, by its coordinates, and returns its descriptor.
    metadata : ZarrMetadata
        With a known `layout`.
    library : callable
        Reads the chunks whose framing turns out to be another than the usual one.
    accepted : Accepted
        Tells which chunks may be absent, and what they are read as.
    """

    def __init__(
        self,
        opened: Callable[[tuple[int, ...]], int],
        metadata: ZarrMetadata,
        library: Fill,
        accepted: Accepted = _none_accepted,
    ) -> None:
        layout = metadata.layout
        if layout is None:
            raise ValueError("codecs that are not known here")
        self._open = opened
        self._accepted = accepted
        self._library = library
        self._chunks = metadata.chunks
        self._index = metadata.index
        self._inner = metadata.inner or metadata.chunks
        self._decoder = ChunkDecoder(layout.stages, layout.dtype, self._inner, column_major=layout.column_major)
        self._workspaces = Workspaces()

    def fill(self, box: Box, out: np.ndarray) -> None:
        """Decode all chunks that a box touches into a buffer."""
        with self._workspaces.lent() as workspace:
            for place in touched(box, self._chunks):
                part = out[inside(place, self._chunks, box)[1]]
                clipped = clip_box(place, self._chunks, box)
                try:
                    # A handle that a server forgot is opened anew with the chunk.
                    persist(partial(self._read, place, clipped, part, workspace))
                except FramingUnknownError:
                    self._library(clipped, part)
                except (ChunkError, BigsvdError, MemoryError):
                    raise
                except Exception as error:  # every codec raises what it likes
                    raise ChunkError(place, *self._expected(), f"decoding says: {error}") from error

    def announce(self, box: Box) -> None:
        """Have the system fetch the files that a box touches; parts of shards are found while they are read."""
        if self._index is not None:
            return
        for chunk in touched(box, self._chunks):
            # Whoever reads it says what is wrong with it.
            with contextlib.suppress(OSError):
                descriptor = self._open(chunk)
                try:
                    announce(descriptor, 0, os.fstat(descriptor).st_size)
                finally:
                    os.close(descriptor)

    def _read(self, place: tuple[int, ...], box: Box, out: np.ndarray, workspace: Workspace) -> None:
        try:
            descriptor = self._open(place)
        except (FileNotFoundError, NotADirectoryError):
            value = self._accepted(place)
            if value is None:
                raise ChunkAbsentError(place) from None
            out[...] = value
            return
        try:
            found = os.fstat(descriptor)
            # What stands there in its place was not left out on purpose.
            if not stat.S_ISREG(found.st_mode):
                raise ChunkAbsentError(place, "what stands in its place is no file")
            if not found.st_size:
                raise ChunkError(place, *self._expected(), "its file is empty: a copy that was never finished")
            if self._index is None:
                self._decode(descriptor, 0, found.st_size, place, box, out, workspace)
            else:
                self._read_shard(descriptor, found.st_size, place, box, out, workspace)
        finally:
            os.close(descriptor)

    def _read_shard(
        self, descriptor: int, size: int, shard: tuple[int, ...], box: Box, out: np.ndarray, workspace: Workspace
    ) -> None:
        """Decode the inner chunks that are wanted, each by itself."""
        assert self._index is not None
        table = self._index.read(descriptor, size)
        first = [at * outer // part for at, outer, part in zip(shard, self._chunks, self._inner, strict=True)]
        for chunk in touched(box, self._inner):
            inner = tuple(at - start for at, start in zip(chunk, first, strict=True))
            place = self._index.place(table, inner, size)
            clipped = clip_box(chunk, self._inner, box)
            part = out[inside(chunk, self._inner, box)[1]]
            if place is None:
                value = self._accepted(shard, inner)
                if value is None:
                    raise ChunkAbsentError(shard, f"the inner chunk {', '.join(map(str, inner))} of its shard")
                part[...] = value
                continue
            try:
                self._decode(descriptor, *place, chunk, clipped, part, workspace)
            except (FramingUnknownError, MemoryError):
                raise
            except Exception as error:  # every codec raises what it likes
                where = f"inner chunk ({', '.join(map(str, inner))}), {place[1]:,} bytes at byte {place[0]:,}"
                raise ChunkError(shard, where, *self._expected(), f"decoding says: {error}") from error

    def _decode(
        self, descriptor: int, offset: int, size: int, chunk: tuple[int, ...], box: Box, out: np.ndarray,
        workspace: Workspace,
    ) -> None:  # fmt: skip
        part, _ = inside(chunk, self._inner, box)
        self._decoder.read(descriptor, offset, size, part, out, workspace)

    def _expected(self) -> tuple[str, ...]:
        return (f"a chunk has {self._decoder.bytes:,} bytes decoded",)

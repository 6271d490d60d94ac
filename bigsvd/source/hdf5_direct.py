"""Entries of an HDF5 dataset taken from the file without the library's lock: decoding then runs in every thread.

h5py lets one thread at a time into the HDF5 library, and that decodes inside it. Where the type is plain and every
filter is known (`hdf5_filters`), bytes are read by position and decoded by the calling thread. A test holds the
result equal to h5py's, byte for byte.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np

from bigsvd.source.chunk_decoder import ChunkDecoder, ChunkError
from bigsvd.source.codecs import FramingUnknownError
from bigsvd.source.hdf5_chunks import MOST_CHUNKS, ChunkTable
from bigsvd.source.hdf5_filters import filters_of
from bigsvd.source.positional import announce, read_box
from bigsvd.source.rectangle import Box, clip_box, grid_shape, inside, touched
from bigsvd.source.workspace import Workspace, Workspaces

Fill = Callable[[Box, np.ndarray], None]


@dataclass(frozen=True)
class DirectReader:
    """The way past the library.

    Attributes
    ----------
    fill : callable
        Reads a box into a buffer.
    announce : callable
        Has the system fetch a box that will be read soon.
    """

    fill: Fill
    announce: Callable[[Box], None]


def direct_reader(dataset: Any, descriptor: int, library: Fill, fill: np.generic | None = None) -> DirectReader | None:
    """Choose the way past the library; None where type, layout or filters do not allow it.

    Parameters
    ----------
    dataset : h5py.Dataset
        Of two or more axes, of numbers.
    descriptor : int
        The same file, open for reading.
    library : callable
        Reads the chunks whose framing turns out to be another than the usual one.
    fill : scalar, optional
        What chunks that were never written are read as; without it they are an error.
    """
    import h5py

    stored = plain_type(dataset)
    if stored is None:
        return None
    if dataset.chunks is None:
        plist = dataset.id.get_create_plist()
        offset = dataset.id.get_offset()
        if plist.get_layout() != h5py.h5d.CONTIGUOUS or plist.get_external_count() or offset is None:
            return None
        shape = tuple(dataset.shape)
        return DirectReader(
            lambda box, out: read_box(descriptor, offset, shape, stored, box, out),
            partial(_announce_box, descriptor, offset, shape, stored.itemsize),
        )
    if not decodes_directly(dataset) or math.prod(grid_shape(dataset.shape, dataset.chunks)) > MOST_CHUNKS:
        return None
    reader = _ChunkReader(dataset, stored, descriptor, library, fill)
    return DirectReader(reader.fill, reader.announce) if reader.agrees_with(dataset) else None


def _announce_box(descriptor: int, offset: int, shape: tuple[int, ...], item: int, box: Box) -> None:
    """Announce a box that lies in one piece; parts of others lie between entries that are not wanted."""
    parted = max((axis for axis, span in enumerate(box) if span != (0, shape[axis])), default=0)
    if all(stop - start == 1 for start, stop in box[:parted]):
        start = sum(span[0] * math.prod(shape[axis + 1 :]) for axis, span in enumerate(box))
        size = (box[parted][1] - box[parted][0]) * math.prod(shape[parted + 1 :])
        announce(descriptor, offset + start * item, size * item)


def decodes_directly(dataset: Any) -> bool:
    """Whether the chunks of a dataset can be decoded without the library, which then needs no plugin."""
    if dataset.chunks is None or plain_type(dataset) is None:
        return False
    return all(step.known for step in filters_of(dataset))


def plain_type(dataset: Any) -> np.dtype | None:
    """Type of the entries as they lie in the file; None where the library's conversion is needed.

    Truth values and other enumerations are integers under names. Types with padding bits are left to the library.
    """
    import h5py

    stored, kind = dataset.dtype, dataset.id.get_type()
    if stored.names is not None or stored.kind not in "biufc" or stored.itemsize not in (1, 2, 4, 8, 16):
        return None
    if isinstance(kind, h5py.h5t.TypeEnumID):
        kind = kind.get_super()
    bare = np.dtype("i1" if stored.kind == "b" else stored.str)
    if not kind.equal(h5py.h5t.py_create(bare)):
        return None
    return np.dtype(stored.str)


class _ChunkReader:
    """Reads and decodes whole chunks; threads share the table of their places, and borrow buffers."""

    def __init__(self, dataset: Any, stored: np.dtype, descriptor: int, library: Fill, fill: np.generic | None) -> None:
        self._absent_value = fill
        self._descriptor = descriptor
        self._library = library
        self._filters = filters_of(dataset)
        self._stored = stored
        self._chunks: tuple[int, ...] = dataset.chunks
        self._table = ChunkTable.of(dataset)
        self._decoder = ChunkDecoder(self._filters, stored, self._chunks)
        self._workspaces = Workspaces()

    def agrees_with(self, dataset: Any) -> bool:
        """Compare one chunk with what the library finds: some of its versions forget the user block."""
        places = np.argwhere(self._table.offset >= 0)
        if not len(places):
            return True
        place = tuple(int(part) for part in places[0])
        start = tuple(at * chunk for at, chunk in zip(place, self._chunks, strict=True))
        _, raw = dataset.id.read_direct_chunk(start)
        offset, size, _ = self._table.at(place)
        return len(raw) == size and os.pread(self._descriptor, size, offset) == raw

    def announce(self, box: Box) -> None:
        """Have the system fetch the chunks that a box touches."""
        for place in touched(box, self._chunks):
            offset, size, _ = self._table.at(place)
            if offset >= 0:
                announce(self._descriptor, offset, size)

    def fill(self, box: Box, out: np.ndarray) -> None:
        """Decode all chunks that a box touches into a buffer."""
        with self._workspaces.lent() as workspace:
            for place in touched(box, self._chunks):
                inner, outer = inside(place, self._chunks, box)
                part = out[outer]
                try:
                    self._decode(place, inner, part, workspace)
                except FramingUnknownError as framing:
                    self._by_library(place, clip_box(place, self._chunks, box), part, framing)
                except (ChunkError, MemoryError):
                    raise
                except Exception as error:  # every codec raises what it likes
                    raise self._fault(place, error) from error

    def _decode(self, place: tuple[int, ...], inner: tuple[slice, ...], out: np.ndarray, workspace: Workspace) -> None:
        offset, size, skipped = self._table.at(place)
        if offset < 0:
            if self._absent_value is None:
                raise ChunkError(place, "it was never written")
            out[...] = self._absent_value
            return
        self._decoder.read(self._descriptor, offset, size, inner, out, workspace, skipped)

    def _by_library(self, place: tuple[int, ...], box: Box, out: np.ndarray, framing: FramingUnknownError) -> None:
        try:
            self._library(box, out)
        except Exception as error:  # the library and its plugins raise what they like
            raise self._fault(place, f"{framing}; the library says: {error}") from error

    def _fault(self, place: tuple[int, ...], said: object) -> ChunkError:
        offset, size, skipped = self._table.at(place)
        names = [step.name for number, step in enumerate(self._filters) if not skipped >> number & 1]
        return ChunkError(
            place,
            f"{size:,} bytes stored at byte {offset:,}, {' + '.join(names) or 'no filter'}; a chunk has"
            f" {self._decoder.bytes:,} bytes decoded",
            f"decoding says: {said}",
        )

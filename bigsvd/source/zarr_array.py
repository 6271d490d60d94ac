"""A dense Zarr array of two or more axes, format 2 or 3, sharded or not, as a source."""

from __future__ import annotations

import math
import os
import threading
from dataclasses import replace
from typing import Any

import numpy as np

from bigsvd.errors import BigsvdError, DamagedSourceError, NoMatrixError, SourceError, UnsupportedMatrixError
from bigsvd.source.access import STRICT, Access
from bigsvd.source.chunk_decoder import ChunkError, decode_bytes, most_stored
from bigsvd.source.complete import absent_error, settle_absent
from bigsvd.source.entries import decoded_type, type_caution
from bigsvd.source.fill import zarr_fill
from bigsvd.source.packing import packing_cautions
from bigsvd.source.persist import persist, refusal, unreadable
from bigsvd.source.rectangle import (
    Box,
    Span,
    clip_box,
    grid_shape,
    require_box,
    require_rectangle,
    require_sizes,
    show_chunk,
    show_place,
    sides_of,
    touched,
)
from bigsvd.source.spec import MatrixSpec
from bigsvd.source.stamp import FileStamp, digest
from bigsvd.source.zarr_complete import AbsentChunks, absent_keys, count_absent_chunks, other_names
from bigsvd.source.zarr_direct import ChunkAbsentError, ZarrFiles
from bigsvd.source.zarr_metadata import ZarrMetadata, read_metadata
from bigsvd.source.zarr_read import Reader, open_zarr, python_reader
from bigsvd.source.zarr_store import DirectoryKeys, KeyStore, open_keys
from bigsvd.source.zarr_walk import describe_zarr, stored_bytes
from bigsvd.units import shell_word, show_shape

MEANT = "write the array again with write_empty_chunks=True."
_STATE = ("path", "inside", "access", "one_row", "spec", "axes", "stamps", "metadata", "_absent")


class ZarrSource:
    """Reads one array by its address; opened once per process, at the first use.

    Parameters
    ----------
    path : str
        Absolute path of a store: a directory or a zip file.
    inside : str
        Path of an array of numbers inside it, of two or more axes; empty where the store is that array.
    access : Access
        Whether chunks that were never written are filled, and links followed out of the store.
    one_row : bool
        Whether the array has one axis and is read as a matrix of one row: a part of a sparse matrix.
    """

    def __init__(self, path: str, inside: str, access: Access = STRICT, *, one_row: bool = False) -> None:
        self.path = path
        self.inside = inside
        self.access = access
        self.one_row = one_row
        self._absent: AbsentChunks | None = None
        self._forget()
        self.keys: KeyStore = open_keys(path, follow=access.follow_links)
        self.spec = self._describe()
        self._opened()

    def _forget(self) -> None:
        self._lock = threading.Lock()
        self._reader: Reader | None = None
        self._library: Reader | None = None
        self._files: ZarrFiles | None = None
        self._process = 0

    def __getstate__(self) -> dict[str, Any]:
        return {name: getattr(self, name) for name in _STATE}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._forget()
        self.keys = open_keys(self.path, follow=self.access.follow_links)

    def __repr__(self) -> str:
        return f"ZarrSource({self.path!r}, {self.inside!r})"

    def _describe(self) -> MatrixSpec:
        metadata = read_metadata(self.keys, self.inside)
        if metadata is None:
            raise NoMatrixError(f"{self.path} holds no array under {self.inside!r}", remedy="Check the path.")
        if self.one_row:
            metadata = metadata.as_row()
        follow = self.access.follow_links
        said = describe_zarr(metadata, self.inside, self.keys, stored_bytes(self.keys, self.inside), follow=follow)
        dtype = decoded_type(metadata.dtype) if metadata.dtype is not None else None
        name = f"{self.path}:{self.inside}" if self.inside else self.path
        if dtype is None or metadata.dtype is None or not said.usable:
            raise UnsupportedMatrixError(
                f"{name} is no matrix that can be decomposed: {said.reason}",
                evidence=[f"shape {show_shape(said.shape)}, {said.dtype}, {said.encoding}"],
                remedy=f"See what else the store holds with: bigsvd inspect {shell_word(self.path)}",
            )
        shape = metadata.shape
        require_sizes(shape, metadata.chunks, metadata.dtype.itemsize, name)
        self.metadata: ZarrMetadata = metadata
        unit = tuple(min(chunk, side) for chunk, side in zip(self._decoded_chunk, shape, strict=True))
        self.axes = replace(said.axes, chunks=unit)
        marks = [self.path] if os.path.isfile(self.path) else self._mark_files()
        self.stamps = tuple(FileStamp.of(mark) for mark in marks)
        return MatrixSpec(
            name=name,
            shape=(shape[0], math.prod(shape[1:])),
            dtype=dtype,
            chunks=(unit[0], math.prod(unit[1:])),
            storage="zarr",
            encoding=said.encoding,
            decode_bytes=self._decode_bytes(metadata.dtype.itemsize),
            stored_bytes=said.stored_bytes,
            samples_hint=said.samples_hint,
            hint_reason=said.hint_reason,
            fingerprint=digest(self.stamps, metadata, said.stored_bytes, self._sampled_chunks()),
            cautions=type_caution(metadata.dtype) + packing_cautions(said.packing) + said.remarks,
            codecs=self._codecs(),
            packing=said.packing,
            layout=said.layout,
            marker=said.marker,
            row_names=said.row_names,
            column_names=said.column_names,
        )

    @property
    def _direct(self) -> bool:
        """Whether chunks are decoded in the calling thread, all codecs being known."""
        return self.metadata.layout is not None and isinstance(self.keys, DirectoryKeys)

    def _codecs(self) -> tuple[str, ...]:
        """What is undone to decode a chunk; ``library`` where zarr-python does it."""
        layout = self.metadata.layout
        return tuple(stage.name for stage in layout.stages) if layout is not None and self._direct else ("library",)

    @property
    def _decoded_chunk(self) -> tuple[int, ...]:
        """What is read by itself: an inner chunk of a shard, which zarr-python is given whole."""
        return (self._direct and self.metadata.inner) or self.metadata.chunks

    def _decode_bytes(self, item: int) -> int:
        """Most bytes that a thread holds beside its panel."""
        index = self.metadata.index
        chunk = math.prod(self._decoded_chunk) * item
        return decode_bytes(chunk) + (2 * index.bytes if index is not None else 0)

    def _mark_files(self) -> list[str]:
        folder = os.path.join(self.path, self.inside)
        marks = (os.path.join(folder, name) for name in ("zarr.json", ".zarray"))
        return [mark for mark in marks if os.path.exists(mark)]

    def _sampled_chunks(self) -> list[FileStamp]:
        """Stamps of up to 64 chunk files spread over the array: enough to notice a store that was written again."""
        if os.path.isfile(self.path):
            return []
        grid = grid_shape(self.metadata.shape, self.metadata.chunks)
        numbers = sorted(set(np.linspace(0, math.prod(grid) - 1, 64, dtype=np.int64).tolist()))
        places = (tuple(map(int, np.unravel_index(number, grid))) for number in numbers)
        files = [os.path.join(self.path, self._key(place)) for place in places]
        return [FileStamp.of(file) for file in files if os.path.isfile(file)]

    @property
    def _chunks(self) -> tuple[int, ...]:
        """Unit of a stored key, which may reach past the array."""
        return self.metadata.chunks

    def _key(self, coordinates: tuple[int, ...]) -> str:
        key = self.metadata.key(coordinates)
        return f"{self.inside}/{key}" if self.inside else key

    def close(self) -> None:
        """Release the store. Reading again opens it again."""
        with self._lock:
            self._reader = self._library = None

    def _opened(self) -> Reader:
        with self._lock:
            if self._reader is None or self._process != os.getpid():
                self._require_unchanged()
                self._library = None
                self._reader = self._open_reader()
                self._process = os.getpid()
            return self._reader

    def _open_reader(self) -> Reader:
        """Choose the reader: chunk by chunk in the calling thread where all codecs are known, else zarr-python."""
        if self._direct:
            assert isinstance(self.keys, DirectoryKeys)
            keys = self.keys
            self._files = ZarrFiles(
                lambda chunk: keys.open(self._key(chunk)), self.metadata, self._by_library, self._accepted
            )
            return self._files.fill
        self._open_library()
        return self._by_library

    def _open_library(self) -> Reader:
        try:
            array = open_zarr(self.keys, self.inside, self.metadata.zarr_format)
            # numcodecs looks its codecs up at the first use; an unknown one must show before the run.
            for codec in getattr(array.metadata, "codecs", ()):
                getattr(codec, "_codec", None)
        except Exception as error:  # codecs and data types come from other packages and raise what they like
            raise self._unknown(error) from error
        self._library = python_reader(array)
        return self._library

    def _accepted(self, chunk: tuple[int, ...], inner: tuple[int, ...] | None = None) -> np.generic | None:
        """Fill value of a chunk, or of one inside a shard, that was absent when the run began and may be; else None."""
        absent = self._absent
        if absent is None or not (chunk in absent if inner is None else absent.lacks(chunk, inner)):
            return None
        return self._fill_value()

    def _by_library(self, box: Box, out: np.ndarray) -> None:
        """Read through zarr-python, which would answer an absent chunk with the fill value."""
        assert self.metadata.dtype is not None
        # It reads a value whole, however long; shards hold an index beside their chunks.
        most = 2 * most_stored(math.prod(self._chunks) * self.metadata.dtype.itemsize) + 2**24
        for coordinates in touched(box, self._chunks):
            size = self.keys.size(self._key(coordinates))
            if not size and self._accepted(coordinates) is None:
                raise ChunkAbsentError(coordinates)
            if size and size > most:
                raise ChunkError(coordinates, f"no codec makes so many of a chunk; {most:,} are the most that is read")
        (self._library or self._open_library())(box, out)

    def _unknown(self, error: Exception) -> UnsupportedMatrixError:
        return UnsupportedMatrixError(
            f"{self.spec.name} is written in a way that is not known here",
            evidence=[self.spec.encoding, f"zarr says: {error}"],
            remedy="Install the package that brings this codec, or write the array again with zstd.",
        )

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Read the half-open rectangle rows × columns into `out`; see `Source.read`."""
        require_rectangle(self.spec, rows, columns, out)
        self.read_box((rows, columns), out)

    def read_box(self, box: Box, out: np.ndarray) -> None:
        """Read a half-open box into `out`; see `ArraySource.read_box`."""
        require_box(self.axes.shape, self.spec.dtype, box, out)
        if out.size == 0:
            return
        reader = self._opened()
        try:
            persist(lambda: reader(box, out))
        except Exception as error:  # codecs come from other packages and raise what they like
            self._require_unchanged()
            if isinstance(error, (BigsvdError, MemoryError)):
                raise
            kept_back = refusal(error)
            if kept_back is not None:
                raise self._unreadable(box, error, kept_back) from error
            raise self._damage(reader, box, error) from error
        self._require_unchanged()

    def announce(self, rows: Span, columns: Span) -> None:
        """Have the system fetch a rectangle that will be read soon; where zarr-python reads, nothing is done."""
        self.announce_box((rows, columns))

    def announce_box(self, box: Box) -> None:
        """Have the system fetch a box that will be read soon; where zarr-python reads, nothing is done."""
        self._opened()
        if self._files is not None:
            self._files.announce(box)

    def _require_unchanged(self) -> None:
        for stamp in self.stamps:
            stamp.require_unchanged()

    def _unreadable(self, box: Box, error: Exception, why: OSError) -> SourceError:
        place = [show_place(*box)]
        if isinstance(error, ChunkError):
            chunk = show_chunk(error.coordinates, self.axes.shape, self._chunks)
            place = [f"{chunk}; key {self._key(error.coordinates)}", *error.evidence]
        return unreadable(self.spec.name, place, why)

    def _damage(self, reader: Reader, box: Box, error: Exception) -> DamagedSourceError:
        """Name the first chunk of the box that is absent or does not decode, and say what is wrong with it."""
        found = error if isinstance(error, ChunkError) else self._search(reader, box, error)
        if found is None:
            evidence = [show_place(*box), f"zarr says: {error}"]
        else:
            key = self._key(found.coordinates)
            place = show_chunk(found.coordinates, self.axes.shape, self._chunks)
            if isinstance(found, ChunkAbsentError):
                absent = [f"{place}; key {key}", *found.evidence]
                return absent_error(self.spec, "a chunk is absent", absent, MEANT)
            evidence = [place, f"key {key}, {self.keys.size(key) or 0:,} bytes stored", *found.evidence]
        return DamagedSourceError(
            f"{self.spec.name} holds a chunk that does not decode",
            evidence=evidence,
            remedy="Copy that chunk again from the origin of the store, or write the array again.",
        )

    def _search(self, reader: Reader, box: Box, error: Exception) -> ChunkError | None:
        """Read chunk by chunk, since zarr-python does not tell which one it failed at."""
        chunks = self._chunks
        for place in touched(box, chunks):
            part = clip_box(place, chunks, box)
            try:
                reader(part, np.empty(sides_of(part), self.spec.dtype))
            except Exception as first:
                decoded = math.prod(chunks) * self.spec.dtype.itemsize
                return ChunkError(place, f"a chunk has {decoded:,} bytes decoded", f"zarr says: {first}")
        return None

    def require_complete(self) -> None:
        """Compare the stored keys with the grid; see `check_complete`."""
        self._require_unchanged()
        if self.spec.absent is not None:
            return
        absent = AbsentChunks(absent_keys(self.keys, self.inside, self.metadata))
        others = other_names(self.keys, self.inside) if absent.keys.all() else []
        if others:
            raise DamagedSourceError(
                f"{self.spec.name} is not complete: none of {absent.keys.size:,} chunks is stored under the key that"
                " the metadata give",
                evidence=[f"{self._key((0,) * len(self._chunks))} is wanted; there are {', '.join(others)}"],
                remedy="Correct the dimension separator in the metadata, or copy the store again.",
            )
        if self.metadata.inner is not None and self.metadata.index is None and not self.access.fills:
            raise UnsupportedMatrixError(
                f"{self.spec.name} keeps its chunks in shards of a kind that does not show which of them are absent",
                evidence=[self.spec.encoding],
                remedy="Write the array again with plain shards, or add --absent fill to take the fill value for any.",
            )
        count, total, places = count_absent_chunks(absent, self.keys, self._key, self.metadata)
        first = [f"{words}{show_chunk(place, self.axes.shape, self._chunks)}" for words, place in places]
        self.spec = settle_absent(self.spec, count, total, first, self.access, self._fill_value, MEANT)
        if count:
            self._absent = absent

    def _fill_value(self) -> np.generic:
        assert self.metadata.dtype is not None
        return zarr_fill(self.metadata.fill, self.metadata.dtype, self.spec.dtype)

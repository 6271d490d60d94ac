"""A dense HDF5 dataset of two or more axes as a source."""

from __future__ import annotations

import errno
import math
import os
import threading
from dataclasses import replace
from typing import Any

import numpy as np

from bigsvd.errors import BigsvdError, DamagedSourceError, SourceError, UnsupportedMatrixError
from bigsvd.source.access import STRICT, Access
from bigsvd.source.array_axes import ArrayAxes
from bigsvd.source.chunk_decoder import ChunkError, decode_bytes
from bigsvd.source.entries import decoded_type, pair_view, type_caution
from bigsvd.source.fill import FillError, hdf5_fill
from bigsvd.source.hdf5_complete import require_complete
from bigsvd.source.hdf5_dataset import describe, missing_filters
from bigsvd.source.hdf5_direct import DirectReader, Fill, decodes_directly, direct_reader, plain_type
from bigsvd.source.hdf5_file import library_errors_named, open_hdf5, register_plugins
from bigsvd.source.hdf5_filters import filters_of
from bigsvd.source.hdf5_links import other_files, require_inside
from bigsvd.source.home import Home
from bigsvd.source.one_row import OneRow
from bigsvd.source.packing import packing_cautions
from bigsvd.source.persist import persist, refusal, unreadable
from bigsvd.source.positional import Descriptor, reading_bytes
from bigsvd.source.rectangle import (
    BAND_BYTES,
    Box,
    Span,
    clip_box,
    fill_by_bands,
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
from bigsvd.units import shell_word, show_shape


class Hdf5Source:
    """Reads one dataset by its address; opened once per process, at the first use.

    Parameters
    ----------
    path : str
        Absolute path of the file.
    dataset : str
        Path of a dataset of numbers inside it, of two or more axes.
    access : Access
        Whether chunks that were never written are filled, and links followed out of the folder.
    one_row : bool
        Whether the dataset has one axis and is read as a matrix of one row: a part of a sparse matrix.
    """

    def __init__(self, path: str, dataset: str, access: Access = STRICT, *, one_row: bool = False) -> None:
        self.path = path
        self.dataset = dataset
        self.access = access
        self.one_row = one_row
        self._forget()
        self.stamps: tuple[FileStamp, ...] = (FileStamp.of(path),)
        with library_errors_named(f"{path}:{dataset}"), open_hdf5(path) as file:
            require_inside(file, dataset, Home(path, follow=access.follow_links))
            others = [os.path.abspath(file[dataset].file.filename), *other_files(file[dataset])]
            self.stamps += tuple(FileStamp.of(name) for name in others if name != path and os.path.exists(name))
            self.spec, self.axes = _spec(self._shown(file[dataset]), path, dataset, self.stamps, access)
        self._opened()

    def _forget(self) -> None:
        self._lock = threading.Lock()
        self._handles: tuple[Any, Descriptor, Any, Fill, DirectReader | None] | None = None
        self._inherited: object = None
        self._retired: list[tuple[Any, Descriptor, Any, Fill, DirectReader | None]] = []
        self._process = 0

    def __getstate__(self) -> dict[str, Any]:
        names = ("path", "dataset", "access", "one_row", "stamps", "spec", "axes")
        return {name: getattr(self, name) for name in names}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._forget()

    def __repr__(self) -> str:
        return f"Hdf5Source({self.path!r}, {self.dataset!r})"

    def _shown(self, dataset: Any) -> Any:
        """The dataset as the matrix that is read."""
        return OneRow(dataset) if self.one_row else dataset

    def _opened(self) -> tuple[Any, Fill]:
        """Return the open dataset and the way to read it.

        A handle that came through a fork is left alone, neither used nor closed, and another one opened.
        """
        with self._lock:
            if self._handles is None or self._process != os.getpid():
                self._require_unchanged()
                self._inherited = self._handles
                self._process = os.getpid()
                with library_errors_named(f"{self.path}:{self.dataset}"):
                    file = open_hdf5(self.path)
                    dataset = self._shown(open_dataset(file, self.dataset))
                    # Behind an external link it lies in another file.
                    descriptor = Descriptor(dataset.file.filename)
                    library = library_reader(dataset)
                    direct = direct_reader(dataset, descriptor.number, library, self._fill_value(dataset))
                    self._handles = file, descriptor, dataset, direct.fill if direct else library, direct
            return self._handles[2], self._handles[3]

    def _fill_value(self, dataset: Any) -> np.generic | None:
        """What chunks that were never written are read as, if they may be."""
        if not self.access.fills:
            return None
        try:
            return hdf5_fill(dataset, self.spec.dtype)
        except FillError:
            # It matters only where a chunk is absent, and then `require_complete` says so.
            return None

    def close(self) -> None:
        """Release the file. Reading again opens it again."""
        with self._lock:
            if self._handles is not None and self._process == os.getpid():
                for handles in (self._handles, *self._retired):
                    handles[0].close()
                    handles[1].close()
                self._handles = None
                self._retired.clear()

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Read the half-open rectangle rows × columns into `out`; see `Source.read`."""
        require_rectangle(self.spec, rows, columns, out)
        self.read_box((rows, columns), out)

    def read_box(self, box: Box, out: np.ndarray) -> None:
        """Read a half-open box into `out`; see `ArraySource.read_box`."""
        require_box(self.axes.shape, self.spec.dtype, box, out)
        if out.size == 0:
            return
        try:
            persist(lambda: self._opened()[1](box, out), self._open_anew)
        except Exception as error:  # filters come from other packages and raise what they like
            self._require_unchanged()
            if isinstance(error, (BigsvdError, MemoryError)):
                raise
            raise self._damage(box, error) from error
        # The library answers zeros where a file was cut short after it was opened.
        self._require_unchanged()

    def announce(self, rows: Span, columns: Span) -> None:
        """Have the system fetch a rectangle that will be read soon; where the library reads, nothing is done."""
        self.announce_box((rows, columns))

    def announce_box(self, box: Box) -> None:
        """Have the system fetch a box that will be read soon; where the library reads, nothing is done."""
        self._opened()
        direct = self._handles[4] if self._handles is not None else None
        if direct is not None:
            direct.announce(box)

    def _require_unchanged(self) -> None:
        for stamp in self.stamps:
            stamp.require_unchanged()

    def require_complete(self) -> None:
        """Look for parts that are absent; see `check_complete`."""
        self._require_unchanged()
        dataset, _ = self._opened()
        if self.spec.absent is not None:
            return
        with library_errors_named(self.spec.name):
            self.spec = require_complete(
                dataset, self.spec, Home(self.path, follow=self.access.follow_links), self.access
            )

    def _open_anew(self, error: OSError) -> None:
        """Leave a handle that the server forgot; it stays open, since other threads may be reading by its number."""
        if error.errno == errno.ESTALE:
            with self._lock:
                if self._handles is not None:
                    self._retired.append(self._handles)
                self._handles = None

    def _damage(self, box: Box, error: Exception) -> SourceError:
        """Name the first chunk of the box that does not decode, and say what is wrong with it."""
        place, kept_back = [show_place(*box)], refusal(error)
        if isinstance(error, ChunkError):
            place = [show_chunk(error.coordinates, self.axes.shape, self._unit), *error.evidence]
        if kept_back is not None:
            return unreadable(self.spec.name, place, kept_back)
        evidence = place if isinstance(error, ChunkError) else self._search(box, error)
        return DamagedSourceError(
            f"{self.spec.name} holds stored bytes that do not decode",
            evidence=evidence,
            remedy="Copy or download the file again, or write it again from its origin.",
        )

    @property
    def _unit(self) -> tuple[int, ...]:
        """Shape of a chunk, or of a row where there are none."""
        return self.axes.chunks or (1, *self.axes.shape[1:])

    def _search(self, box: Box, error: Exception) -> list[str]:
        """Read chunk by chunk, since the library does not tell which one it failed at."""
        chunks, (_, fill) = self._unit, self._opened()
        for place in touched(box, chunks) if self.axes.chunks and chunks[0] > 1 else ():
            part = clip_box(place, chunks, box)
            try:
                fill(part, np.empty(sides_of(part), self.spec.dtype))
            except Exception as first:
                return [
                    show_chunk(place, self.axes.shape, chunks),
                    f"a chunk has {math.prod(chunks) * self.spec.dtype.itemsize:,} bytes decoded",
                    f"the library says: {first}",
                ]
        return [show_place(*box), f"the library says: {error}"]


def library_reader(dataset: Any) -> Fill:
    """Let h5py read and convert, straight into the buffer where that lies in one piece."""
    import h5py

    pair = dataset.dtype.names
    chunk_rows = dataset.chunks[0] if dataset.chunks else 1

    def read(box: Box, out: np.ndarray) -> None:
        dtype = pair_view(out.dtype, pair) if pair else out.dtype
        file_space = h5py.h5s.create_simple(dataset.shape)
        file_space.select_hyperslab(tuple(start for start, _ in box), out.shape)
        memory_space = h5py.h5s.create_simple(out.shape)
        dataset.id.read(memory_space, file_space, out.view(dtype), h5py.h5t.py_create(dtype))

    # Neither function refers to itself: a cycle would keep the file open after its source is gone.
    def fill(box: Box, out: np.ndarray) -> None:
        # Virtual datasets do not tell the filters of their sources; once imported, this costs nothing.
        register_plugins()
        if out.flags.c_contiguous:
            read(box, out)
        else:
            fill_by_bands(read, box, out, chunk_rows)

    return fill


def open_dataset(file: Any, inside: str) -> Any:
    """Open a dataset; external raw files that lie beside the HDF5 file are found there."""
    import h5py

    dataset = file[inside]
    folder = os.path.dirname(os.path.abspath(dataset.file.filename))
    names = [os.fsdecode(name) for name, _, _ in dataset.external or ()]
    if any(not os.path.isabs(name) and os.path.exists(os.path.join(folder, name)) for name in names):
        # The library refuses another search path as long as the dataset is open by any handle.
        dataset = None
        access = h5py.h5p.create(h5py.h5p.DATASET_ACCESS)
        access.set_efile_prefix(os.fsencode(folder))
        return h5py.Dataset(h5py.h5d.open(file.id, os.fsencode(inside), access))
    return dataset


def _spec(
    dataset: Any, path: str, inside: str, stamps: tuple[FileStamp, ...], access: Access
) -> tuple[MatrixSpec, ArrayAxes]:
    said = describe(dataset, inside, follow=access.follow_links)
    stored = dataset.dtype
    dtype = decoded_type(stored)
    if dtype is None or not said.usable:
        raise UnsupportedMatrixError(
            f"{path}:{inside} is no matrix that can be decomposed: {said.reason}",
            evidence=[f"shape {show_shape(said.shape)}, {said.dtype}, {said.encoding}"],
            remedy=_remedy(dataset, path),
        )
    require_sizes(dataset.shape, dataset.chunks, stored.itemsize, f"{path}:{inside}")
    filters = filters_of(dataset)
    codecs = tuple(step.name for step in filters) if decodes_directly(dataset) else ("library",) * bool(filters)
    shape = tuple(dataset.shape)
    # Any range of a list that lies in one piece will do.
    chunks = dataset.chunks or ((1, 1) if isinstance(dataset, OneRow) else (1, *shape[1:]))
    unit = tuple(min(chunk, side) for chunk, side in zip(chunks, shape, strict=True))
    axes = replace(said.axes, chunks=unit if dataset.chunks else None)
    spec = MatrixSpec(
        name=f"{path}:{inside}",
        shape=(shape[0], math.prod(shape[1:])),
        dtype=dtype,
        chunks=(unit[0], math.prod(unit[1:])),
        storage="compressed" if filters else "plain",
        encoding=said.encoding,
        decode_bytes=_decode_bytes(dataset, chunks),
        stored_bytes=said.stored_bytes,
        samples_hint=said.samples_hint,
        hint_reason=said.hint_reason,
        fingerprint=digest(stamps, inside, dataset.shape, stored, said.encoding),
        cautions=type_caution(stored) + packing_cautions(said.packing) + said.remarks,
        codecs=codecs,
        packing=said.packing,
        layout=said.layout,
        marker=said.marker,
        row_names=said.row_names,
        column_names=said.column_names,
    )
    return spec, axes


def _decode_bytes(dataset: Any, chunks: tuple[int, ...]) -> int:
    """Most bytes that a thread holds beside its panel; chunks may reach past the matrix."""
    item = dataset.dtype.itemsize
    if dataset.chunks is None or not filters_of(dataset):
        direct = reading_bytes(math.prod(chunks[1:]) * item)
        return direct if plain_type(dataset) is not None else direct + BAND_BYTES
    return decode_bytes(math.prod(chunks) * item) + (0 if decodes_directly(dataset) else BAND_BYTES)


def _remedy(dataset: Any, path: str) -> str:
    missing = missing_filters(dataset)
    if missing:
        return f"Install the filter plugin for {', '.join(missing)}, or write the file again with gzip."
    return f"See what else the file holds with: bigsvd inspect {shell_word(path)}"

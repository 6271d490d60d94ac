"""A dense two-dimensional HDF5 dataset as a source."""

from __future__ import annotations

import os
import shlex
import threading
import zlib
from typing import Any

import numpy as np

from bigsvd.errors import BigsvdError, DamagedSourceError, UnsupportedMatrixError
from bigsvd.source.entries import decoded_type, pair_view, type_caution
from bigsvd.source.hdf5_dataset import describe, missing_filters, unapplied_attributes
from bigsvd.source.hdf5_file import open_hdf5
from bigsvd.source.rectangle import Span, clip, require_rectangle, show_chunk, show_place, touched
from bigsvd.source.spec import MatrixSpec
from bigsvd.source.stamp import FileStamp, digest
from bigsvd.units import show_shape

_LIBRARY_ERRORS = (OSError, RuntimeError, ValueError, TypeError, KeyError, zlib.error)


class Hdf5Source:
    """Reads one dataset by its address; opened once per process, at the first use.

    Parameters
    ----------
    path : str
        Absolute path of the file.
    dataset : str
        Path of a two-dimensional dataset of numbers inside it.
    """

    def __init__(self, path: str, dataset: str) -> None:
        self.path = path
        self.dataset = dataset
        self._forget()
        self.stamps: tuple[FileStamp, ...] = (FileStamp.of(path),)
        opened = self.opened()
        self.stamps += tuple(FileStamp.of(name) for name in other_files(opened, path) if os.path.exists(name))
        self.spec = _spec(opened, path, dataset, self.stamps)

    def _forget(self) -> None:
        self._lock = threading.Lock()
        self._file: Any = None
        self._process = 0

    def __getstate__(self) -> dict[str, Any]:
        return {name: getattr(self, name) for name in ("path", "dataset", "stamps", "spec")}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._forget()

    def __repr__(self) -> str:
        return f"Hdf5Source({self.path!r}, {self.dataset!r})"

    def opened(self) -> Any:
        """Return the open h5py dataset; a handle that came through a fork is left alone and another one opened."""
        with self._lock:
            if self._file is None or self._process != os.getpid():
                for stamp in self.stamps:
                    stamp.require_unchanged()
                self._file = open_hdf5(self.path)
                self._process = os.getpid()
            return self._file[self.dataset]

    def close(self) -> None:
        """Release the file. Reading again opens it again."""
        with self._lock:
            if self._file is not None and self._process == os.getpid():
                self._file.close()
            self._file = None

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Read the half-open rectangle rows × columns into `out`; see `Source.read`."""
        require_rectangle(self.spec, rows, columns, out)
        if out.size == 0:
            return
        dataset = self.opened()
        try:
            self._fill(dataset, rows, columns, out)
        except _LIBRARY_ERRORS as error:
            self._require_unchanged()
            if isinstance(error, BigsvdError):
                raise
            raise self._damage(dataset, rows, columns, error) from error
        # The library answers zeros where a file was cut short after it was opened.
        self._require_unchanged()

    def _fill(self, dataset: Any, rows: Span, columns: Span, out: np.ndarray) -> None:
        read_by_library(dataset, rows, columns, out)

    def _require_unchanged(self) -> None:
        for stamp in self.stamps:
            stamp.require_unchanged()

    def _damage(self, dataset: Any, rows: Span, columns: Span, error: Exception) -> DamagedSourceError:
        """Find the first chunk of the rectangle that does not decode, and name it."""
        place, said = show_place(rows, columns), error
        if dataset.chunks is not None:
            for coordinates in touched(rows, columns, self.spec.chunks):
                part_rows = clip(coordinates[0], self.spec.chunks[0], rows)
                part_columns = clip(coordinates[1], self.spec.chunks[1], columns)
                part = np.empty((part_rows[1] - part_rows[0], part_columns[1] - part_columns[0]), self.spec.dtype)
                try:
                    self._fill(dataset, part_rows, part_columns, part)
                except _LIBRARY_ERRORS as first:
                    place, said = show_chunk(coordinates, self.spec.shape, self.spec.chunks), first
                    break
        return DamagedSourceError(
            f"{self.spec.name} holds stored bytes that do not decode",
            evidence=[place, f"the library says: {said}"],
            remedy="Copy or download the file again, or write it again from its origin.",
        )


def read_by_library(dataset: Any, rows: Span, columns: Span, out: np.ndarray) -> None:
    """Let h5py read and convert, straight into `out` where that lies in one piece."""
    import h5py

    dtype = out.dtype
    if dataset.dtype.names is not None:
        dtype = pair_view(out.dtype, dataset.dtype.names)
    target = out if out.flags.c_contiguous else np.empty(out.shape, out.dtype)
    file_space = h5py.h5s.create_simple(dataset.shape)
    file_space.select_hyperslab((rows[0], columns[0]), out.shape)
    memory_space = h5py.h5s.create_simple(out.shape)
    dataset.id.read(memory_space, file_space, target.view(dtype), h5py.h5t.py_create(dtype))
    if target is not out:
        out[...] = target


def other_files(dataset: Any, path: str) -> list[str]:
    """Paths of the other files that hold entries of a dataset: external raw files and virtual sources."""
    folder = os.path.dirname(path)
    names = [name for name, _, _ in dataset.external or ()]
    if dataset.is_virtual:
        names += [source.file_name for source in dataset.virtual_sources() if source.file_name != "."]
    return sorted({os.path.join(folder, os.fsdecode(name)) for name in names})


def _spec(dataset: Any, path: str, inside: str, stamps: tuple[FileStamp, ...]) -> MatrixSpec:
    said = describe(dataset, inside)
    stored = dataset.dtype
    dtype = decoded_type(stored)
    if dtype is None or not said.usable:
        raise UnsupportedMatrixError(
            f"{path}:{inside} is no matrix that can be decomposed: {said.reason}",
            evidence=[f"shape {show_shape(said.shape)}, {said.dtype}, {said.encoding}"],
            remedy=_remedy(dataset, path),
        )
    filtered = dataset.id.get_create_plist().get_nfilters() > 0
    rows, columns = dataset.shape
    chunks = dataset.chunks or (1, columns)
    return MatrixSpec(
        name=f"{path}:{inside}",
        shape=(rows, columns),
        dtype=dtype,
        chunks=(min(chunks[0], rows), min(chunks[1], columns)),
        storage="compressed" if filtered else "plain",
        encoding=said.encoding,
        stored_bytes=said.stored_bytes,
        samples_hint=said.samples_hint,
        hint_reason=said.hint_reason,
        fingerprint=digest(stamps, inside, dataset.shape, stored, said.encoding),
        cautions=type_caution(stored) + unapplied_attributes(set(dataset.attrs)),
    )


def _remedy(dataset: Any, path: str) -> str:
    missing = missing_filters(dataset)
    if missing:
        return f"Install the filter plugin for {', '.join(missing)}, or write the file again with gzip."
    return f"See what else the file holds with: bigsvd inspect {shlex.quote(path)}"

"""A dense two-dimensional Zarr array, format 2 or 3, sharded or not, as a source."""

from __future__ import annotations

import os
import shlex
import threading
from typing import Any

import numpy as np

from bigsvd.errors import DamagedSourceError, NoMatrixError, UnsupportedMatrixError
from bigsvd.source.complete import SHOWN, absent_error, count_absent, refuse_absent
from bigsvd.source.entries import decoded_type, type_caution
from bigsvd.source.hdf5_dataset import unapplied_attributes
from bigsvd.source.rectangle import Span, clip, require_rectangle, show_chunk, touched
from bigsvd.source.spec import MatrixSpec
from bigsvd.source.stamp import FileStamp, digest
from bigsvd.source.zarr_complete import absent_inside, absent_keys, other_names
from bigsvd.source.zarr_metadata import ZarrMetadata, read_metadata
from bigsvd.source.zarr_read import Reader, open_zarr, python_reader, rust_reader
from bigsvd.source.zarr_store import KeyStore, open_keys
from bigsvd.source.zarr_walk import describe_zarr, group_attributes, stored_bytes
from bigsvd.units import show_shape

MEANT = "write the array again with write_empty_chunks=True."


class ZarrSource:
    """Reads one array by its address; opened once per process, at the first use.

    Parameters
    ----------
    path : str
        Absolute path of a store: a directory or a zip file.
    inside : str
        Path of a two-dimensional array of numbers inside it; empty where the store is that array.
    """

    def __init__(self, path: str, inside: str) -> None:
        self.path = path
        self.inside = inside
        self._forget()
        self.keys: KeyStore = open_keys(path)
        self.spec = self._describe()
        self._opened()

    def _forget(self) -> None:
        self._lock = threading.Lock()
        self._reader: Reader | None = None
        self._process = 0

    def __getstate__(self) -> dict[str, Any]:
        return {name: getattr(self, name) for name in ("path", "inside", "spec", "stamps", "metadata")}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._forget()
        self.keys = open_keys(self.path)

    def __repr__(self) -> str:
        return f"ZarrSource({self.path!r}, {self.inside!r})"

    def _describe(self) -> MatrixSpec:
        metadata = read_metadata(self.keys, self.inside)
        if metadata is None:
            raise NoMatrixError(f"{self.path} holds no array under {self.inside!r}", remedy="Check the path.")
        said = describe_zarr(
            metadata, self.inside, group_attributes(self.keys, ""), stored_bytes(self.keys, self.inside)
        )
        dtype = decoded_type(metadata.dtype) if metadata.dtype is not None else None
        name = f"{self.path}:{self.inside}" if self.inside else self.path
        if dtype is None or metadata.dtype is None or not said.usable:
            raise UnsupportedMatrixError(
                f"{name} is no matrix that can be decomposed: {said.reason}",
                evidence=[f"shape {show_shape(said.shape)}, {said.dtype}, {said.encoding}"],
                remedy=f"See what else the store holds with: bigsvd inspect {shlex.quote(self.path)}",
            )
        self.metadata: ZarrMetadata = metadata
        marks = [self.path] if os.path.isfile(self.path) else self._mark_files()
        self.stamps = tuple(FileStamp.of(mark) for mark in marks)
        rows, columns = metadata.shape
        return MatrixSpec(
            name=name,
            shape=(rows, columns),
            dtype=dtype,
            chunks=(min(metadata.chunks[0], rows), min(metadata.chunks[1], columns)),
            storage="zarr",
            encoding=said.encoding,
            stored_bytes=said.stored_bytes,
            samples_hint=said.samples_hint,
            hint_reason=said.hint_reason,
            fingerprint=digest(self.stamps, metadata, said.stored_bytes, self._sampled_chunks()),
            cautions=type_caution(metadata.dtype) + unapplied_attributes(set(metadata.attributes)),
        )

    def _mark_files(self) -> list[str]:
        folder = os.path.join(self.path, self.inside)
        marks = (os.path.join(folder, name) for name in ("zarr.json", ".zarray"))
        return [mark for mark in marks if os.path.exists(mark)]

    def _sampled_chunks(self) -> list[FileStamp]:
        """Stamps of up to 64 chunk files spread over the array: enough to notice a store that was written again."""
        if os.path.isfile(self.path):
            return []
        shape, chunks = self.metadata.shape, self.metadata.chunks
        grid = [-(-side // chunk) for side, chunk in zip(shape, chunks, strict=True)]
        numbers = sorted(set(np.linspace(0, grid[0] * grid[1] - 1, 64, dtype=np.int64).tolist()))
        files = [os.path.join(self.path, self._key((n // grid[1], n % grid[1]))) for n in numbers]
        return [FileStamp.of(file) for file in files if os.path.isfile(file)]

    @property
    def _chunks(self) -> tuple[int, int]:
        """Unit of a stored key, which may reach past the matrix."""
        rows, columns = self.metadata.chunks
        return rows, columns

    def _key(self, coordinates: tuple[int, int]) -> str:
        key = self.metadata.key(coordinates)
        return f"{self.inside}/{key}" if self.inside else key

    def close(self) -> None:
        """Release the store. Reading again opens it again."""
        with self._lock:
            self._reader = None

    def _opened(self) -> Reader:
        with self._lock:
            if self._reader is None or self._process != os.getpid():
                self._require_unchanged()
                self._reader = self._open_reader()
                self._process = os.getpid()
            return self._reader

    def _open_reader(self) -> Reader:
        """Choose the reader: Rust where it is both right and fast.

        zarrs 0.2.3 decodes part of a chunk wrongly where complex numbers are stored big-endian; column order it
        decodes six times slower than zarr-python.
        """
        try:
            array = open_zarr(self.keys, self.inside, self.metadata.zarr_format)
            # numcodecs looks its codecs up at the first use; an unknown one must show before the run.
            for codec in getattr(array.metadata, "codecs", ()):
                getattr(codec, "_codec", None)
        except Exception as error:  # codecs and data types come from other packages and raise what they like
            raise self._unknown(error) from error
        direct = None
        swapped = self.metadata.big_endian and self.spec.dtype.kind == "c"
        if not swapped and not self.metadata.column_major and array.dtype.newbyteorder("=") == self.spec.dtype:
            direct = rust_reader(array, self.keys, self._key, self._chunks)
        return direct or python_reader(array)

    def _unknown(self, error: Exception) -> UnsupportedMatrixError:
        return UnsupportedMatrixError(
            f"{self.spec.name} is written in a way that is not known here",
            evidence=[self.spec.encoding, f"zarr says: {error}"],
            remedy="Install the package that brings this codec, or write the array again with zstd.",
        )

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Read the half-open rectangle rows × columns into `out`; see `Source.read`."""
        require_rectangle(self.spec, rows, columns, out)
        if out.size == 0:
            return
        reader = self._opened()
        # An absent chunk would be answered with the fill value.
        for coordinates in touched(rows, columns, self._chunks):
            if not self.keys.size(self._key(coordinates)):
                place = show_chunk(coordinates, self.spec.shape, self._chunks)
                raise absent_error(self.spec, "a chunk is absent", [f"{place}; key {self._key(coordinates)}"], MEANT)
        try:
            reader(rows, columns, out)
        except Exception as error:  # codecs come from other packages and raise what they like
            self._require_unchanged()
            raise self._damage(reader, rows, columns, error) from error
        self._require_unchanged()

    def _require_unchanged(self) -> None:
        for stamp in self.stamps:
            stamp.require_unchanged()

    def _damage(self, reader: Reader, rows: Span, columns: Span, error: Exception) -> DamagedSourceError:
        """Find the first chunk of the rectangle that does not decode, and name it."""
        evidence = [f"zarr says: {error}"]
        chunks = self._chunks
        for i, j in touched(rows, columns, chunks):
            part_rows, part_columns = clip(i, chunks[0], rows), clip(j, chunks[1], columns)
            part = np.empty((part_rows[1] - part_rows[0], part_columns[1] - part_columns[0]), self.spec.dtype)
            try:
                reader(part_rows, part_columns, part)
            except Exception as first:
                key = self._key((i, j))
                evidence = [
                    show_chunk((i, j), self.spec.shape, chunks),
                    f"key {key}, {self.keys.size(key):,} bytes stored",
                    f"zarr says: {first}",
                ]
                break
        return DamagedSourceError(
            f"{self.spec.name} holds a chunk that does not decode",
            evidence=evidence,
            remedy="Copy that chunk again from the origin of the store, or write the array again.",
        )

    def require_complete(self) -> None:
        """Compare the stored keys with the grid; see `check_complete`."""
        self._require_unchanged()
        absent = absent_keys(self.keys, self.inside, self.metadata)
        if absent.all():
            others = other_names(self.keys, self.inside)
            if others:
                raise absent_error(
                    self.spec,
                    f"none of {absent.size:,} chunks is stored under the key that the metadata gives",
                    [f"{self._key((0, 0))} is wanted; there are {', '.join(others)}"],
                    "check the dimension separator in the metadata first.",
                )
        refuse_absent(absent, self.spec, MEANT)
        if self.metadata.shard is not None:
            self._require_full_shards(absent.shape)

    def _require_full_shards(self, grid: tuple[int, ...]) -> None:
        inside = 0
        places: list[str] = []
        for place in np.ndindex(grid):
            shard = (place[0], place[1])
            missing = absent_inside(self.keys, self._key(shard), shard, self.metadata)
            if missing and len(places) < SHOWN:
                places.append(f"{missing:,} inside the shard of {show_chunk(shard, self.spec.shape, self._chunks)}")
            inside += missing
        if inside:
            raise absent_error(self.spec, count_absent(inside, "the chunks inside its shards"), places, MEANT)

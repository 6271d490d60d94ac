"""An .npy file as a source: read by position and never mapped, so that its pages are not counted as ours."""

from __future__ import annotations

import errno
import math
import os
import threading
from typing import Any

import numpy as np

from bigsvd.errors import DamagedSourceError, UnsupportedMatrixError
from bigsvd.source.array_axes import ArrayAxes
from bigsvd.source.candidate import Candidate, why_unusable
from bigsvd.source.entries import decoded_type, show_type, type_caution
from bigsvd.source.persist import persist, refusal, unreadable
from bigsvd.source.positional import Descriptor, announce_rows, read_box, reading_bytes
from bigsvd.source.rectangle import Box, Span, require_box, require_rectangle, show_place
from bigsvd.source.spec import MatrixSpec
from bigsvd.source.stamp import FileStamp, digest


class NpySource:
    """Reads one .npy file, in C or Fortran order.

    Parameters
    ----------
    path : str
        Absolute path of the file.
    """

    def __init__(self, path: str) -> None:
        self.path = path
        self._forget()
        shape, self.stored, self.column_order, self.offset = read_header(path)
        self.stamps = (FileStamp.of(path),)
        said = describe_npy(path)
        dtype = decoded_type(self.stored)
        if not said.usable or dtype is None:
            raise UnsupportedMatrixError(
                f"{path} is no matrix that can be decomposed: {said.reason}",
                evidence=[f"shape {shape}, {said.dtype}"],
                remedy="Give an array of numbers of two or more axes.",
            )
        self.axes = ArrayAxes(shape, reversed=self.column_order)
        rows, columns = shape[0], math.prod(shape[1:])
        # Entries that lie together: a row in C order, in Fortran order what runs along all axes but the last.
        together = math.prod(shape[:-1] if self.column_order else shape[1:])
        self.spec = MatrixSpec(
            name=path,
            shape=(rows, columns),
            dtype=dtype,
            chunks=(rows, 1) if self.column_order else (1, columns),
            storage="npy",
            encoding=said.encoding,
            decode_bytes=reading_bytes(together * self.stored.itemsize),
            stored_bytes=said.stored_bytes,
            fingerprint=digest(self.stamps),
            cautions=type_caution(self.stored),
        )

    def _forget(self) -> None:
        self._lock = threading.Lock()
        self._descriptor: Descriptor | None = None
        self._retired: list[Descriptor] = []

    def __getstate__(self) -> dict[str, Any]:
        return {
            name: value for name, value in self.__dict__.items() if name not in ("_lock", "_descriptor", "_retired")
        }

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._forget()

    def __repr__(self) -> str:
        return f"NpySource({self.path!r})"

    def close(self) -> None:
        """Release the file. Reading again opens it again."""
        with self._lock:
            if self._descriptor is not None:
                self._descriptor.close()
            self._descriptor = None
            self._retired.clear()

    def _opened(self) -> int:
        # A descriptor inherited through a fork stays valid: reads give their position themselves.
        with self._lock:
            if self._descriptor is None:
                self.stamps[0].require_unchanged()
                self._descriptor = Descriptor(self.path)
            return self._descriptor.number

    def _open_anew(self, error: OSError) -> None:
        """Leave a descriptor that the server forgot; it stays open, since other threads may be reading by it."""
        if error.errno == errno.ESTALE:
            with self._lock:
                if self._descriptor is not None:
                    self._retired.append(self._descriptor)
                self._descriptor = None

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Read the half-open rectangle rows × columns into `out`; see `Source.read`."""
        require_rectangle(self.spec, rows, columns, out)
        self.read_box((rows, columns), out)

    def read_box(self, box: Box, out: np.ndarray) -> None:
        """Read a half-open box into `out`; see `ArraySource.read_box`."""
        require_box(self.axes.shape, self.spec.dtype, box, out)
        lying, shape, target = box, self.axes.shape, out
        if self.column_order:
            lying, shape, target = box[::-1], shape[::-1], out.T
        try:
            persist(lambda: read_box(self._opened(), self.offset, shape, self.stored, lying, target), self._open_anew)
        except (OSError, EOFError) as error:
            self.stamps[0].require_unchanged()
            kept_back = refusal(error)
            if kept_back is not None:
                raise unreadable(self.path, [show_place(*box)], kept_back) from error
            raise DamagedSourceError(
                f"{self.path} cannot be read to its end",
                evidence=[str(error)],
                remedy="Copy or download the file again.",
            ) from error
        self.stamps[0].require_unchanged()

    def announce(self, rows: Span, columns: Span) -> None:
        """Have the system fetch a rectangle that will be read soon, where it is whole rows as they lie."""
        self.announce_box((rows, columns))

    def announce_box(self, box: Box) -> None:
        """Have the system fetch a box that will be read soon, where it is whole rows as they lie."""
        shape = self.axes.shape
        if self.column_order:
            box, shape = box[::-1], shape[::-1]
        if all(span == (0, side) for span, side in zip(box[1:], shape[1:], strict=True)):
            announce_rows(self._opened(), self.offset, math.prod(shape[1:]) * self.stored.itemsize, box[0])

    def require_complete(self) -> None:
        """Refuse a file that changed; its length was compared with its header when it was opened."""
        self.stamps[0].require_unchanged()


def read_header(path: str) -> tuple[tuple[int, ...], np.dtype, bool, int]:
    """Read shape, type, whether the order is Fortran's, and the position of the first entry."""
    with open(path, "rb") as file:
        try:
            version = np.lib.format.read_magic(file)
            read = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
            shape, column_order, stored = read(file)
        except Exception as error:  # the header is parsed as Python source, and fails as that may fail
            raise DamagedSourceError(
                f"{path} begins like an .npy file, but its header cannot be read",
                evidence=[str(error)],
                remedy="Copy or download the file again.",
            ) from error
        offset, size = file.tell(), os.fstat(file.fileno()).st_size
    needed = offset + int(np.prod(shape, dtype=object)) * stored.itemsize
    if size < needed and not stored.hasobject:
        raise DamagedSourceError(
            f"{path} is cut short: {size / needed:.1%} of it is there",
            evidence=[f"{size:,} bytes found, {needed:,} bytes by its header"],
            remedy="Copy or download the file again.",
        )
    return shape, stored, column_order, offset


def describe_npy(path: str) -> Candidate:
    """Say all that the header tells."""
    shape, stored, column_order, offset = read_header(path)
    reason = why_unusable(shape, decoded_type(stored) is not None and stored.names is None, show_type(stored))
    return Candidate(
        path="",
        shape=shape,
        dtype=show_type(stored),
        encoding="column order (Fortran)" if column_order else "row order (C)",
        stored_bytes=os.path.getsize(path) - offset,
        decoded_bytes=int(np.prod(shape, dtype=object)) * stored.itemsize,
        usable=not reason,
        reason=reason,
    )

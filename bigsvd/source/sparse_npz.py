"""Sparse matrices in ``.npz`` files, as ``scipy.sparse.save_npz`` writes them: a zip of lists, compressed or not.

A list that is stored as it is is read by position in the file. A compressed one can be read from its beginning only:
it is inflated at the first use and held, which the memory plan counts. Nothing is ever unpickled.
"""

from __future__ import annotations

import struct
import threading
import zipfile
import zlib
from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np

from bigsvd.errors import BigsvdError, DamagedSourceError, UnsupportedMatrixError
from bigsvd.source.access import Access
from bigsvd.source.candidate import Candidate
from bigsvd.source.entries import decoded_type, show_type, type_caution
from bigsvd.source.persist import persist, refusal, unreadable
from bigsvd.source.positional import Descriptor, announce, read_rows, reading_bytes
from bigsvd.source.rectangle import Span, require_rectangle, show_place
from bigsvd.source.sparse_describe import describe_sparse, opened_layout
from bigsvd.source.sparse_layout import MOST_NUMBERS, SPARSE_TYPES, ArrayFacts
from bigsvd.source.sparse_source import SparseSource, new_spec
from bigsvd.source.spec import MatrixSpec
from bigsvd.source.stamp import FileStamp, digest

_AGAIN = "Copy or download the file again, or write it again."
# A local header of a zip file: 30 bytes, the lengths of name and extra field in the last four (PKWARE APPNOTE 4.3.7).
_LOCAL_HEADER, _LENGTHS = 30, struct.Struct("<HH")


class Member(NamedTuple):
    """One array of an ``.npz`` file, by its header; `offset` is where its entries begin, None if compressed."""

    name: str
    shape: tuple[int, ...]
    dtype: np.dtype
    offset: int | None
    stored_bytes: int


def read_members(path: str) -> dict[str, Member]:
    """Read the header of every array in an ``.npz`` file, and no entries."""
    try:
        with zipfile.ZipFile(path) as file:
            return {info.filename[:-4]: _member(file, path, info) for info in file.infolist()}
    except BigsvdError:
        raise
    except (zipfile.BadZipFile, OSError, ValueError, EOFError, zlib.error, RuntimeError, struct.error) as error:
        raise DamagedSourceError(
            f"{path} is an .npz file that cannot be read", evidence=[str(error)], remedy=_AGAIN
        ) from error


def _member(file: zipfile.ZipFile, path: str, info: zipfile.ZipInfo) -> Member:
    with file.open(info) as stream:
        shape, dtype = _header(stream)
        begin = stream.tell()
    offset = None
    if info.compress_type == zipfile.ZIP_STORED:
        with open(path, "rb") as raw:
            raw.seek(info.header_offset + _LOCAL_HEADER - _LENGTHS.size)
            offset = info.header_offset + _LOCAL_HEADER + sum(_LENGTHS.unpack(raw.read(_LENGTHS.size))) + begin
    needed = begin + int(np.prod(shape, dtype=object)) * dtype.itemsize
    if info.file_size < needed and not dtype.hasobject:
        raise DamagedSourceError(
            f"{path}:{info.filename} is cut short",
            evidence=[f"{info.file_size:,} bytes found, {needed:,} bytes by its header"],
            remedy=_AGAIN,
        )
    return Member(info.filename, shape, dtype, offset, info.compress_size)


def _header(stream: Any) -> tuple[tuple[int, ...], np.dtype]:
    version = np.lib.format.read_magic(stream)
    read = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
    shape, _, dtype = read(stream)
    return shape, dtype


def _inflated(path: str, member: Member) -> np.ndarray:
    """Read an array whole, which checks its CRC-32; objects are refused."""
    with zipfile.ZipFile(path) as file, file.open(member.name) as stream:
        array: np.ndarray = np.lib.format.read_array(stream, allow_pickle=False)
        stream.read(1)
        return array


class NpzGroup:
    """The arrays of an ``.npz`` file, as `recognise` looks at a group.

    Parameters
    ----------
    path : str
    """

    path = ""

    def __init__(self, path: str) -> None:
        self._path = path
        self.members = read_members(path)

    def has(self, name: str) -> bool:
        """Whether there is an array of this name."""
        return name in self.members

    def root_has(self, name: str) -> bool:
        """There is nothing above the arrays."""
        return False

    @property
    def format(self) -> str:
        """What the array ``format`` says; empty where there is none."""
        member = self.members.get("format")
        if member is None or member.dtype.kind not in "SU" or np.prod(member.shape, dtype=object) != 1:
            return ""
        value = _read(self._path, lambda: _inflated(self._path, member)).ravel()[0]
        return value.decode("ascii", "replace") if isinstance(value, bytes) else str(value)

    def attribute(self, name: str) -> Any:
        """What other layouts say by attributes: the format, and with it the shape."""
        said = f"{self.format}_matrix"
        if name == "encoding-type":
            return said
        return self.numbers("shape") if name == "shape" and said in SPARSE_TYPES else None

    def root_attribute(self, name: str) -> None:
        """There are none."""

    def facts(self, name: str) -> ArrayFacts | None:
        """What is known of an array."""
        member = self.members.get(name)
        if member is None:
            return None
        numeric = decoded_type(member.dtype) is not None
        encoding = "in an .npz file" if member.offset is not None else "compressed in an .npz file, held in memory"
        return ArrayFacts(
            member.shape, member.dtype if numeric else None, show_type(member.dtype), encoding, member.stored_bytes, 0
        )

    def numbers(self, name: str) -> list[float]:
        """A list of few numbers, read; empty where it is none."""
        member = self.members.get(name)
        if member is None or member.dtype.kind not in "iuf" or np.prod(member.shape, dtype=object) > MOST_NUMBERS:
            return []
        found: list[float] = _read(self._path, lambda: _inflated(self._path, member)).ravel().tolist()
        return found


def _read(path: str, action: Callable[[], np.ndarray]) -> np.ndarray:
    """Read from a zip file, and name the file where that fails."""
    try:
        return persist(action)
    except MemoryError:
        raise
    except Exception as error:  # zipfile, zlib and NumPy's header parser raise what they like
        kept_back = refusal(error)
        if kept_back is not None:
            raise unreadable(path, [], kept_back) from error
        raise DamagedSourceError(f"{path} does not decode", evidence=[str(error)], remedy=_AGAIN) from error


class NpzRow:
    """A list in an ``.npz`` file as a matrix of one row.

    Parameters
    ----------
    path : str
    member : Member
        Of one axis, of numbers.
    """

    def __init__(self, path: str, member: Member) -> None:
        self.path, self.member = path, member
        dtype = decoded_type(member.dtype)
        assert dtype is not None, "the layout was checked"
        self.stamp = FileStamp.of(path)
        self.spec = MatrixSpec(
            name=f"{path}:{member.name}",
            shape=(1, member.shape[0]),
            dtype=dtype,
            chunks=(1, 1),
            storage="npy",
            stored_bytes=member.stored_bytes,
            fingerprint=digest(self.stamp, *member),
            decode_bytes=reading_bytes(0),
            cautions=type_caution(member.dtype),
            held_bytes=0 if member.offset is not None else member.shape[0] * dtype.itemsize,
        )
        self._forget()

    def _forget(self) -> None:
        self._lock = threading.Lock()
        self._descriptor: Descriptor | None = None
        self._array: np.ndarray | None = None

    def __getstate__(self) -> dict[str, Any]:
        return {name: getattr(self, name) for name in ("path", "member", "stamp", "spec")}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._forget()

    def close(self) -> None:
        """Release the file, and what was inflated."""
        with self._lock:
            if self._descriptor is not None:
                self._descriptor.close()
            self._descriptor = self._array = None

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Read the half-open rectangle rows × columns into `out`; see `Source.read`."""
        require_rectangle(self.spec, rows, columns, out)
        if self.member.offset is None:
            np.copyto(out[0], self._held()[columns[0] : columns[1]])
            return
        offset, width, stored = self.member.offset, self.spec.shape[1], self.member.dtype
        try:
            persist(lambda: read_rows(self._opened(), offset, width, stored, rows, columns, out))
        except (OSError, EOFError) as error:
            self.stamp.require_unchanged()
            kept_back = refusal(error)
            if kept_back is not None:
                raise unreadable(self.spec.name, [show_place(rows, columns)], kept_back) from error
            raise DamagedSourceError(
                f"{self.spec.name} cannot be read to its end", evidence=[str(error)], remedy=_AGAIN
            ) from error
        self.stamp.require_unchanged()

    def announce(self, rows: Span, columns: Span) -> None:
        """Have the system fetch entries that will be read soon."""
        if self.member.offset is not None:
            item = self.member.dtype.itemsize
            announce(self._opened(), self.member.offset + columns[0] * item, (columns[1] - columns[0]) * item)

    def require_complete(self) -> None:
        """Refuse a file that changed; lengths were compared with headers when it was opened."""
        self.stamp.require_unchanged()

    def _opened(self) -> int:
        with self._lock:
            if self._descriptor is None:
                self.stamp.require_unchanged()
                self._descriptor = Descriptor(self.path)
            return self._descriptor.number

    def _held(self) -> np.ndarray:
        with self._lock:
            if self._array is None:
                self.stamp.require_unchanged()
                array = _read(self.path, lambda: _inflated(self.path, self.member))
                self._array = array.astype(self.spec.dtype, copy=False)
            return self._array


def survey_npz(path: str, access: Access) -> list[Candidate]:
    """Describe the sparse matrix in an ``.npz`` file, or the arrays in it if it is none."""
    group = NpzGroup(path)
    found = describe_sparse(group, access.sparse_format)
    if found is not None:
        return [found[0]]
    return [
        Candidate(name, member.shape, show_type(member.dtype), reason=_reason(group))
        for name, member in group.members.items()
    ]


def _reason(group: NpzGroup) -> str:
    said = group.format
    if said:
        return f"part of a sparse matrix of the format {said}, and csr and csc are read"
    return "an array in an .npz file, of which only sparse matrices are read"


def open_sparse_npz(path: str, access: Access) -> SparseSource:
    """Open the sparse matrix in an ``.npz`` file.

    Raises
    ------
    UnsupportedMatrixError, DamagedSourceError
        If there is none, or one that cannot be read.
    """
    group = NpzGroup(path)
    found = opened_layout(group, path, path, access.sparse_format)
    if found is None:
        said = group.format
        raise UnsupportedMatrixError(
            f"{path} is an .npz file with no sparse matrix that can be read: {_reason(group)}",
            evidence=[f"{name}: {show_type(member.dtype)} {member.shape}" for name, member in group.members.items()][
                :8
            ],
            remedy="Convert it: scipy.sparse.save_npz(FILE, scipy.sparse.load_npz(FILE).tocsr(), compressed=False)"
            if said
            else "Write the array with numpy.save(FILE, array), one to a file.",
        )
    stored, layout = found
    names = (layout.values, layout.indices, layout.pointers)
    parts = [NpzRow(path, group.members[name]) for name in names]
    value_type = group.members[layout.values].dtype
    # Inflated, pointers are held beside their copy in 64 bits.
    held = sum(part.spec.held_bytes for part in parts)
    return SparseSource(
        layout,
        (parts[0], parts[1], parts[2]) if layout.nonzeros else (None, None, parts[2]),
        new_spec(
            layout, path, value_type, encoding=stored.encoding, stored_bytes=stored.stored_bytes, fingerprint="npz",
            held_bytes=held,
        ),
    )  # fmt: skip

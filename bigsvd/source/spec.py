"""What is known of a matrix without reading it, and what every source must offer."""

from __future__ import annotations

import bisect
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol, runtime_checkable

import numpy as np

from bigsvd.source.array_axes import ArrayAxes
from bigsvd.source.names import Names
from bigsvd.source.packing import Packing
from bigsvd.source.unfolding import Unfolding
from bigsvd.units import show_bytes, show_count

if TYPE_CHECKING:
    from scipy.sparse import csr_array

# Stored entries in lines first … stop along the compressed axis.
LineNonzeros = Callable[[int, int], int]


@dataclass(frozen=True)
class Absent:
    """Chunks that were never written and are read as the fill value, because the user accepts them.

    Attributes
    ----------
    chunks, of : int
        How many, and how many there should be; of sharded arrays the chunks inside shards.
    first : tuple of str
        Places of the first of them.
    read_as : str
        The fill value.
    """

    chunks: int
    of: int
    first: tuple[str, ...]
    read_as: str

    @property
    def words(self) -> str:
        """All of it in one line."""
        return f"{count_absent(self.chunks, self.of)} and read as {self.read_as}; first {self.first[0]}"


@dataclass(frozen=True)
class Missing:
    """Missing entries (NaN) of a matrix, and what becomes of them.

    Attributes
    ----------
    policy : str
        ``mean``, ``drop-columns`` or ``drop-rows``.
    shape : (int, int)
        Of the matrix as it is read, nothing left out.
    bytes : int
        Decoded bytes of it, which one sweep reads to find them.
    found : bool
        Whether that was done; what follows is not known before.
    entries, rows, columns : int
        Missing entries, and the rows and columns in which there are any.
    left_out : tuple of (int, int)
        Runs of rows or columns that are left out, each the first and one past the last, in stored order.
    """

    policy: str
    shape: tuple[int, int]
    bytes: int
    found: bool = False
    entries: int = 0
    rows: int = 0
    columns: int = 0
    left_out: tuple[tuple[int, int], ...] = ()

    @property
    def words(self) -> str:
        """All of it in one line."""
        if not self.found:
            then = ", and the plan is made of what remains" if self.policy.startswith("drop") else ""
            return f"{_PLANNED[self.policy]}; one read of {show_bytes(self.bytes)} before the sweeps counts them{then}"
        if not self.entries:
            return "none found"
        share = self.entries / (self.shape[0] * self.shape[1])
        where = f"in {_of(self.rows, self.shape[0], 'row')} and {_of(self.columns, self.shape[1], 'column')}"
        found = f"{show_count(self.entries)} {'entry' if self.entries == 1 else 'entries'} ({share:.2g} of all) {where}"
        if not self.policy.startswith("drop"):
            return f"{found}; each takes the mean of its feature"
        gone = sum(stop - first for first, stop in self.left_out)
        axis = 0 if self.policy == "drop-rows" else 1
        name = ("rows", "columns")[axis]
        return f"{found}; {show_count(gone)} {name} left out, {show_count(self.shape[axis] - gone)} remain"


_PLANNED = {
    "mean": "entries take the mean of their feature",
    "drop-columns": "columns that have any are left out",
    "drop-rows": "rows that have any are left out",
}


def _of(count: int, of: int, name: str) -> str:
    return f"{show_count(count)} of {show_count(of)} {name}s"


def count_absent(count: int, of: int) -> str:
    """Say how many of all chunks are absent.

    >>> count_absent(1, 80)
    '1 of 80 chunks is absent'
    """
    return f"{show_count(count)} of {show_count(of)} chunks {'is' if count == 1 else 'are'} absent"


@dataclass(frozen=True)
class MatrixSpec:
    """All that planning knows of a matrix, in the orientation in which it is stored.

    Attributes
    ----------
    name : str
        What to call it in messages: file, and the path inside it.
    shape : (int, int)
        Rows and columns as stored.
    dtype : numpy.dtype
        Type of the entries as they are decoded, in native byte order.
    chunks : (int, int)
        The smallest rectangle that can be read without reading anything twice: a chunk, or one inside a shard.
        (1, 1) where any rectangle will do; (1, columns) for a row-contiguous file.
    storage : str
        Storage class, the key of the nominal rates: ``memory``, ``plain``, ``compressed``, ``zarr``, ``npy``,
        ``sparse`` or ``graph``.
    encoding : str
        Chunking and filters in words, for people.
    codecs : tuple of str
        What is undone to decode a chunk, for the nominal rates; ``library`` where the format's own library does it.
    stored_bytes : int or None
        Bytes on disk, where the format tells.
    samples_hint : str or None
        ``rows`` or ``columns`` where labels or markers in the file say which axis holds the samples;
        ``contradictory`` where they disagree.
    hint_reason : str
        The marker that says so, for people.
    fingerprint : str
        Identifies the input as it was when opened (sizes, times, metadata); empty where there is none.
    cautions : tuple of str
        What a reader of the plan should know about how entries are read, such as attributes that are not applied.
    decode_bytes : int
        Most bytes that a thread holds beside its panel once it has read: buffers are kept for its next read.
    absent : Absent or None
        Chunks that `check_complete` found absent and the user accepts.
    nonzeros : int or None
        Entries stored, of a sparse matrix; None of a dense one.
    compressed_axis : int or None
        Of a sparse matrix, 0 where it is compressed by rows and 1 by columns.
    packing : Packing or None
        How entries are packed; None where they are not, or were decoded.
    decoded : str
        Attributes by which entries were decoded, for people; empty for none.
    missing : Missing or None
        What becomes of missing entries, where the user says so.
    held_bytes : int
        What the source itself holds once, from its opening or first read on, however many threads read: pointers to
        lines, places of rows and columns, means.
    layout, marker : str
        The layout that the file was taken for, and what in it says so; empty for arrays in memory.
    row_names, column_names : Names or None
        Names along either axis, not read yet.
    edges : pair of (tuple of int or None)
        Where the chunks along rows and along columns begin, and the end, where they are of unequal size; None where
        they follow from `chunks`, which then are the largest.
    unfolding : Unfolding or None
        How rows and columns stand for the axes of an array of more than two.
    """

    name: str
    shape: tuple[int, int]
    dtype: np.dtype
    chunks: tuple[int, int]
    storage: str
    encoding: str = ""
    stored_bytes: int | None = None
    samples_hint: str | None = None
    hint_reason: str = ""
    fingerprint: str = ""
    cautions: tuple[str, ...] = ()
    codecs: tuple[str, ...] = ()
    decode_bytes: int = 0
    absent: Absent | None = None
    nonzeros: int | None = None
    compressed_axis: int | None = None
    packing: Packing | None = None
    decoded: str = ""
    missing: Missing | None = None
    held_bytes: int = 0
    layout: str = ""
    marker: str = ""
    row_names: Names | None = None
    column_names: Names | None = None
    edges: tuple[tuple[int, ...] | None, tuple[int, ...] | None] = (None, None)
    unfolding: Unfolding | None = None

    def whole_chunks(self, axis: int, start: int, stop: int) -> tuple[int, int]:
        """The range of whole chunks that lines start … stop of an axis lie in."""
        edges, side = self.edges[axis], self.shape[axis]
        if edges is not None:
            return edges[bisect.bisect_right(edges, start) - 1], edges[bisect.bisect_left(edges, stop)]
        unit = min(self.chunks[axis], side)
        return start // unit * unit, min(-(-stop // unit) * unit, side)

    @property
    def decoded_bytes(self) -> int:
        """Bytes of the whole matrix in its stored type; of a sparse one made dense."""
        return self.shape[0] * self.shape[1] * self.dtype.itemsize


class Source(Protocol):
    """A matrix that can be read in rectangles, by several threads at once.

    A source is cheap to pickle: it travels as its address and is opened again, once per process.
    """

    @property
    def spec(self) -> MatrixSpec:
        """What is known of the matrix without reading it."""
        ...

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        """Read the half-open rectangle rows × columns into `out`.

        Parameters
        ----------
        rows, columns : (int, int)
            First and one past the last, in stored order.
        out : ndarray, shape (rows, columns), dtype ``spec.dtype``
            Any strides; wholly overwritten.

        Raises
        ------
        DamagedSourceError
            If stored bytes are absent or do not decode; names file, dataset and place.
        """
        ...

    def close(self) -> None:
        """Release the file. Reading again opens it again."""
        ...


@runtime_checkable
class ArraySource(Source, Protocol):
    """An array of two or more axes that can be read in boxes, by several threads at once.

    Of more than two axes its spec is that of the matrix whose rows are the first axis, and `read` is not offered.
    """

    @property
    def axes(self) -> ArrayAxes:
        """Its axes."""
        ...

    def read_box(self, box: tuple[tuple[int, int], ...], out: np.ndarray) -> None:
        """Read a half-open box, a span for each axis, into `out` of its shape and of any strides; see `read`."""
        ...


@runtime_checkable
class LineSource(Source, Protocol):
    """A source of a sparse matrix, which gives its lines without their zeros as well."""

    def read_lines(self, first: int, stop: int) -> csr_array:
        """Read lines first … stop along `MatrixSpec.compressed_axis`.

        Returns
        -------
        scipy.sparse.csr_array, shape (stop − first, across), dtype ``spec.dtype``
            Indices of a line ascend, none comes twice; the arrays are the caller's.

        Raises
        ------
        DamagedSourceError
            As `Source.read`.
        """
        ...

    def lines_nonzeros(self, first: int, stop: int) -> int:
        """How many entries of lines first … stop are stored; known without reading them."""
        ...


def line_counter(source: Source) -> LineNonzeros | None:
    """What tells how full lines are, of a source that gives its lines without their zeros; None for others."""
    if source.spec.storage == "sparse" and isinstance(source, LineSource):
        return source.lines_nonzeros
    return None

"""A NumPy array in memory as a source: referred to, never copied as a whole."""

from __future__ import annotations

import math

import numpy as np

from bigsvd.errors import UnsupportedMatrixError
from bigsvd.source.array_axes import ArrayAxes
from bigsvd.source.candidate import why_unusable
from bigsvd.source.entries import decoded_type, show_type, type_caution
from bigsvd.source.rectangle import Box, Span, require_box, require_rectangle
from bigsvd.source.spec import MatrixSpec


class MemorySource:
    """Reads rectangles of an array that the caller holds.

    Parameters
    ----------
    array : ndarray, shape (m, n) or of more axes
        Numbers of any type and strides. Masked entries are refused: they would be read as if they were there.
    """

    def __init__(self, array: np.ndarray) -> None:
        self._array = plain_array(array)
        dtype = decoded_type(self._array.dtype)
        reason = why_unusable(self._array.shape, dtype is not None, show_type(self._array.dtype))
        if reason or dtype is None:
            raise UnsupportedMatrixError(
                "the array is no matrix that can be decomposed",
                evidence=[reason, f"shape {self._array.shape}, type {show_type(self._array.dtype)}"],
                remedy="Give an array of numbers of two or more axes.",
            )
        if self._array.dtype.names is not None:
            self._array = self._array.view(dtype.newbyteorder(self._array.dtype[0].byteorder))
        self.axes = ArrayAxes(self._array.shape)
        rows, columns = self._array.shape[0], math.prod(self._array.shape[1:])
        self.spec = MatrixSpec(
            name="array in memory",
            shape=(rows, columns),
            dtype=dtype,
            chunks=(1, 1),
            storage="memory",
            encoding="in memory",
            cautions=type_caution(self._array.dtype),
        )

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Copy the half-open rectangle rows × columns into `out`; see `Source.read`."""
        require_rectangle(self.spec, rows, columns, out)
        self.read_box((rows, columns), out)

    def read_box(self, box: Box, out: np.ndarray) -> None:
        """Copy a half-open box into `out`; see `ArraySource.read_box`."""
        require_box(self.axes.shape, self.spec.dtype, box, out)
        np.copyto(out, self._array[tuple(slice(*span) for span in box)], casting="same_kind")

    def close(self) -> None:
        """Do nothing: the array belongs to the caller."""


def plain_array(array: np.ndarray) -> np.ndarray:
    """Take off the subclasses of ndarray that change what indexing means; refuse masked entries."""
    if isinstance(array, np.ma.MaskedArray):
        masked = int(np.count_nonzero(np.ma.getmaskarray(array)))
        if masked:
            raise UnsupportedMatrixError(
                "the array has masked entries, and a mask is not read",
                evidence=[f"{masked:,} of {array.size:,} entries are masked"],
                remedy="Fill them first: array.filled(value).",
            )
        array = array.data
    return np.asarray(array)

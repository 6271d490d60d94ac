"""A dask array as a source: each rectangle is computed from the caller's graph when it is asked for."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from bigsvd.errors import BigsvdError, SourceError, UnsupportedMatrixError
from bigsvd.source.array_axes import ArrayAxes
from bigsvd.source.candidate import why_unusable
from bigsvd.source.entries import decoded_type, show_type, type_caution
from bigsvd.source.rectangle import Box, Span, require_box, require_rectangle, show_place
from bigsvd.source.spec import MatrixSpec
from bigsvd.units import show_shape


class DaskSource:
    """Computes rectangles of a dask array, chunk by chunk, in the thread that asks.

    Parameters
    ----------
    array : dask.array.Array, shape (m, n) or of more axes
        Chunks of known size that hold NumPy arrays.
    """

    def __init__(self, array: Any) -> None:
        self._array = array
        self.spec, self.axes = _spec(array)

    def read(self, rows: Span, columns: Span, out: np.ndarray) -> None:
        """Compute the half-open rectangle rows × columns into `out`; see `Source.read`.

        Raises
        ------
        SourceError
            If the graph fails; names the rectangle.
        UnsupportedMatrixError
            If a chunk is not what the array's metadata promised.
        """
        require_rectangle(self.spec, rows, columns, out)
        self.read_box((rows, columns), out)

    def read_box(self, box: Box, out: np.ndarray) -> None:
        """Compute a half-open box into `out`; see `ArraySource.read_box`."""
        import dask.array as da

        require_box(self.axes.shape, self.spec.dtype, box, out)
        if out.size == 0:
            return
        part = self._array[tuple(slice(*span) for span in box)]
        try:
            sink: Any = _Sink(out)
            da.store(part, sink, lock=False, scheduler="synchronous")
        except BigsvdError:
            raise
        except Exception as error:  # the graph is the caller's and raises what it likes
            raise SourceError(
                "the dask graph failed while one of its rectangles was computed",
                evidence=[show_place(*box), f"{type(error).__name__}: {error}"],
                remedy="Compute that rectangle by itself to see the failure: "
                f"array[{', '.join(f'{start}:{stop}' for start, stop in box)}].compute(scheduler='synchronous')",
            ) from error

    def close(self) -> None:
        """Do nothing: the graph belongs to the caller."""


class _Sink:
    """Takes computed chunks into a buffer, if they are what the metadata promised."""

    def __init__(self, out: np.ndarray) -> None:
        self._out = out

    def __setitem__(self, place: Any, chunk: Any) -> None:
        target = self._out[place]
        if not isinstance(chunk, np.ndarray) or isinstance(chunk, np.ma.MaskedArray):
            raise UnsupportedMatrixError(
                f"a chunk of the dask array is a {type(chunk).__name__}, not a NumPy array",
                remedy="Convert the chunks first: array.map_blocks(numpy.asarray).",
            )
        if chunk.shape != target.shape or not _held(chunk.dtype, target.dtype):
            raise UnsupportedMatrixError(
                "a chunk of the dask array is not what its metadata promised",
                evidence=[
                    f"promised {show_shape(target.shape)} {target.dtype}",
                    f"computed {show_shape(chunk.shape)} {chunk.dtype}",
                ],
                remedy="Give map_blocks the right dtype= and chunks=, or convert with array.astype(…).",
            )
        target[...] = chunk


def _held(computed: np.dtype, promised: np.dtype) -> bool:
    return np.can_cast(computed, promised, "safe") or decoded_type(computed) == promised


def _spec(array: Any) -> tuple[MatrixSpec, ArrayAxes]:
    stored = np.dtype(array.dtype)
    dtype = decoded_type(stored) if stored.names is None else None
    shape = tuple(array.shape)
    known = all(isinstance(side, (int, np.integer)) for side in shape)
    reason = why_unusable(shape, dtype is not None, show_type(stored)) if known else "the size of its chunks is unknown"
    if not reason and not isinstance(array._meta, np.ndarray):
        reason = f"its chunks are {type(array._meta).__name__}, not NumPy arrays"
    if reason or dtype is None:
        raise UnsupportedMatrixError(
            f"the dask array is no matrix that can be decomposed: {reason}",
            evidence=[f"shape {shape}, {show_type(stored)}"],
            remedy="Give an array of numbers of two or more axes; array.compute_chunk_sizes() finds unknown sizes."
            if not known
            else "Give a dask array of two or more axes of NumPy chunks that hold numbers.",
        )
    largest = tuple(int(max(sides)) for sides in array.chunks)
    regular = all(all(side == top for side in sides[:-1]) for sides, top in zip(array.chunks, largest, strict=True))
    cautions = () if regular else ("chunks of unequal size: those that straddle two panels are computed twice",)
    sides = tuple(int(side) for side in shape)
    borders = tuple((0, *map(int, np.cumsum(each))) for each in array.chunks)
    spec = MatrixSpec(
        name="dask array",
        shape=(sides[0], math.prod(sides[1:])),
        dtype=dtype,
        chunks=(largest[0], math.prod(largest[1:])),
        storage="graph",
        encoding=f"dask chunks {'' if regular else 'up to '}{show_shape(largest)}",
        cautions=type_caution(stored) + cautions,
    )
    return spec, ArrayAxes(sides, largest, borders=() if regular else borders)

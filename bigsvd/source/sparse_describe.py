"""A sparse matrix in words: as a candidate of `inspect`, and as what planning knows of it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from bigsvd.errors import DamagedSourceError, UnsupportedMatrixError
from bigsvd.source.axes import Axes
from bigsvd.source.candidate import Candidate, why_unusable
from bigsvd.source.entries import decoded_type
from bigsvd.source.sparse_layout import LayoutError, SparseGroup, SparseLayout, recognise
from bigsvd.units import shell_word, show_count, show_shape


def sparse_type(stored: np.dtype) -> np.dtype | None:
    """Type in which values are handed out: truth values as numbers, half precision in single, else as they are.

    SciPy adds neither truth values nor half precision up.
    """
    dtype = decoded_type(stored)
    if dtype is None or dtype.str[1:] not in ("b1", "f2"):
        return dtype
    return np.dtype("u1" if dtype.kind == "b" else "f4")


def sparse_words(layout: SparseLayout, encoding: str) -> str:
    """How a sparse matrix is stored: the compressed axis, how many entries, their chunks."""
    share = 100 * layout.nonzeros / max(1, math.prod(layout.shape))
    # A figure behind the point, and as many as show something of very few entries.
    percent = f"{share:.1f}" if share >= 0.1 or not share else f"{share:.1g}"
    words = f"sparse by {layout.line}s, {show_count(layout.nonzeros)} entries ({percent} %)"
    return f"{words}, {encoding}" if encoding else words


def describe_sparse(group: SparseGroup, asked: str | None = None) -> tuple[Candidate, SparseLayout | None] | None:
    """Say all that is known of a sparse matrix without reading its entries; None where a group holds none.

    Returns
    -------
    Candidate
        If it cannot be read, with the reason.
    SparseLayout or None
        None where the layout is not known.
    """
    try:
        layout = recognise(group, asked)
    except LayoutError as error:
        return Candidate(group.path, sparse=True, reason=f"{error.reason}. {error.remedy}"), None
    return None if layout is None else (describe_layout(group, layout), layout)


def describe_layout(group: SparseGroup, layout: SparseLayout) -> Candidate:
    """A sparse matrix of a known layout as a candidate."""
    named = (layout.values, layout.indices, layout.pointers)
    parts = [facts for facts in (group.facts(name) for name in named if name) if facts is not None]
    values = parts[0] if layout.values else None
    stored = values.dtype if values is not None else layout.value_type
    dtype = sparse_type(stored) if stored is not None else None
    words = values.words if values is not None else str(dtype)
    reason = why_unusable(layout.shape, dtype is not None, words)
    return Candidate(
        path=group.path,
        shape=layout.shape,
        dtype=words,
        encoding=sparse_words(layout, values.encoding if values is not None else ""),
        stored_bytes=_total([part.stored_bytes for part in parts]),
        decoded_bytes=math.prod(layout.shape) * dtype.itemsize if dtype is not None else None,
        usable=not reason,
        reason=reason,
        samples_hint=layout.hint[0],
        hint_reason=layout.hint[1],
        absent_chunks=_total([part.absent for part in parts]),
        nonzeros=layout.nonzeros,
        sparse=True,
    )


def with_surroundings(said: Candidate, axes: Axes) -> Candidate:
    """Add what was recognised around a sparse matrix; which axis holds the samples, its own layout knows better."""
    found = said.with_axes(axes)
    return replace(found, samples_hint=said.samples_hint, hint_reason=said.hint_reason) if said.samples_hint else found


def surroundings(said: Candidate) -> dict[str, Any]:
    """The same for the spec of an open matrix."""
    return {
        "layout": said.layout,
        "marker": said.marker,
        "samples_hint": said.samples_hint,
        "hint_reason": said.hint_reason,
        "row_names": said.row_names,
        "column_names": said.column_names,
        "cautions": said.remarks,
    }


def _total(counts: Sequence[int | None]) -> int | None:
    """Sum of what is known of every part; None where it is not known of one."""
    return None if None in counts else sum(count or 0 for count in counts)


def opened_layout(group: SparseGroup, name: str, path: str, asked: str | None) -> tuple[Candidate, SparseLayout] | None:
    """Describe a sparse matrix that is to be opened; None where the group holds none.

    Raises
    ------
    UnsupportedMatrixError, DamagedSourceError
        If it holds one that cannot be read.
    """
    try:
        layout = recognise(group, asked)
    except LayoutError as error:
        kind = DamagedSourceError if error.damaged else UnsupportedMatrixError
        raise kind(f"{name} is {error.reason}", remedy=error.remedy) from None
    if layout is None:
        return None
    said = describe_layout(group, layout)
    if not said.usable:
        raise UnsupportedMatrixError(
            f"{name} is no matrix that can be decomposed: {said.reason}",
            evidence=[f"shape {show_shape(said.shape)}, {said.dtype}, {said.encoding}"],
            remedy=f"See what else is there with: bigsvd inspect {shell_word(path)}",
        )
    return said, layout

"""What an array in a file is, whether it can be decomposed, and the choice of one among several."""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

from bigsvd.errors import NoMatrixError, SeveralMatricesError, UnsupportedMatrixError
from bigsvd.source.array_axes import ArrayAxes
from bigsvd.source.axes import LABELS, Axes
from bigsvd.source.names import Names
from bigsvd.source.packing import Packing
from bigsvd.units import shell_word, show_count, show_shape

LISTED = 12


@dataclass(frozen=True)
class Candidate:
    """One array found in a file.

    Attributes
    ----------
    path : str
        Its address inside the file, as ``--matrix`` takes it; empty where the file holds one array only.
    shape : tuple of int
        Empty for scalars and for what is no array.
    dtype : str
        Type of the stored entries in words.
    chunks : tuple of int or None
        Chunk (for sharded arrays: shard), None where the array is stored in one piece.
    encoding : str
        Filters, codecs and layout in words.
    stored_bytes, decoded_bytes : int or None
        Bytes on disk and in memory, where they can be told without reading the array.
    usable : bool
        Whether it can be decomposed.
    reason : str
        If not, why not.
    samples_hint, hint_reason : str or None, str
        As in `MatrixSpec`.
    absent_chunks : int or None
        Chunks that were never written; None where they were not counted.
    outside : tuple of str
        Other files that hold its entries, or to which a link leads, outside the folder of the file.
    axis_names : tuple of str
        Names of the axes, where the file has any.
    sample_axes : tuple of int
        Of an array of more than two axes: those that a marker says hold samples.
    coordinates : tuple of (Names or None)
        Of an array of more than two axes: labels along each; empty where no axis has any.
    nonzeros : int or None
        Entries stored, of a sparse matrix.
    sparse : bool
        Whether it is a group that holds a sparse matrix; its sizes are those of the matrix made dense.
    packing : Packing or None
        How its entries are packed; None where they are not.
    layout, marker, row_names, column_names
        As in `MatrixSpec`.
    remarks : tuple of str
        Weaker signs around it, and why names were not taken.
    level : int or None
        Of an array in an image of several resolutions, which: 0 is the full one, and the others are its copies.
    """

    path: str
    shape: tuple[int, ...] = ()
    dtype: str = ""
    chunks: tuple[int, ...] | None = None
    encoding: str = ""
    stored_bytes: int | None = None
    decoded_bytes: int | None = None
    usable: bool = False
    reason: str = ""
    samples_hint: str | None = None
    hint_reason: str = ""
    absent_chunks: int | None = None
    outside: tuple[str, ...] = ()
    axis_names: tuple[str, ...] = ()
    sample_axes: tuple[int, ...] = ()
    coordinates: tuple[Names | None, ...] = ()
    nonzeros: int | None = None
    sparse: bool = False
    packing: Packing | None = None
    layout: str = ""
    marker: str = ""
    row_names: Names | None = None
    column_names: Names | None = None
    remarks: tuple[str, ...] = ()
    level: int | None = None

    def with_axes(self, axes: Axes) -> Candidate:
        """The same array with what was recognised around it."""
        return replace(
            self, layout=axes.layout, marker=axes.marker, samples_hint=axes.samples_hint, hint_reason=axes.hint_reason,
            axis_names=axes.axis_names, sample_axes=axes.sample_axes, coordinates=axes.coordinates,
            row_names=axes.row_names, column_names=axes.column_names, remarks=axes.remarks,
        )  # fmt: skip

    @property
    def axes(self) -> ArrayAxes:
        """What is known of the axes of an array that lies as one row after the other; chunks are left to its source."""
        samples = self.sample_axes
        if len(self.shape) == 2 and self.samples_hint in ("rows", "columns"):
            samples = (("rows", "columns").index(self.samples_hint),)
        labels = self.coordinates or ((self.row_names, self.column_names) if len(self.shape) == 2 else ())
        return ArrayAxes(self.shape, None, self.axis_names, samples, self.hint_reason, coordinates=labels)

    @property
    def many_axes(self) -> bool:
        """Whether axes must be run together before it is a matrix."""
        return len(self.shape) > 2

    @property
    def option(self) -> str:
        """What to give ``--sample-axes``: as the file says, else the first axis, which is common practice."""
        axes = self.sample_axes or (0,)
        return ",".join((self.axis_names[axis] if self.axis_names else "") or str(axis) for axis in axes)

    @property
    def line(self) -> str:
        """All of it in one line of a list."""
        size = show_shape(self.shape) if self.shape else ""
        words = [part for part in (f"{size} {self.dtype}".strip(), self.reason) if part]
        return f"{self.path or '(the array)'}  " + ": ".join(words)


def why_unusable(shape: tuple[int, ...] | None, numeric: bool, type_words: str) -> str:
    """Reason for which an array can be no matrix; empty where it is one, or can be unfolded to one."""
    if shape is None:
        return "it holds no values"
    if not numeric:
        return f"not numbers but {type_words}"
    if len(shape) < 2:
        return "a single value" if not shape else f"{len(shape)}-D, and a matrix has 2 axes"
    if 0 in shape:
        return "it is empty"
    return ""


def choose(candidates: Sequence[Candidate], where: str, *, unfold: bool = False) -> Candidate:
    """Take the one matrix that a file holds; refuse to guess between several, and say what is there if none is.

    With `unfold`, arrays of more than two axes come before matrices.
    """
    # Smaller copies of an image compete with nothing: they are taken only by their own name.
    usable = [candidate for candidate in candidates if candidate.usable and not candidate.level]
    # Numbers of regions stand beside the image that is meant.
    usable = [candidate for candidate in usable if candidate.layout != LABELS] or usable
    full = [candidate for candidate in usable if sum(side > 1 for side in candidate.shape) > 1]
    # Arrays of more axes stand behind matrices, unless they are asked for.
    matrices = [candidate for candidate in full if candidate.many_axes == unfold] or full
    sparse = [candidate for candidate in candidates if candidate.sparse and not candidate.usable]
    # Files of some programs keep scalars and vectors as 1 × n matrices: they are taken only if there is nothing else.
    choice = matrices or usable
    if len(choice) == 1 and not sparse:
        return choice[0]
    if choice:
        # A matrix whose layout says what its axes are is the likely one; else the largest.
        likely = max(choice, key=lambda candidate: (candidate.samples_hint is not None, candidate.decoded_bytes or 0))
        example = likely.path
        problem = (
            f"{where} holds {show_count(len(choice))} matrices and none was named"
            if len(choice) > 1
            else f"{where} holds one matrix beside sparse groups that cannot be read, and none was named"
        )
        raise SeveralMatricesError(
            problem,
            evidence=listing([*choice, *sparse]),
            remedy=f"Name one: --matrix {shell_word(example)} (in Python: matrix={json.dumps(example)})",
        )
    if len(sparse) == 1:
        # Whoever opens it says what it lacks, and what to do.
        return sparse[0]
    if not candidates:
        raise NoMatrixError(
            f"{where} holds no arrays at all", remedy="Give a file that holds a two-dimensional array of numbers."
        )
    raise UnsupportedMatrixError(
        f"{where} holds no matrix that can be read: a two-dimensional array of numbers is needed",
        evidence=listing(candidates),
        remedy=f"See all of it with: bigsvd inspect {shell_word(where)}",
    )


def listing(candidates: Iterable[Candidate]) -> list[str]:
    """Lines that name candidates, the largest first, the rest counted."""
    ordered = sorted(candidates, key=lambda candidate: (not candidate.usable, -(candidate.decoded_bytes or 0)))
    lines = [candidate.line for candidate in ordered[:LISTED]]
    if len(ordered) > LISTED:
        lines.append(f"… and {show_count(len(ordered) - LISTED)} more")
    return lines

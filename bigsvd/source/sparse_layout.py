"""How a sparse matrix is laid out in a group: which arrays hold it, along which axis it is compressed, its shape.

Two layouts say all of it (AnnData, on disk format: a group ``csr_matrix`` or ``csc_matrix`` with its ``shape``; its
forerunner ``h5sparse_format``, ``h5sparse_shape``), three by their names: feature-barcode files, MATLAB's v7.3, BIOM 2.
Of a bare group what is missing is asked for and never guessed.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, Protocol

import numpy as np

from bigsvd.source.access import SPARSE_FORMATS as FORMATS
from bigsvd.source.hints import Hint
from bigsvd.units import show_count, show_shape

SPARSE_TYPES = {"csr_matrix": "csr", "csc_matrix": "csc"}
_PARTS = ("data", "indices", "indptr")
# Members of a group whose layout is not known.
SPARSE_MEMBERS = (*_PARTS, "shape", "ir", "jc", "row", "col")
# A list that tells a shape has two numbers; longer ones are not read to find out that they tell none.
MOST_NUMBERS = 16
_AXES = ("row", "column")


class LayoutError(Exception):
    """A group that holds a sparse matrix which cannot be read; why, and what to do.

    Attributes
    ----------
    reason, remedy : str
    damaged : bool
        Whether what is there contradicts itself; else it is incomplete, or of a kind not read.
    """

    def __init__(self, reason: str, remedy: str, *, damaged: bool = False) -> None:
        super().__init__(reason)
        self.reason = reason
        self.remedy = remedy
        self.damaged = damaged


@dataclass(frozen=True)
class ArrayFacts:
    """What is known of an array without reading it; `absent` counts chunks that were never written, if they were."""

    shape: tuple[int, ...]
    dtype: np.dtype | None
    words: str
    encoding: str
    stored_bytes: int | None
    absent: int | None = None


class SparseGroup(Protocol):
    """A group of a file that may hold the parts of a sparse matrix."""

    path: str

    def has(self, name: str) -> bool:
        """Whether something of this name lies in the group; nothing is opened."""
        ...

    def root_has(self, name: str) -> bool:
        """Whether something of this name lies at the root of the file."""
        ...

    def attribute(self, name: str) -> Any:
        """An attribute of the group, text as str; None where there is none that can be read."""
        ...

    def root_attribute(self, name: str) -> Any:
        """An attribute of the root of the file."""
        ...

    def facts(self, name: str) -> ArrayFacts | None:
        """What is known of an array in the group; None where the name is no array."""
        ...

    def numbers(self, name: str) -> list[float]:
        """A list of few numbers, read; empty where it is none."""
        ...


@dataclass(frozen=True)
class SparseLayout:
    """Where the parts of a sparse matrix lie in its group.

    Attributes
    ----------
    shape : (int, int)
        Rows and columns.
    compressed_axis : int
        0 where each pointer begins a row, 1 where it begins a column.
    nonzeros : int
        Entries stored.
    values, indices, pointers : str
        Names of the arrays; the first two may be missing where nothing is stored.
    members : tuple of str
        Everything in the group that belongs to the matrix: labels, too.
    hint : (str or None, str)
        Which axis holds the samples, and the reason.
    value_type : numpy.dtype or None
        Type of the values where no array tells it.
    """

    shape: tuple[int, int]
    compressed_axis: int
    nonzeros: int = 0
    values: str = "data"
    indices: str = "indices"
    pointers: str = "indptr"
    members: tuple[str, ...] = (*_PARTS, "shape")
    hint: Hint = (None, "")
    value_type: np.dtype | None = None

    @property
    def lines(self) -> int:
        """Rows or columns along the compressed axis."""
        return self.shape[self.compressed_axis]

    @property
    def line(self) -> str:
        """What one of them is: a row or a column."""
        return _AXES[self.compressed_axis]


def recognise(group: SparseGroup, asked: str | None = None) -> SparseLayout | None:
    """Tell the layout of a sparse matrix.

    Parameters
    ----------
    group : SparseGroup
    asked : {"csr", "csc"}, optional
        What the user says of a group that does not say it.

    Returns
    -------
    SparseLayout or None
        None where the group holds no sparse matrix.

    Raises
    ------
    LayoutError
        If it holds one that cannot be read.
    """
    layout = _told(group, asked)
    return None if layout is None else _checked(group, layout)


def _told(group: SparseGroup, asked: str | None) -> SparseLayout | None:
    if group.attribute("MATLAB_sparse") is not None:
        return _agreed("csc", asked, _matlab(group))
    for mark, shape, formats in (
        ("encoding-type", "shape", SPARSE_TYPES),
        ("h5sparse_format", "h5sparse_shape", dict(zip(FORMATS, FORMATS, strict=True))),
    ):
        said = formats.get(str(group.attribute(mark)))
        if said is not None:
            sides = _sides(group.attribute(shape), f"the attribute {shape}")
            return _agreed(said, asked, SparseLayout(sides, FORMATS.index(said)))
    if group.attribute("h5sparse_format") is not None:
        raise LayoutError(
            f"a sparse group of the format {group.attribute('h5sparse_format')}, and csr and csc are read",
            "Write the group again, converted by SciPy's .tocsr().",
        )
    if _lists(group, ("row", "col", "data")):
        raise LayoutError(
            "a sparse group in coordinates (COO: row, col, data), whose entries lie in no order for panels",
            "Convert it first: scipy.sparse.coo_array((data, (row, col))).tocsr(), and write that.",
        )
    if not _lists(group, _PARTS):
        return None
    if group.has("shape") and group.has("barcodes") and any(map(group.has, ("features", "genes", "gene_names"))):
        return _agreed("csc", asked, _feature_barcode(group))
    return _biom(group, asked) or _bare(group, asked)


def _agreed(said: str, asked: str | None, layout: SparseLayout) -> SparseLayout:
    if asked not in (None, said):
        raise LayoutError(
            f"a sparse group that says it is {said}, but --sparse-format is {asked}", "Leave out --sparse-format."
        )
    return layout


def _lists(group: SparseGroup, names: Sequence[str]) -> bool:
    """Whether a group holds lists of these names; a matrix beside its row and column labels is none."""
    if not all(map(group.has, names)):
        return False
    found = [group.facts(name) for name in names]
    return all(facts is not None and len(facts.shape) == 1 for facts in found)


def _sides(numbers: Any, where: str) -> tuple[int, int]:
    """Rows and columns, if they are two whole numbers."""
    sides = [] if numbers is None else np.asarray(numbers).ravel().tolist()
    if len(sides) != 2 or not all(map(_whole, sides)):
        found = "is missing" if numbers is None else f"is {sides}, and two whole numbers are needed: rows and columns"
        raise LayoutError(
            f"a sparse group whose shape is not known: {where} {found}",
            "Write the group again with its shape.",
            damaged=True,
        )
    return int(sides[0]), int(sides[1])


def _whole(side: Any) -> bool:
    """Whether something is a whole number, as integers or as floats hold them."""
    return isinstance(side, int | float) and math.isfinite(side) and side == int(side) and side >= 0


def _matlab(group: SparseGroup) -> SparseLayout:
    """MATLAB v7.3: the attribute tells the rows, the pointers the columns; an all-zero matrix has only pointers."""
    pointers = group.facts("jc")
    if pointers is None or len(pointers.shape) != 1 or not pointers.shape[0]:
        raise LayoutError("a sparse matrix of MATLAB without jc, its list of pointers", "Save it again.", damaged=True)
    logical = str(group.attribute("MATLAB_class")) == "logical"
    return SparseLayout(
        _sides([*np.ravel(group.attribute("MATLAB_sparse")).tolist(), pointers.shape[0] - 1], "MATLAB_sparse"),
        1,
        indices="ir",
        pointers="jc",
        members=("data", "ir", "jc"),
        hint=("rows", "written by MATLAB, which keeps a sparse matrix as it is: its rows are the rows here"),
        value_type=np.dtype("u1" if logical else "f8"),
    )


def _feature_barcode(group: SparseGroup) -> SparseLayout:
    """Features × barcodes by columns, which is barcodes × features by rows."""
    features, barcodes = _sides(group.numbers("shape"), "the list shape")
    labels = group.facts("barcodes")
    if labels is not None and labels.shape != (barcodes,):
        raise LayoutError(
            f"a feature-barcode matrix of {show_count(barcodes)} barcodes by its shape, and {show_shape(labels.shape)}"
            " by their list",
            "Copy or download the file again.",
            damaged=True,
        )
    return SparseLayout(
        (barcodes, features),
        0,
        members=(*_PARTS, "shape", "barcodes", "features", "genes", "gene_names"),
        hint=("rows", "feature-barcode layout: features × barcodes by columns, read as cells × features by rows"),
    )


def _biom(group: SparseGroup, asked: str | None) -> SparseLayout | None:
    """BIOM 2 (biom-format.org, format 2.1): one matrix twice, by observations and by samples."""
    inside = group.path.strip("/")
    if "biom" not in str(group.root_attribute("format-url")) or inside not in ("observation/matrix", "sample/matrix"):
        return None
    observations, samples = _sides(group.root_attribute("shape"), "the attribute shape of the file")
    by_sample = inside == "sample/matrix"
    layout = SparseLayout((samples, observations) if by_sample else (observations, samples), 0)
    words = "samples × observations" if by_sample else "observations × samples"
    return _agreed(
        "csr", asked, replace(layout, hint=("rows" if by_sample else "columns", f"BIOM layout: {words} by rows"))
    )


def _bare(group: SparseGroup, asked: str | None) -> SparseLayout:
    """A group that says at most its shape."""
    shape = group.attribute("shape")
    if shape is None:
        shape = group.attribute("h5sparse_shape")
    if shape is None and group.has("shape"):
        shape = group.numbers("shape")
    if shape is None:
        raise LayoutError(
            "a sparse group that does not say how many rows and columns the matrix has",
            f'Write it into the file: h5py.File(FILE, "r+")[{group.path!r}].attrs["shape"] = (ROWS, COLUMNS)',
        )
    sides = _sides(shape, "shape")
    pointers = group.facts("indptr")
    count = pointers.shape[0] if pointers is not None else 0
    fitting = [name for name, side in zip(FORMATS, sides, strict=True) if side + 1 == count]
    if len(fitting) == 2 and asked is None:
        raise LayoutError(
            f"a sparse group that does not say whether its {show_count(sides[0])} pointers are of rows or of columns",
            "Add --sparse-format csr if each is a row, --sparse-format csc if each is a column.",
        )
    # Sides of different length tell it by the number of pointers; whatever is asked must fit, too.
    said = asked or (fitting[0] if fitting else "csr")
    return SparseLayout(sides, FORMATS.index(said))


def _checked(group: SparseGroup, layout: SparseLayout) -> SparseLayout:
    """Refuse parts that are missing, of the wrong kind or of the wrong length; count the entries."""
    again = "Copy or download the file again, or write the group again."
    found = {name: group.facts(name) for name in (layout.values, layout.indices, layout.pointers)}
    # Where nothing is stored, MATLAB leaves both lists out.
    if layout.value_type is not None and found[layout.values] is None and found[layout.indices] is None:
        found = {layout.pointers: found[layout.pointers]}
        layout = replace(layout, values="", indices="")
    for name, facts in found.items():
        if facts is None or len(facts.shape) != 1:
            what = "is missing" if facts is None else f"has {len(facts.shape)} axes instead of one"
            raise LayoutError(f"a sparse group of which {name} {what}", again, damaged=True)
        if facts.dtype is None or (name != layout.values and facts.dtype.kind not in "iu"):
            raise LayoutError(
                f"a sparse group of which {name} holds not {'' if name == layout.values else 'whole '}numbers but"
                f" {facts.words}",
                again,
            )
    pointers = found[layout.pointers]
    assert pointers is not None
    if pointers.shape[0] != layout.lines + 1:
        raise LayoutError(
            f"a sparse group of {show_shape(layout.shape)} by {layout.line}s, which needs"
            f" {show_count(layout.lines + 1)} pointers, but {layout.pointers} has {show_count(pointers.shape[0])}",
            again,
            damaged=True,
        )
    if not layout.values:
        return layout
    lengths = [facts.shape[0] for facts in (found[layout.values], found[layout.indices]) if facts is not None]
    if lengths[0] != lengths[1]:
        raise LayoutError(
            f"a sparse group of which {layout.values} has {show_count(lengths[0])} entries and {layout.indices}"
            f" {show_count(lengths[1])}",
            again,
            damaged=True,
        )
    return replace(layout, nonzeros=lengths[0])

"""What a file says of the two axes of a matrix: the layout it follows, which axis holds the samples, their names."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

from bigsvd.source.hints import Hint, word_of
from bigsvd.source.names import Names
from bigsvd.units import show_count

CONTRADICTORY = "contradictory"
LABELS = "OME-Zarr labels"
# Lists of names beside a matrix without a layout: how many neighbours are looked at.
MOST_NEIGHBOURS = 200
# What is quoted of a word and of a marker.
LONGEST_WORD, LONGEST_MARKER = 40, 160
_SAMPLE_LISTS = {"sample", "cell", "barcode", "ob", "observation", "subject"}
_FEATURE_LISTS = {"gene", "feature", "var", "variable", "protein", "probe", "variant", "snp"}
_ROW_LISTS, _COLUMN_LISTS = {"row"}, {"column", "col"}

Vote = tuple[int, str]


@dataclass(frozen=True)
class Axes:
    """What was recognised.

    Attributes
    ----------
    layout, marker : str
        The layout a matrix is taken for, and what in the file says so.
    samples_hint : str or None
        ``rows`` or ``columns`` where markers say which axis holds the samples; `CONTRADICTORY` where they disagree.
    hint_reason : str
        Those markers.
    row_names, column_names : Names or None
        Names of either axis, not read yet.
    remarks : tuple of str
        Weaker signs, and why names were not taken.
    axis_names : tuple of str
        What the axes are called, empty texts for those without a name; empty where none has one.
    sample_axes : tuple of int
        Of an array of more than two axes: the one that markers say holds the samples; empty where they name several.
    coordinates : tuple of (Names or None)
        Of an array of more than two axes: labels along each; empty where no axis has any.
    """

    layout: str = ""
    marker: str = ""
    samples_hint: str | None = None
    hint_reason: str = ""
    row_names: Names | None = None
    column_names: Names | None = None
    remarks: tuple[str, ...] = ()
    axis_names: tuple[str, ...] = ()
    sample_axes: tuple[int, ...] = ()
    coordinates: tuple[Names | None, ...] = ()

    @classmethod
    def of(
        cls,
        layout: str,
        marker: str,
        votes: Sequence[Vote] = (),
        names: Sequence[Names | None] = (None, None),
        *,
        shape: tuple[int, ...],
        remarks: Sequence[str] = (),
    ) -> Axes:
        """Settle what markers say; names whose number is not that of their axis are left out, and that is said."""
        marker = marker if len(marker) <= LONGEST_MARKER else f"{marker[:LONGEST_MARKER]}…"
        if len(shape) != 2:
            return cls(layout, marker)._of_many(votes, names, shape)
        said, kept = list(remarks), []
        for which, found, side in zip(("rows", "columns"), names, shape, strict=True):
            if found is not None and found.count != side:
                counts = f"{show_count(found.count)} names and the matrix has {show_count(side)} {which}"
                said.append(f"names of {which} are not taken: {found.words} holds {counts}")
            kept.append(found if found is not None and found.count == side else None)
        hint, reason = settle(votes)
        return cls(layout, marker, hint, reason, kept[0], kept[1], tuple(said))

    def _of_many(self, votes: Sequence[Vote], names: Sequence[Names | None], shape: tuple[int, ...]) -> Axes:
        """What markers say of an array of more than two axes."""
        found = {axis for axis, _ in votes}
        samples = tuple(found) if len(found) == 1 else ()
        reason = "; ".join(dict.fromkeys(why for _, why in votes)) if samples else ""
        labels: tuple[Names | None, ...] = ()
        if len(names) == len(shape):
            fitting = zip(names, shape, strict=True)
            labels = tuple(one if one is not None and one.count == side else None for one, side in fitting)
        labels = labels if any(label is not None for label in labels) else ()
        return replace(self, hint_reason=reason, sample_axes=samples, coordinates=labels)

    def called(self, names: Sequence[str | None]) -> Axes:
        """The same with names of the axes."""
        return replace(self, axis_names=tuple(name or "" for name in names) if any(names) else ())


def settle(votes: Sequence[Vote]) -> Hint:
    """Axis of the samples by all markers together.

    >>> settle([(0, "axis 0 is 'time'"), (0, "axis 1 is 'gene'")]), settle([(0, "a"), (1, "b")])
    (('rows', "axis 0 is 'time'; axis 1 is 'gene'"), ('contradictory', 'rows: a; columns: b'))
    """
    sides = ("rows", "columns")
    if not votes:
        return None, ""
    if len({axis for axis, _ in votes}) == 1:
        return sides[votes[0][0]], "; ".join(dict.fromkeys(reason for _, reason in votes))
    return CONTRADICTORY, "; ".join(f"{sides[axis]}: {reason}" for axis, reason in votes)


def votes_of_dimensions(names: Sequence[str | None], marker: str) -> list[Vote]:
    """Read the names of the axes; that one holds features says where the samples are only if there are two."""
    votes = []
    for axis, name in enumerate(names):
        kind = word_of(name or "")
        if kind == "samples" or (kind and len(names) == 2):
            votes.append((axis if kind == "samples" else 1 - axis, f"{marker} names axis {axis} {name!r}"))
    return votes


def neighbours(lists: Iterable[tuple[str, Names]], shape: tuple[int, ...]) -> tuple[list[Vote], list[Names | None]]:
    """Take lists of names that lie beside a matrix by their own name and their length.

    Parameters
    ----------
    lists : iterable of (str, Names)
        Lists of text, by the name of the array.
    shape : tuple of int
        Of the matrix; where both sides are equal, nothing is told.

    Returns
    -------
    votes : list of (int, str)
    names : list of Names or None, length 2
    """
    votes: list[Vote] = []
    taken: list[Names | None] = [None, None]
    if len(shape) != 2 or shape[0] == shape[1]:
        return votes, taken
    for name, found in lists:
        kind = list_kind(name)
        if not kind or found.count not in shape:
            continue
        axis = shape.index(found.count)
        if taken[axis] is None:
            taken[axis] = found
        if kind in ("samples", "features"):
            side = ("rows", "columns")[axis]
            reason = f"{found.words} holds {show_count(found.count)} names of {kind}, as many as there are {side}"
            votes.append((axis if kind == "samples" else 1 - axis, reason))
    return votes, taken


@lru_cache(maxsize=4096)
def list_kind(name: str) -> str:
    """What a list is of, by its name: ``samples``, ``features``, ``rows``, ``columns``; empty where it does not say.

    >>> list_kind("gene_names"), list_kind("obsNames"), list_kind("CellID"), list_kind("rownames"), list_kind("notes")
    ('features', 'samples', 'samples', 'rows', '')
    """
    letters = re.sub(r"[^a-z]", "", name.lower())
    stem = re.sub(r"s$", "", re.sub(r"(names?|ids?|labels?)$", "", letters))
    for kind, words in (
        ("samples", _SAMPLE_LISTS),
        ("features", _FEATURE_LISTS),
        ("rows", _ROW_LISTS),
        ("columns", _COLUMN_LISTS),
    ):
        if stem in words:
            return kind
    return ""

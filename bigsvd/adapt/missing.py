"""What becomes of missing entries, once they are counted: filled with means, or their rows or columns left out."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from bigsvd.adapt.census import Census
from bigsvd.adapt.left_out import LeftOutSource, file_places, runs_of
from bigsvd.errors import NonFiniteError, OptionError
from bigsvd.source import MatrixSpec, Missing, Source, check_complete, digest, require_rectangle
from bigsvd.units import show_count, show_shape

POLICIES = ("refuse", "mean", "drop-columns", "drop-rows")
# Entries looked at for NaN at a time.
BLOCK = 2**16
# A matrix of which less than this is left is another matrix.
LEAST_SHARE, LEAST_LINES = 0.01, 2
NAMED = 5


def check_policy(policy: str) -> str:
    """Refuse another word for what becomes of missing entries."""
    if policy not in POLICIES:
        raise OptionError(f"--missing {policy} is not a choice", remedy=f"Choose one of: {', '.join(POLICIES)}.")
    return policy


class MissingSource:
    """A source of which missing entries are to be counted, and then filled or left out.

    Until they are counted (`settled`) it reads as the inner source does.

    Parameters
    ----------
    inner : Source
    policy : str
        ``mean``, ``drop-columns`` or ``drop-rows``.
    """

    def __init__(self, inner: Source, policy: str) -> None:
        self.inner, self.policy = inner, policy
        self._seen: tuple[MatrixSpec, MatrixSpec] | None = None

    def __repr__(self) -> str:
        return f"MissingSource({self.inner!r}, {self.policy!r})"

    @property
    def counts(self) -> bool:
        """Whether there is anything to count: whole numbers are never missing."""
        return self.inner.spec.dtype.kind in "fc"

    @property
    def spec(self) -> MatrixSpec:
        """What is known of the matrix before missing entries are counted."""
        inner = self.inner.spec
        if self._seen is None or self._seen[0] is not inner:
            size = inner.decoded_bytes if self.counts else 0
            missing = Missing(self.policy, inner.shape, size, found=not self.counts)
            self._seen = inner, _noted(inner, missing, self.counts)
        return self._seen[1]

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        """Read the rectangle, missing entries as NaN; see `Source.read`."""
        self.inner.read(rows, columns, out)

    def announce(self, rows: tuple[int, int], columns: tuple[int, int]) -> None:
        """Have the system fetch a rectangle that will be read soon, where the inner source can."""
        _announce(self.inner, rows, columns)

    def require_complete(self) -> None:
        """Look for parts that are absent; see `check_complete`."""
        check_complete(self.inner)

    def close(self) -> None:
        """Release the file."""
        self.inner.close()

    def provisional(self) -> Source:
        """The matrix with zeros for what is missing: as quick to read and multiply, for whoever wants to know that."""
        spec = self.spec
        return FilledSource(self.inner, spec, np.zeros(spec.shape[1], spec.dtype), 1) if self.counts else self

    def settled(self, census: Census) -> Source:
        """The matrix without missing entries.

        Parameters
        ----------
        census : Census
            Of the whole matrix.

        Returns
        -------
        Source
            Where nothing is missing, one that reads and plans as the inner source does.

        Raises
        ------
        NonFiniteError
            If entries are infinite, which is not missing; a feature has no entry to take a mean of; or too little is
            left.
        """
        spec = self.inner.spec
        _refuse_infinite(spec, census)
        counted = Missing(
            self.policy, spec.shape, spec.decoded_bytes, True, census.entries,
            int(np.count_nonzero(census.rows)), int(np.count_nonzero(census.columns)),
        )  # fmt: skip
        if not counted.entries:
            return NotedSource(self.inner, _noted(spec, counted, holds=False))
        if self.policy == "mean":
            _refuse_empty(spec, census)
            means = census.means()
            noted = _noted(spec, counted, holds=True)
            noted = replace(noted, fingerprint=noted.fingerprint and digest(noted.fingerprint, means.tobytes().hex()))
            return FilledSource(self.inner, noted, means.astype(spec.dtype), census.feature_axis)
        axis = 0 if self.policy == "drop-rows" else 1
        per_line = (census.rows, census.columns)[axis]
        kept = np.flatnonzero(per_line == 0)
        _refuse_little(spec, axis, kept, counted)
        dropped = np.flatnonzero(per_line)
        if spec.unfolding is not None:
            dropped = np.sort(file_places(spec.unfolding.side(axis), dropped))
        counted = replace(counted, left_out=runs_of(dropped))
        return LeftOutSource(self.inner, _noted(spec, counted, holds=False), axis, kept)


class NotedSource:
    """A source with another spec.

    Parameters
    ----------
    inner : Source
    spec : MatrixSpec
    """

    def __init__(self, inner: Source, spec: MatrixSpec) -> None:
        self.inner, self.spec = inner, spec

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        """Read the rectangle; see `Source.read`."""
        self.inner.read(rows, columns, out)

    def announce(self, rows: tuple[int, int], columns: tuple[int, int]) -> None:
        """Have the system fetch a rectangle that will be read soon, where the inner source can."""
        _announce(self.inner, rows, columns)

    def close(self) -> None:
        """Release the file."""
        self.inner.close()


class FilledSource(NotedSource):
    """A source whose missing entries take the mean of their feature while they are read.

    Parameters
    ----------
    inner : Source
    spec : MatrixSpec
    means : ndarray, shape (features,), dtype ``spec.dtype``
    feature_axis : int
        Stored axis that holds the features.
    """

    def __init__(self, inner: Source, spec: MatrixSpec, means: np.ndarray, feature_axis: int) -> None:
        super().__init__(inner, spec)
        self.means, self.feature_axis = means, feature_axis

    def read(self, rows: tuple[int, int], columns: tuple[int, int], out: np.ndarray) -> None:
        """Read the rectangle and fill it; see `Source.read`."""
        require_rectangle(self.spec, rows, columns, out)
        self.inner.read(rows, columns, out)
        lines = max(1, BLOCK // max(1, out.shape[1]))
        for start in range(0, out.shape[0], lines):
            part = out[start : start + lines]
            missing = np.isnan(part)
            if missing.any():
                if self.feature_axis == 1:
                    means = self.means[columns[0] : columns[1]]
                else:
                    first = rows[0] + start
                    means = self.means[first : first + len(part), None]
                np.copyto(part, means, where=missing)


def _noted(spec: MatrixSpec, missing: Missing, holds: bool) -> MatrixSpec:
    """The spec with what is known of missing entries."""
    # What it holds and decodes is said before anything is counted and stays, so that a run is planned as it was shown.
    names = (missing.policy, missing.left_out)
    return replace(
        spec, missing=missing, fingerprint=spec.fingerprint and digest(spec.fingerprint, *names),
        held_bytes=spec.held_bytes + (Census.bytes(spec.shape, spec.dtype) if holds else 0),
        decode_bytes=spec.decode_bytes + (max(BLOCK, spec.shape[1]) if holds else 0),
    )  # fmt: skip


def _announce(inner: Source, rows: tuple[int, int], columns: tuple[int, int]) -> None:
    announce: Any = getattr(inner, "announce", None)
    if announce is not None:
        announce(rows, columns)


def _refuse_infinite(spec: MatrixSpec, census: Census) -> None:
    """Infinity is a value that went wrong, not one that is missing."""
    if census.first_infinite is None:
        return
    row, column = census.first_infinite
    place = f"row {show_count(row)}, column {show_count(column)}"
    if spec.unfolding is not None:
        place = spec.unfolding.place(row, column)
    what = "value is" if census.infinite == 1 else "values are"
    raise NonFiniteError(
        f"{spec.name}: {show_count(census.infinite)} {what} infinite, which does not count as missing",
        evidence=[
            f"first at {place} (counted from 0)",
            f"{show_count(census.entries)} others are missing (NaN)",
        ],
        remedy="Replace the infinite values in the file, by NaN if they are to count as missing.",
    )


def _refuse_empty(spec: MatrixSpec, census: Census) -> None:
    """A mean of nothing is none."""
    empty = np.flatnonzero(census.present == 0)
    if len(empty):
        name, axis = ("row", "rows") if census.feature_axis == 0 else ("column", "columns")
        several = len(empty) > 1
        raise NonFiniteError(
            f"{spec.name}: {show_count(len(empty))} {'features have' if several else 'feature has'} no entry at all, so"
            " there is no mean to fill in",
            evidence=[f"{axis if several else name} {_first(empty)} (counted from 0)"]
            if spec.unfolding is None
            else [f"the first at {spec.unfolding.line(census.feature_axis, int(empty[0]))} (counted from 0)"],
            remedy=f"Leave them out of the file, or add --missing drop-{axis}, which leaves out all {axis} that are"
            " not whole.",
        )


def _refuse_little(spec: MatrixSpec, axis: int, kept: np.ndarray, counted: Missing) -> None:
    """Refuse to decompose what hardly anything is left of."""
    name, lines = ("rows", "columns")[axis], spec.shape[axis]
    if _enough(len(kept), lines):
        return
    other, touched = ("columns", counted.columns) if axis == 0 else ("rows", counted.rows)
    would_do = _enough(spec.shape[1 - axis] - touched, spec.shape[1 - axis])
    raise NonFiniteError(
        f"{spec.name}: {show_count(len(kept))} of {show_count(lines)} {name} have no missing entry, too few to"
        f" decompose with --missing {counted.policy}",
        evidence=[
            f"{show_count(counted.entries)} entries of {show_shape(spec.shape)} are missing, in"
            f" {show_count(counted.rows)} rows and {show_count(counted.columns)} columns"
        ],
        remedy=f"Try --missing drop-{other}, or fill with --missing mean." if would_do else "Try --missing mean.",
    )


def _enough(left: int, lines: int) -> bool:
    """Whether so many lines that are left are still the matrix."""
    return left >= max(LEAST_LINES, LEAST_SHARE * lines)


def _first(numbers: np.ndarray) -> str:
    """The first of a list of numbers, the rest counted."""
    more = f" and {show_count(len(numbers) - NAMED)} more" if len(numbers) > NAMED else ""
    return ", ".join(show_count(int(number)) for number in numbers[:NAMED]) + more

"""The plan: every choice that touches the numbers, as a value."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from bigsvd.plan.geometry import Geometry
from bigsvd.plan.memory import MemoryTerm, total
from bigsvd.plan.request import Request
from bigsvd.plan.widths import Widths
from bigsvd.source import MatrixSpec, Names
from bigsvd.units import show_count

FEWEST_PILOT_PANELS = 8


@dataclass(frozen=True)
class Plan:
    """Everything decided before the matrix is read.

    Attributes
    ----------
    request : Request
        The checked options.
    spec : MatrixSpec
    geometry : Geometry
        Axis and panels.
    route : str
        ``direct``, ``gram``, ``tsqr`` or ``krylov``.
    resident : bool
        The matrix is read once and held in its stored type.
    widths : Widths
        Columns of the basis.
    leaves : int
        Segments per wave.
    pilot_panels : tuple of int
        Panels read for the pilot (for other routes: for a first mean); empty for none.
    may_be_single : bool
        Whether the stored type allows products in single precision.
    workers : int
        Threads; changes nothing in the numbers.
    memory : tuple of MemoryTerm
    ceiling : int
        Bytes.
    expected_sweeps : float
        Sweeps expected on average, by which plans are compared.
    nominal_seconds : float
        Their time at nominal rates with two workers.
    nominal_phases : mapping of str to float
        Seconds of every phase at nominal rates, with the workers of this plan, in `nominal_sweeps` sweeps.
    reasons : tuple of (str, str)
        Each choice and why, in words.
    remarks : tuple of str
    waves : tuple of tuple of (int, int)
        Segments of every wave, as ranges of panels.
    result_bytes : int
        What writing the result holds.
    """

    request: Request
    spec: MatrixSpec
    geometry: Geometry
    route: str
    resident: bool
    widths: Widths
    leaves: int
    pilot_panels: tuple[int, ...]
    may_be_single: bool
    workers: int
    memory: tuple[MemoryTerm, ...]
    ceiling: int
    expected_sweeps: float
    nominal_seconds: float = 0.0
    nominal_phases: Mapping[str, float] = field(default_factory=dict)
    reasons: tuple[tuple[str, str], ...] = ()
    remarks: tuple[str, ...] = ()
    waves: tuple[tuple[tuple[int, int], ...], ...] = field(default=())
    result_bytes: int = 0

    @property
    def planned_bytes(self) -> int:
        """Planned peak of the resident size."""
        return total(self.memory)

    @property
    def nominal_sweeps(self) -> int:
        """Sweeps expected, in whole ones."""
        return math.ceil(self.expected_sweeps)

    @property
    def scratch_bytes(self) -> int:
        """Disk that the tall products of the expected sweeps take; each further sweep adds a block."""
        entry = 16 if self.spec.dtype.kind == "c" else 8
        columns = self.widths.start + self.widths.test
        if self.route == "krylov":
            columns += (self.nominal_sweeps - 1) * (self.widths.grow + 2 * self.widths.test)
        if self.spec.unfolding is not None and not self.spec.unfolding.side(self.geometry.axis).in_file_order:
            # Vectors are put into the order of the file on disk.
            columns += self.rank
        return self.geometry.lines * columns * entry

    @property
    def products(self) -> str:
        """``sparse`` where panels are multiplied without their zeros, otherwise ``dense``."""
        return "sparse" if self.geometry.sparse else "dense"

    @property
    def mean_only(self) -> bool:
        """Whether the pilot gives a first mean only, and its panel is held for the first sweep."""
        return mean_is_enough(self.route, self.geometry)

    @property
    def rank(self) -> int:
        """Components wanted; for ``--variance`` the most there may be."""
        assert self.request.rank is not None
        return self.request.rank

    @property
    def samples(self) -> int:
        """Rows of the decomposed matrix."""
        return self.geometry.lines if self.geometry.lines_are_samples else self.geometry.across

    @property
    def features(self) -> int:
        """Columns of the decomposed matrix."""
        return self.geometry.across if self.geometry.lines_are_samples else self.geometry.lines

    @property
    def centred(self) -> bool:
        """Whether features are centred."""
        return self.request.center == "features"

    @property
    def scaled(self) -> bool:
        """Whether features are scaled to unit variance."""
        return self.request.scale == "unit"

    @property
    def along(self) -> str:
        """What panels are ranges of: rows or columns, of an unfolded array samples or features."""
        if self.spec.unfolding is None:
            return ("rows", "columns")[self.geometry.axis]
        return "samples" if self.geometry.lines_are_samples else "features"

    def orientation_words(self) -> str:
        """Which axis holds what, and what is done to it, in words.

        For example ``samples: rows (100,000); features: columns (5,000); centred per column``.
        """
        if self.spec.unfolding is not None:
            done = ["centred per feature" if self.centred else "not centred"]
            done += ["scaled to unit variance (n − 1) per feature"] * self.scaled
            return ", ".join([self.spec.unfolding.words(), *done])
        samples, features = ("rows", "columns") if self.request.samples == "rows" else ("columns", "rows")
        one = features[:-1]
        done = [f"centred per {one}"] if self.centred else ["not centred"]
        if self.scaled:
            done.append(f"scaled to unit variance (n − 1) per {one}")
        counts = show_count(self.samples), show_count(self.features)
        return f"samples: {samples} ({counts[0]}); features: {features} ({counts[1]}); {', '.join(done)}"

    @property
    def sample_names(self) -> Names | None:
        """Names of the samples, not read yet."""
        return self.spec.row_names if self.request.samples == "rows" else self.spec.column_names

    @property
    def feature_names(self) -> Names | None:
        """Names of the features, not read yet."""
        return self.spec.column_names if self.request.samples == "rows" else self.spec.row_names

    def reading_words(self) -> list[str]:
        """How the file was understood: its layout, what settled which axis holds the samples, where names stand."""
        spec, lines = self.spec, []
        if spec.layout and not spec.layout.startswith("plain"):
            lines.append(f"taken for {spec.layout} ({spec.marker})")
        if spec.samples_hint == self.request.samples:
            lines.append(f"samples are its {spec.samples_hint} by the file: {spec.hint_reason}")
        named = (("samples", self.sample_names), ("features", self.feature_names))
        found = [f"{which} by {names.words}" for which, names in named if names is not None]
        return [*lines, *([f"names: {', '.join(found)}"] if found else [])]


def mean_is_enough(route: str, geometry: Geometry) -> bool:
    """Whether a sample would serve for nothing but a first mean."""
    return route != "krylov" or geometry.panels < FEWEST_PILOT_PANELS

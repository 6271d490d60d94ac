"""The factors of a matrix as a value: vectors that stay on disk until sliced, and what is computed from them."""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal, final

import numpy as np

from bigsvd.certify import Certificate
from bigsvd.errors import OptionError, ResultError
from bigsvd.factors.stored_axes import StoredAxes
from bigsvd.factors.strongest import strongest_features
from bigsvd.units import show_count

if TYPE_CHECKING:
    import zarr


@dataclass(frozen=True, eq=False)
class Spectrum:
    """Every singular value that was computed, also those beyond the rank.

    Attributes
    ----------
    value, lower, upper : ndarray, shape (computed,)
        Singular values, largest first, and the ends of their intervals.
    variance : ndarray, shape (computed,)
        σ²/(m−1), the variance of the scores of a centred matrix.
    variance_share, cumulative_share : ndarray, shape (computed,)
        σ²/‖A‖²_F, exact because ‖A‖²_F is that of the whole matrix, and its running sum.
    """

    value: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    variance: np.ndarray
    variance_share: np.ndarray
    cumulative_share: np.ndarray


@final
@dataclass(frozen=True, eq=False, repr=False)
class Factors:
    """A ≈ U·Σ·Vᴴ, where A is the matrix of the file with samples as rows, after its preparation.

    Column j of A is (column j of the file − ``column_mean[j]``) / ``column_scale[j]``. If the file holds samples in
    columns, A is its transpose.

    Attributes
    ----------
    shape : (int, int)
        Samples (rows) m and features (columns) n of A.
    rank : int
        Number of components k.
    left_vectors : zarr.Array, shape (m, k)
        U, a row for each sample. Read from disk when sliced, ``left_vectors[:100]``.
    right_vectors : zarr.Array, shape (n, k)
        V, a row for each feature: column i is v_i itself, not its conjugate.
    singular_values : ndarray, shape (k,)
        Largest first.
    column_mean, column_scale : ndarray, shape (n,)
        What was subtracted from each feature (0 where nothing was), and what it was then divided by (1 likewise).
    spectrum : Spectrum
    certificate : Certificate
    attributes : dict
        Source, preparation, plan, seed, versions and so on, as the run recorded them.
    path : Path or None
        The store; None in memory.
    axes : StoredAxes or None
        Of the array that the matrix was unfolded from: names, labels, mask; None where the file holds a matrix.
    sample_names, feature_names : zarr.Array or None
        Names of the rows of either side as text, read from disk when sliced; None where the file has none.

    Examples
    --------
    Invented numbers, in memory:

    >>> import numpy as np
    >>> from bigsvd.certify import Certificate
    >>> from bigsvd.factors import FactorsWriter
    >>> matrix = np.array([[3.0, 0.0], [0.0, 2.0], [0.0, 0.0]])
    >>> u, s, vh = np.linalg.svd(matrix, full_matrices=False)
    >>> none, yes = np.full(2, np.nan), np.ones(2, dtype=bool)
    >>> certificate = Certificate(
    ...     value=s, lower=s, upper=s, residual=0 * s, state=np.zeros(2, np.int8), index_proved=yes, angle_bound=none,
    ...     tied_first=np.arange(2), tied_last=np.arange(2), null=~yes, below_noise=~yes, missed_bound=0.0,
    ...     missed_how="nothing is left", failure_probability=0.0, rounding=0.0, rounding_how="proved",
    ...     captured_share=1.0, total_energy=13.0, tolerance=1e-3, strict=False, tolerance_met=True,
    ...     verdict="2 of 2 components resolved to 0.001.")
    >>> share = s**2 / np.sum(s**2)
    >>> with FactorsWriter(None, shape=(3, 2), rank=2, dtype=np.dtype("float64")) as writer:
    ...     writer.write_vectors("left", 0, u)
    ...     writer.write_vectors("right", 0, vh.conj().T)
    ...     factors = writer.finish(
    ...         singular_values=s, column_mean=np.zeros(2), column_scale=np.ones(2), certificate=certificate,
    ...         spectrum={"value": s, "lower": s, "upper": s, "variance": s**2 / 2, "variance_share": share,
    ...                   "cumulative_share": np.cumsum(share)}, attributes={"seed": 1})
    >>> factors
    Factors of 3 samples × 2 features, rank 2, float64, in memory
    σ 3 … 2; 100.0 % captured; 2 of 2 components resolved to 0.001.
    >>> np.abs(factors.scores(1)).round(12)
    array([[3.], [0.], [0.]])
    >>> factors.rebuild(slice(0, 2)).round(12) + 0.0
    array([[3., 0.], [0., 2.]])
    """

    shape: tuple[int, int]
    rank: int
    left_vectors: zarr.Array[Any]
    right_vectors: zarr.Array[Any]
    singular_values: np.ndarray
    column_mean: np.ndarray
    column_scale: np.ndarray
    spectrum: Spectrum
    certificate: Certificate
    attributes: dict[str, Any]
    path: Path | None
    axes: StoredAxes | None = None
    sample_names: zarr.Array[Any] | None = None
    feature_names: zarr.Array[Any] | None = None
    _root: tuple[int, ...] = field(default=())

    def scores(self, components: int | Sequence[int] | np.ndarray | None = None) -> np.ndarray:
        """Scores U·Σ: the coordinates of the samples along the components, in the units of A.

        Parameters
        ----------
        components : int or sequence of int, optional
            The first so many components, or the indices of some, from 0. All by default.

        Returns
        -------
        ndarray, shape (m, components)
            In double precision. For a centred matrix each column has mean 0 and variance σ²/(m−1).

        Raises
        ------
        OptionError
            If there is no such component.

        Notes
        -----
        Cost: one read of U; m·components entries and one chunk of U held.
        """
        chosen = self._components(components)
        scores = self._take(self.left_vectors, range(self.shape[0]), chosen)
        scores *= self.singular_values[chosen]
        return scores

    def loadings(self, components: int | Sequence[int] | np.ndarray | None = None) -> np.ndarray:
        """Loadings V·Σ/√(m−1): each right vector times the standard deviation of its scores.

        Unlike the right vectors, which have length 1, loadings carry the units of A; the loadings L of all components
        give the covariance of the features of a centred matrix back: AᴴA/(m−1) = L·Lᴴ.

        Parameters
        ----------
        components : int or sequence of int, optional
            The first so many components, or the indices of some, from 0. All by default.

        Returns
        -------
        ndarray, shape (n, components)
            In double precision.

        Raises
        ------
        OptionError
            If there is no such component, or only one sample, which has no standard deviation.
        """
        chosen = self._components(components)
        if self.shape[0] < 2:
            raise OptionError(
                "loadings need the standard deviation of the scores, and there is 1 sample",
                remedy="Use right_vectors, which need none.",
            )
        deviations = self.singular_values[chosen] / np.sqrt(self.shape[0] - 1)
        loadings = self._take(self.right_vectors, range(self.shape[1]), chosen)
        loadings *= deviations
        return loadings

    def strongest_features(self, count: int = 5) -> list[list[tuple[str, float]]] | None:
        """Names and entries of the features that weigh most in each right vector, the strongest first.

        Parameters
        ----------
        count : int
            Features of each component.

        Returns
        -------
        list of list of (str, float), or None
            By component; of complex vectors the moduli. None where the features have no names.

        Notes
        -----
        Cost: one read of V, one chunk of it held.
        """
        self._refuse_if_replaced()
        return strongest_features(self.right_vectors, self.feature_names, count)

    def rebuild(
        self,
        rows: slice | Sequence[int] | np.ndarray | None = None,
        components: int | Sequence[int] | np.ndarray | None = None,
    ) -> np.ndarray:
        """Rebuild samples from the factors, U·Σ·Vᴴ · scale + mean: back in the units of the file.

        Parameters
        ----------
        rows : slice or sequence of int, optional
            Which samples: a slice, indices from 0 in any order, or one bool for each sample. All by default.
        components : int or sequence of int, optional
            The first so many components, or the indices of some, from 0. All by default.

        Returns
        -------
        ndarray, shape (rows, n)
            Samples as rows, features as columns, in double precision. What the preparation did to whole rows or
            entries before centring is not undone.

        Raises
        ------
        OptionError
            If there is no such row or component.

        Notes
        -----
        Cost: reads the chunks of U that hold the rows, and V; 2·rows·n·components flops, rows·n + n·components entries.
        """
        chosen = self._components(components)
        left = self._take(self.left_vectors, self._rows(rows), chosen)
        left *= self.singular_values[chosen]
        rebuilt: np.ndarray = left @ self._take(self.right_vectors, range(self.shape[1]), chosen).conj().T
        rebuilt *= self.column_scale
        rebuilt += self.column_mean
        return rebuilt

    def images(
        self,
        components: int | Sequence[int] | np.ndarray | None = None,
        side: Literal["features", "samples"] = "features",
    ) -> np.ndarray:
        """Vectors folded back to the axes of the array that the matrix was unfolded from.

        Parameters
        ----------
        components : int or sequence of int, optional
            The first so many components, or the indices of some, from 0. All by default.
        side : {"features", "samples"}
            Right vectors over the axes of the features, or left vectors over those of the samples.

        Returns
        -------
        ndarray, shape (components, *axes)
            In double precision, axes in the order of the file (``axes.features`` or ``axes.samples`` name them); NaN
            where the mask takes no feature.

        Raises
        ------
        OptionError
            If there is no such component or side, or the matrix was not unfolded from an array of more axes.

        Notes
        -----
        Cost: one read of the vectors. Held: twice components × entries of the axes, and one chunk of vectors; ask for
        a few components at a time where that is much.
        """
        if self.axes is None:
            raise OptionError(
                "there are no images: the file holds a matrix, not an array of more axes",
                remedy="Use left_vectors or right_vectors.",
            )
        if side not in ("features", "samples"):
            raise OptionError(f"side={side!r} is not a choice", remedy="Choose one of: features, samples.")
        array = self.right_vectors if side == "features" else self.left_vectors
        return self.axes.fold(self._take(array, range(array.shape[0]), self._components(components)), side)

    def rows_at(self, array: zarr.Array[Any], rows: np.ndarray) -> np.ndarray:
        """Rows of left or right vectors by their indices, in any order, all components; double precision."""
        return self._take(array, rows, np.arange(self.rank))

    def __repr__(self) -> str:
        samples, features = (show_count(side) for side in self.shape)
        ends = " … ".join(f"{value:.6g}" for value in self.singular_values[[0, -1][: self.rank]])
        captured = f"{100 * self.certificate.captured_share:.1f} % captured"
        return (
            f"Factors of {samples} samples × {features} features, rank {self.rank}, {self.left_vectors.dtype}, "
            f"{'in memory' if self.path is None else self.path}\n"
            f"σ {ends}; {captured}; {self.certificate.verdict}"
        )

    def _components(self, asked: int | Sequence[int] | np.ndarray | None) -> np.ndarray:
        """Indices of the components asked for."""
        if asked is None:
            return np.arange(self.rank)
        if isinstance(asked, int | np.integer) and not isinstance(asked, bool):
            if 1 <= asked <= self.rank:
                return np.arange(asked)
            raise OptionError(
                f"components={asked}, but the result has {self.rank}", remedy=f"Ask for 1 to {self.rank} components."
            )
        return _indices(asked, self.rank, "component")

    def _rows(self, asked: slice | Sequence[int] | np.ndarray | None) -> range | np.ndarray:
        """Indices of the rows asked for."""
        if asked is None or isinstance(asked, slice):
            return range(self.shape[0])[asked or slice(None)]
        chosen = np.asarray(asked)
        if chosen.dtype == bool and chosen.shape == (self.shape[0],):
            return np.flatnonzero(chosen)
        return _indices(asked, self.shape[0], "row")

    def _take(self, array: zarr.Array[Any], rows: range | np.ndarray, components: np.ndarray) -> np.ndarray:
        """Read some rows and components in double precision, holding one chunk besides."""
        self._refuse_if_replaced()
        taken = np.empty((len(rows), len(components)), np.result_type(array.dtype, np.float64))
        for target, first, last, inside in _by_chunk(rows, array.chunks[0]):
            taken[target] = np.asarray(array[first : last + 1])[inside][:, components]
        return taken

    def _refuse_if_replaced(self) -> None:
        """Refuse to read one result's chunks with another's metadata."""
        if self.path is not None and root_identity(self.path) != self._root:
            raise ResultError(
                f"{self.path} was replaced or removed since it was opened",
                remedy=f"Open it again: bigsvd.open_factors({str(self.path)!r})",
            )


def root_identity(path: Path) -> tuple[int, ...]:
    """Tell one store from another that takes its name."""
    try:
        status = os.stat(path / "left_vectors" / "zarr.json")
    except OSError:
        return ()
    return status.st_dev, status.st_ino, status.st_mtime_ns


def _indices(asked: Any, count: int, what: str) -> np.ndarray:
    """Check indices that count from 0."""
    chosen = np.asarray(asked)
    if chosen.ndim != 1 or (chosen.size and chosen.dtype.kind not in "iu"):
        raise OptionError(
            f"{what}s are given as a list of indices from 0, not {type(asked).__name__} of {chosen.dtype}",
            evidence=[f"given: {asked!r}"[:200]],
            remedy=f"Give whole numbers such as {what}s=[0, 1].",
        )
    outside = chosen[(chosen < 0) | (chosen >= count)]
    if outside.size:
        raise OptionError(
            f"there is no {what} {outside[0]}: the result has {count:,}, 0 to {count - 1:,}",
            remedy=f"Give indices from 0 to {count - 1}.",
        )
    return chosen.astype(np.intp)


def _by_chunk(
    rows: range | np.ndarray, chunk_rows: int
) -> Iterator[tuple[slice | np.ndarray, int, int, slice | np.ndarray]]:
    """Split rows by the chunk that holds them: where they go, first and last row to read, which of these."""
    if isinstance(rows, range) and rows.step == 1:
        start = rows.start
        while start < rows.stop:
            stop = min(start // chunk_rows * chunk_rows + chunk_rows, rows.stop)
            yield slice(start - rows.start, stop - rows.start), start, stop - 1, slice(None)
            start = stop
        return
    wanted = np.asarray(rows)
    order = np.argsort(wanted, kind="stable")
    chunks = wanted[order] // chunk_rows
    for group in np.split(order, np.flatnonzero(np.diff(chunks)) + 1) if len(order) else ():
        first, last = int(wanted[group].min()), int(wanted[group].max())
        yield group, first, last, wanted[group] - first

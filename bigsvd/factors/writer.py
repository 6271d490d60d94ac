"""Writing a result store: vectors streamed, everything read back and verified, then put in place in one step."""

from __future__ import annotations

import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from bigsvd.certify import Certificate
from bigsvd.errors import DamagedResultError, NonFiniteError, OptionError, ResultError, ResultExistsError
from bigsvd.factors.files import FolderFiles, MemoryFiles, StoreFiles, digest_file
from bigsvd.factors.layout import FORMAT, GROUPS, NAMES, SPECTRUM, VALUES, VECTORS, plan_chunk, plan_grid, store_cost
from bigsvd.factors.lock import OutputLock
from bigsvd.factors.manifest import RESERVED, ROOT, compare_files, root_document
from bigsvd.factors.naming import NameBlocks, WrittenNames, names_digest, write_names
from bigsvd.factors.opening import load_factors
from bigsvd.factors.place import Place, check_output, claim, install
from bigsvd.factors.plain import to_plain
from bigsvd.factors.result import Factors, root_identity
from bigsvd.factors.stored_axes import StoredAxes
from bigsvd.factors.vectors import ZSTD_LEVEL, VectorStream, empty_value
from bigsvd.units import show_bytes

if TYPE_CHECKING:
    import zarr

_TYPES = ("float32", "float64", "complex64", "complex128")


class FactorsWriter:
    """Writes one result; a context manager.

    A result on disk grows as ``OUT.partial`` beside `out` and takes its name when it is complete. Leaving the context
    before `finish` removes it and touches nothing else. Not for several threads at once.

    Parameters
    ----------
    out : Path or None
        The folder to be made; None keeps the same layout in memory.
    shape : (int, int)
        Samples m and features n of the decomposed matrix.
    rank : int
        Components k, 1 ≤ k ≤ min(m, n).
    dtype : numpy.dtype
        Type of the stored vectors: float64 or complex128, or float32 or complex64 to halve the store.
    overwrite : bool
        Whether a bigsvd result at `out` may be replaced.
    lock : OutputLock, optional
        Held by the caller, who lets it go; otherwise the writer takes one for itself.
    axes : StoredAxes, optional
        Of the array that the matrix was unfolded from; rows of vectors are written in the order of that array.
    sample_names, feature_names : NameBlocks, optional
        Names of either side, written on entering. Those that cannot be had are left out, and `names_remarks` says so.

    Raises
    ------
    OptionError
        If shape, rank or type make no result.
    ResultError
        On entering: as `check_output`, and if the device has not the room.

    Notes
    -----
    Memory: see `store_cost`.
    """

    def __init__(
        self,
        out: Path | None,
        *,
        shape: tuple[int, int],
        rank: int,
        dtype: np.dtype,
        overwrite: bool = False,
        lock: OutputLock | None = None,
        axes: StoredAxes | None = None,
        sample_names: NameBlocks | None = None,
        feature_names: NameBlocks | None = None,
    ) -> None:
        self._dtype = np.dtype(dtype)
        if self._dtype.name not in _TYPES:
            raise OptionError(
                f"vectors are stored as {', '.join(_TYPES)}, not {self._dtype}", remedy=f"Choose one: {_TYPES[1]}"
            )
        if not 1 <= rank <= min(shape):
            raise OptionError(
                f"rank {rank} is not between 1 and {min(shape)}, the shorter side of the matrix",
                evidence=[f"shape: {shape}"],
                remedy="Lower --rank.",
            )
        self._shape, self._rank, self._overwrite, self._axes = shape, rank, overwrite, axes
        named = sum(names.count for names in (sample_names, feature_names) if names is not None)
        self._cost = store_cost(shape, rank, self._dtype, named)
        self._place = None if out is None else Place.at(out)
        self._held = lock is not None
        self._lock = lock or (None if self._place is None else OutputLock(self._place.lock, self._place.out))
        self._streams: dict[str, VectorStream] = {}
        self._given = {"row_name": sample_names, "column_name": feature_names}
        self._names: dict[str, WrittenNames] = {}
        self.names_remarks: tuple[str, ...] = ()
        self._claimed = False

    def __enter__(self) -> FactorsWriter:
        if self._place is None or self._lock is None:
            self._begin(MemoryFiles())
            return self
        disk_bytes = self._cost.disk_bytes
        check_output(
            self._place.out, overwrite=self._overwrite, source_path=None, result_bytes=disk_bytes, held=self._held
        )
        if not self._held:
            self._lock.acquire()
        try:
            with self._guarded("start"):
                claim(self._place, overwrite=self._overwrite, result_bytes=disk_bytes)
                self._claimed = True
                self._begin(FolderFiles(self._place.partial))
        except BaseException:
            self._leave()
            raise
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._leave()

    def write_vectors(self, side: Literal["left", "right"], start: int, block: np.ndarray) -> None:
        """Write rows of U or V, in increasing order.

        Parameters
        ----------
        side : {"left", "right"}
            U, a row for each sample; or V, a row for each feature.
        start : int
            The first row of the block: 0 at first, then where the last block ended.
        block : ndarray, shape (rows, k)
            Any number of rows; finite.

        Raises
        ------
        OptionError
            If rows are left out or come twice, or the block has another width or kind.
        NonFiniteError
            If the block holds NaN or infinity.
        ResultError
            If the device refuses, for example because it is full.
        """
        with self._guarded(f"{side} vectors"):
            self._streams[f"{side}_vectors"].write(start, block)

    def finish(
        self,
        *,
        singular_values: np.ndarray,
        column_mean: np.ndarray,
        column_scale: np.ndarray,
        spectrum: Mapping[str, np.ndarray],
        certificate: Certificate,
        attributes: Mapping[str, Any],
    ) -> Factors:
        """Write the rest, read everything back from the device, compare, and put the store in place.

        Parameters
        ----------
        singular_values : ndarray, shape (k,)
            Largest first, not negative.
        column_mean, column_scale : ndarray, shape (n,)
            What was subtracted from each feature, and what it was then divided by.
        spectrum : mapping of str to ndarray, shape (computed,)
            ``value, lower, upper, variance, variance_share, cumulative_share``; computed ≥ k.
        certificate : Certificate
            Of the k components.
        attributes : mapping
            Source, fingerprint, preparation, plan, seed, versions, timings: whatever JSON can hold.

        Returns
        -------
        Factors
            The result, opened from where it stands.

        Raises
        ------
        OptionError
            If a part is missing or has the wrong shape.
        NonFiniteError
            If values, mean or scale hold NaN or infinity.
        DamagedResultError
            If what was read back is not what was written.
        ResultExistsError
            If something appeared at `out` meanwhile that may not be replaced; the complete store is then kept as
            ``OUT.partial``.
        """
        wide = np.result_type(self._dtype, np.float64)
        values = {
            "singular_values": np.asarray(singular_values).astype(np.float64, casting="same_kind"),
            "column_mean": np.asarray(column_mean).astype(wide, casting="same_kind"),
            "column_scale": np.asarray(column_scale).astype(np.float64, casting="same_kind"),
        }
        computed = {name: np.asarray(array, dtype=np.float64) for name, array in spectrum.items()}
        record = self._record(attributes)
        facts = to_plain(certificate.facts(), "certificate")
        self._check_parts(values, computed, certificate)
        parts: dict[str, tuple[np.ndarray, tuple[str, ...]]]
        parts = {name: (array, VALUES[name]) for name, array in values.items()}
        parts |= {f"spectrum/{name}": (computed[name], ("computed",)) for name in SPECTRUM}
        parts |= {f"certificate/{name}": (array, ("component",)) for name, array in certificate.arrays().items()}
        parts |= {} if self._axes is None else self._axes.arrays()
        with self._guarded("last part"):
            for name in GROUPS:
                self._group.create_group(name, attributes=facts if name == "certificate" else {})
            for name, (array, dimensions) in parts.items():
                named = "column_name" if dimensions == ("column",) and "column_name" in self._names else None
                _put(self._group, name, array, dimensions, _coordinates(named))
            self._files.settle()
            record["manifest"] = self._manifest()
            self._read_back({name: array for name, (array, _) in parts.items()})
            root = root_document(record, self._files)
            self._files.replace(ROOT, root)
            self._files.settle(ROOT)
            if b"".join(self._files.pieces(ROOT)) != root:
                raise self._not_what_was_written(ROOT)
        return self._install(record)

    def _begin(self, files: StoreFiles) -> None:
        """Make the store, marked as incomplete, and its two arrays of vectors."""
        import zarr

        self._files = files
        store = files.store(read_only=False)
        unfinished = {"bigsvd": {"format": FORMAT, "complete": False, **self._axes_facts()}}
        self._group = zarr.create_group(store, zarr_format=3, attributes=unfinished)
        for name, names in self._given.items():
            if names is not None:
                self._write_names(name, names)
        for name, rows, named in zip(VECTORS, self._shape, NAMES, strict=True):
            grid = plan_grid(rows, self._rank, self._dtype.itemsize)
            coordinates = _coordinates(named if named in self._names else None)
            self._streams[name] = VectorStream(self._group, files, name, grid, self._dtype, coordinates)

    def _write_names(self, name: str, names: NameBlocks) -> None:
        """Write the names of one side, or note why they cannot be had."""
        written, why = write_names(self._group, name, names)
        if written is not None:
            self._names[name] = written
        self.names_remarks += written.remarks if written is not None else (why,)

    def _axes_facts(self) -> dict[str, Any]:
        """What the root attribute says of axes; nothing where the matrix was one from the start."""
        return {} if self._axes is None else {"axes": self._axes.facts()}

    def _record(self, attributes: Mapping[str, Any]) -> dict[str, Any]:
        """The root attribute, its manifest still missing."""
        given = to_plain(attributes)
        if taken := sorted(set(given) & set(RESERVED)):
            raise OptionError(
                f"the store itself writes {', '.join(taken)}", remedy="Give these attributes other names."
            )
        now = datetime.now(UTC).isoformat(timespec="seconds")
        shape = [*self._shape]
        return {
            "format": FORMAT,
            "complete": True,
            "created": now,
            "shape": shape,
            "rank": self._rank,
            **self._axes_facts(),
            **given,
        }

    def _check_parts(
        self, values: Mapping[str, np.ndarray], spectrum: Mapping[str, np.ndarray], certificate: Certificate
    ) -> None:
        """Refuse a result that is not whole."""
        for name, stream in self._streams.items():
            if not stream.complete:
                raise OptionError(
                    f"{name} end at row {stream.next_row:,} of {stream.grid.rows:,}",
                    remedy=f"Write the block that starts at row {stream.next_row:,} before finishing.",
                )
        lengths = {"singular_values": self._rank, "column_mean": self._shape[1], "column_scale": self._shape[1]}
        for name, array in values.items():
            if array.shape != (lengths[name],):
                raise OptionError(
                    f"{name} has shape {array.shape}, ({lengths[name]},) is needed", remedy="Give one value for each."
                )
            if not np.isfinite(array).all():
                first = int(np.flatnonzero(~np.isfinite(array))[0])
                raise NonFiniteError(
                    f"{name} must be finite, entry {first:,} is {array[first]}",
                    remedy="Run again with --precision double; report it if that does not help.",
                )
        descending = values["singular_values"]
        if descending[-1] < 0 or (np.diff(descending) > 0).any():
            raise OptionError(
                "singular_values must descend and not be negative",
                evidence=[f"given: {np.array2string(descending, threshold=10)}"],
                remedy="Sort the components by decreasing value.",
            )
        shapes = {array.shape for array in spectrum.values()}
        if set(spectrum) != set(SPECTRUM) or len(shapes) != 1 or len(spectrum["value"]) < self._rank:
            raise OptionError(
                f"the spectrum needs {', '.join(SPECTRUM)}, each of one length of at least {self._rank}",
                evidence=[f"{name}: {array.shape}" for name, array in spectrum.items()],
                remedy="Give all six.",
            )
        if wrong := {name: array.shape for name, array in certificate.arrays().items() if array.shape != (self._rank,)}:
            raise OptionError(
                f"the certificate is not of {self._rank} components, as the factors are",
                evidence=[f"{name}: {shape}" for name, shape in wrong.items()],
                remedy=f"Certify {self._rank} components.",
            )

    def _read_back(self, written: Mapping[str, np.ndarray]) -> None:
        """Decode through Zarr what was written, of the vectors the first and last row, and compare."""
        import zarr

        store = self._files.store(read_only=True)

        def compare(name: str, rows: slice, expected: np.ndarray) -> None:
            try:
                found = np.asarray(zarr.open_array(store, path=name, mode="r", zarr_format=3)[rows])
            except (ValueError, RuntimeError, OSError) as error:
                raise self._not_what_was_written(name) from error
            if not np.array_equal(found, expected, equal_nan=expected.dtype.kind in "fc"):
                raise self._not_what_was_written(name)

        for name, array in written.items():
            compare(name, slice(None), array)
        for name, stream in self._streams.items():
            for row, expected in stream.ends.items():
                compare(name, slice(row, row + 1), expected)
        for name, names in self._names.items():
            try:
                intact = names_digest(zarr.open_array(store, path=name, mode="r", zarr_format=3)) == names.digest
            except (ValueError, RuntimeError, OSError) as error:
                raise self._not_what_was_written(name) from error
            if not intact:
                raise self._not_what_was_written(name)

    def _manifest(self) -> dict[str, list[int | str]]:
        """Bytes and digest of every file but the root; those of the vectors must be the ones handed over."""
        manifest = {name: digest_file(self._files, name) for name in self._files.names() if name != ROOT}
        for stream in self._streams.values():
            for name, entry in stream.digests.items():
                if manifest.get(name) != entry:
                    raise self._not_what_was_written(name)
        return {name: [*entry] for name, entry in manifest.items()}

    def _install(self, record: dict[str, Any]) -> Factors:
        """Put the store in place and open it."""
        if self._place is None:
            return load_factors(self._files, record, None, ())
        with self._guarded("exchange"):
            try:
                install(self._place, overwrite=self._overwrite)
            except ResultExistsError as error:
                self._claimed = False
                raise ResultExistsError(
                    f"{error.problem}; it appeared while the result was computed",
                    evidence=[*error.evidence, f"the complete result was kept: {self._place.partial}"],
                    remedy=f'Move it to a name of its own: mv "{self._place.partial}" "{self._place.out}-2"',
                ) from error
            self._claimed = False
        files = FolderFiles(self._place.out)
        compare_files(files, record, contents=False)
        return load_factors(files, record, self._place.out, root_identity(self._place.out))

    def _leave(self) -> None:
        """Remove what is unfinished and let go of the place."""
        if self._claimed and self._place is not None:
            shutil.rmtree(self._place.partial, ignore_errors=True)
            self._claimed = False
        if self._lock is not None and not self._held:
            self._lock.release()

    @contextmanager
    def _guarded(self, doing: str) -> Iterator[None]:
        """Say which result and how many bytes when the device refuses."""
        try:
            yield
        except ResultError:
            raise
        except OSError as error:
            if self._place is None:
                raise
            free = shutil.disk_usage(self._place.out.parent).free
            raise ResultError(
                f"the result {self._place.out} could not be written ({doing}): {error.strerror or error}",
                evidence=[f"it takes up to {show_bytes(self._cost.disk_bytes)}; {show_bytes(free)} are free now"],
                remedy="Make room or choose an --out on another disk, and run again.",
            ) from error

    def _not_what_was_written(self, name: str) -> DamagedResultError:
        """The device gives back other bytes than it took."""
        return DamagedResultError(
            f"{name}: what was read back is not what was written",
            evidence=[f"store: {self._place.partial if self._place else 'in memory'}"],
            remedy="The disk or the memory of this machine is at fault: choose an --out on another disk.",
        )


def _coordinates(name: str | None) -> dict[str, str]:
    """The attribute by which xarray takes names for labels (CF conventions, section 5)."""
    return {"coordinates": name} if name is not None else {}


def _put(
    group: zarr.Group, name: str, values: np.ndarray, dimensions: tuple[str, ...], attributes: Mapping[str, Any]
) -> None:
    """Write one array, every chunk of it, so that an absent one is always a loss."""
    from zarr.codecs import ZstdCodec

    array = group.create_array(
        name,
        shape=values.shape,
        dtype=values.dtype,
        chunks=(plan_chunk(len(values), values[:1].nbytes), *values.shape[1:]),
        compressors=ZstdCodec(level=ZSTD_LEVEL, checksum=True),
        fill_value=empty_value(values.dtype),
        dimension_names=dimensions,
        attributes=dict(attributes),
        chunk_key_encoding={"name": "default", "separator": "."},
        config={"write_empty_chunks": True},
    )
    array[...] = values

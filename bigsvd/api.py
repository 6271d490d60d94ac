"""The whole flow on one page: open, plan, sweep to a certificate, check slices, write. Read this first."""

from __future__ import annotations

import importlib
import sys
import tempfile
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, suppress
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

import numpy as np

from bigsvd import machine
from bigsvd.adapt import MissingSource, Reading, open_adapted
from bigsvd.drive import (
    Deadline,
    Forecast,
    Verification,
    check_slices,
    keep_run,
    make_forecast,
    order_bytes,
    run,
    settle_missing,
    verify_factors,
    write_result,
)
from bigsvd.errors import OptionError
from bigsvd.factors import Factors, check_output, open_factors, plan_names, store_cost
from bigsvd.journal import check_interval, discard_finished
from bigsvd.plan import Request, make_plan
from bigsvd.report import Listeners, watch
from bigsvd.source import MatrixSpec, Source, check_complete, line_counter
from bigsvd.sweep import Control, Listener, one_blas_thread
from bigsvd.units import parse_bytes, parse_deadline, show_bytes

__all__ = ["decompose", "forecast", "open_factors", "open_matrix", "verify"]


def open_matrix(path: Any, matrix: str | None = None, **reading: Any) -> Source:
    """Open a matrix without reading it.

    Parameters
    ----------
    path : path, ndarray, h5py.Dataset, zarr.Array, dask array or sparse matrix of SciPy
        An HDF5 file, a Zarr store, a ``.npy`` file, a sparse matrix in an ``.npz`` file, or an array.
    matrix : str, optional
        Path of the array inside the file; needed where the file holds several.
    **reading
        absent : {"refuse", "fill"}
            Whether chunks that were never written stop the run, or are read as the fill value that the file declares.
        follow_links : bool
            Follow links in the file to other files outside its own folder.
        sample_axes : str, int or sequence of them
            Axes of an array of more than two, by number or name, that become the samples; all others become the
            features. By default the axis that the file names time, frame, sample, cell or the like.
        region : str, mapping or sequence of slices
            Part of an array: ``"time=0:5000:2,y=100:200"``, ``"0:5000:2,100:200,:"``, or slices.
        mask : path or ndarray
            Features to take: an array of bool, or of 0 and 1, over their axes; ``FILE.npy``, ``FILE:PATH``, or its path
            in the same file.
        sparse_format : {"csr", "csc"}
            Whether a sparse group that does not say it is compressed by rows or by columns.
        raw : bool
            Take packed entries as they are stored, whatever attributes say of scale, offset and missing values.
        missing : {"refuse", "mean", "drop-columns", "drop-rows"}
            What becomes of missing entries (NaN). One more read before the sweeps counts them; they then take the mean
            of their feature, or stored columns or rows that have any are left out. Infinity is always refused.
        level : int
            Of an image kept in several resolutions (OME-Zarr), which; 0, the full one, by default.
        row_names, column_names : str
            Names of the stored rows and columns, where the file's own are missing or others are wanted: a path inside
            the file, ``FILE:PATH``, a text file with a name a line, or an .npy file of text.

    Returns
    -------
    Source
        Its ``spec`` says what is there; `decompose` takes it as it takes a path.
    """
    _refuse_unknown({name: value for name, value in reading.items() if name not in Reading.names()}, frozenset())
    if not (hasattr(path, "spec") and hasattr(path, "read")):
        return open_adapted(path, matrix, Reading(**reading))
    if reading:
        raise OptionError(
            f"{', '.join(sorted(reading))} {'was' if len(reading) == 1 else 'were'} given with a matrix that is open"
            " already",
            remedy="Give them to open_matrix instead.",
        )
    return path


def decompose(
    source: Any,
    out: str | Path | None = None,
    *,
    matrix: str | None = None,
    scratch: str | Path | None = None,
    overwrite: bool = False,
    start_over: bool = False,
    save_every: float = 5.0,
    finish_by: str | float | None = None,
    progress: Listener | None = None,
    planned: Callable[[Forecast], None] | None = None,
    command: Sequence[str] = (),
    **options: Any,
) -> Factors:
    """Compute the leading singular factors of a matrix larger than memory, with a certificate.

    The matrix decomposed is A = U Σ Vᴴ, samples × features, after the declared preparation. It is streamed in panels
    under a memory ceiling; nothing of its size is ever held.

    Parameters
    ----------
    source : path, array or Source
        What `open_matrix` takes.
    out : path, optional
        Folder to be made, a Zarr store; None keeps the factors in memory.
    matrix : str, optional
        Path of the array inside the file.
    scratch : path, optional
        Folder for the tall products (samples × a few hundred columns); beside `out` by default.
    overwrite : bool
        Replace an earlier result at `out`, once the new one is complete.
    start_over : bool
        Discard an unfinished run at `out`. Without it the same call goes on where that was cut, with the same bits.
    save_every : float
        Seconds between two savings of what was added up so far; a run that was cut goes on from the last.
    finish_by : str or float, optional
        When the result is to be in place: ``"06:30"``, ``"2026-12-02T06:30"``, a duration such as ``"8h"``, or seconds.
        What the last whole sweep certified is then written, and the journal kept.
    progress : callable, optional
        Called with a `bigsvd.sweep.Progress` at least once per panel, from any thread; raises
        `bigsvd.sweep.StoppedError` to stop the run, which is then kept.
    planned : callable, optional
        Called with the `Forecast` once it is made, before the run begins.
    command : sequence of str, optional
        The command line that asks for this, for the log and for whoever finds the run unfinished.
    **options
        What `open_matrix` takes, and is recorded in the result; and:

        rank : int, default 50
            Components, clipped to min(m, n).
        variance : float
            Instead of a rank: the share of the total variance to reach, with at most `max_rank` (500) components.
        samples : {"rows", "columns"}
            Stored axis that holds the samples; by default as markers in the file say, else rows.
        center : {"features", "none"}
        scale : {"none", "unit"}
            Unit variance with n − 1; constant features stay zero.
        tolerance : float, default 1e-3
            Width of the intervals relative to the values.
        strict : bool
            Components in a bulk of noise count as unmet.
        max_sweeps : int, default 8
        memory : int or str
            Ceiling of the resident size, such as ``"2GiB"``; by default half of what the machine allows.
        workers : int
            Threads; they change the time, not the bits.
        precision : {"auto", "single", "double"}
        route : {"auto", "direct", "gram", "tsqr", "krylov"}
        axis : {"auto", "rows", "columns"}
            Axis the panels run along.
        products : {"auto", "sparse", "dense"}
            Whether panels of a sparse matrix are multiplied without their zeros.
        seed : int, default 0

    Returns
    -------
    Factors
        Opened from where they were written. ``certificate.tolerance_met`` says whether the tolerance was met.

    Raises
    ------
    OptionError, SourceError, NonFiniteError, ResultError
        See `bigsvd.errors`; an earlier result stays as it was. Where a run from a file was cut, OUT.run and OUT.log
        stay beside `out` (docs/overnight.md); nothing else is left behind.

    Examples
    --------
    >>> import numpy as np, bigsvd
    >>> rng = np.random.default_rng(1)
    >>> pool = rng.normal(size=(400, 3)) @ rng.normal(size=(3, 60)) + 5.0
    >>> factors = bigsvd.decompose(pool, rank=3)
    >>> factors.certificate.tolerance_met
    True
    >>> np.allclose(factors.rebuild(), pool)
    True
    """
    started = time.perf_counter()
    reading, options = _split(options)
    opened = open_matrix(source, matrix, **reading)
    own = opened is not source
    target = None if out is None else Path(out)
    listeners = Listeners(progress)
    control = Control(listeners)
    until = None if finish_by is None else parse_deadline(finish_by, time.time())
    check_interval(save_every)
    _load_meanwhile()
    try:
        with _environment() as held_before:
            if target is not None:
                discard_finished(target)
                check_output(target, overwrite=overwrite, source_path=_path_of(source))
            check_complete(opened)
            opened = _settle_missing(opened, options, control)
            foreseen = _foresee(opened, options, control, probe=True)
            plan = foreseen.plan
            if planned is not None:
                planned(foreseen)
            folder = _scratch_folder(scratch, target)
            with (
                keep_run(
                    target, plan, folder, control, own_scratch=scratch is not None, start_over=start_over,
                    save_every=save_every, command=command,
                ) as kept,
                watch(listeners, foreseen, kept, control, command) as watching,
            ):  # fmt: skip
                outcome = run(
                    opened, plan, control, kept.scratch if kept else folder, kept.journal if kept else None,
                    _deadline(until, foreseen),
                )  # fmt: skip
                try:
                    checks = check_slices(
                        opened, plan, outcome.precision, kept.folder.path if kept else folder, control,
                        seed=plan.request.seed,
                    )  # fmt: skip
                    if kept is not None and outcome.out_of_time:
                        kept.folder.stay()
                    factors = write_result(
                        target, outcome, checks, foreseen, control, kept, overwrite=overwrite, started=started,
                        held_before=held_before,
                    )  # fmt: skip
                    watching.take(factors.certificate)
                    return factors
                finally:
                    outcome.scratch.close()
    finally:
        if own:
            opened.close()


def forecast(
    source: Any,
    *,
    matrix: str | None = None,
    progress: Listener | None = None,
    **options: Any,
) -> Forecast:
    """Say what `decompose` would do with the same options, and what it would cost; reads no more than a probe.

    Parameters
    ----------
    source, matrix, progress, **options
        As for `decompose`.

    Returns
    -------
    Forecast
    """
    reading, options = _split(options)
    opened = open_matrix(source, matrix, **reading)
    try:
        with _environment():
            check_complete(opened)
            seen = opened.provisional() if isinstance(opened, MissingSource) else opened
            return _foresee(seen, options, Control(progress), probe=True)
    finally:
        if opened is not source:
            opened.close()


def verify(
    store: str | Path | Factors,
    source: Any = None,
    *,
    matrix: str | None = None,
    memory: int | str | None = None,
    workers: int | None = None,
    seed: int | None = None,
    progress: Listener | None = None,
    **reading: Any,
) -> Verification:
    """Check a result against itself, and with `source` against the matrix in one independent sweep and fresh slices.

    Parameters
    ----------
    store : path or Factors
        A result of `decompose`.
    source : path, array or Source, optional
        The matrix it was made from.
    matrix : str, optional
        Path of the array inside the file.
    memory, workers
        As for `decompose`.
    seed : int, optional
        Of the fresh slices; another than the run's by default.
    progress : callable, optional
    **reading
        What `open_matrix` takes; the same as for the run.

    Returns
    -------
    Verification
    """
    started = time.perf_counter()
    factors = store if isinstance(store, Factors) else open_factors(store)
    control = Control(progress)
    if source is None:
        return verify_factors(factors, None, None, control, Path(tempfile.gettempdir()), seed, started)
    opened = open_matrix(source, matrix, **reading)
    try:
        with _environment():
            check_complete(opened)
            made_with = factors.attributes["request"] | {"rank": factors.rank, "variance": None}
            asked = {**made_with, "memory": memory, "workers": workers}
            request = _request(asked)
            _require_same_reading(factors, opened.spec)
            opened = _settle_missing(opened, asked, control)
            plan = make_plan(
                opened.spec, replace(request, route="krylov", precision="double",
                axis=factors.attributes["plan"]["axis"]), ceiling=_ceiling(request), processors=machine.processors(),
                line_nonzeros=line_counter(opened),
            )  # fmt: skip
            return verify_factors(factors, opened, plan, control, _scratch_folder(None, None), seed, started)
    finally:
        if opened is not source:
            opened.close()


def _load_meanwhile() -> None:
    """Load in the background what is needed only after the first sweep: a quarter of a second less at the start."""

    def load() -> None:
        # Where it is missing or broken, whoever needs it says so.
        for name in ("scipy.special", "zarr"):
            with suppress(Exception):
                importlib.import_module(name)

    if "zarr" not in sys.modules:
        threading.Thread(target=load, name="bigsvd-load", daemon=True).start()


def _deadline(until: float | None, foreseen: Forecast) -> Deadline | None:
    """When to stop reading, so that slices, writing and reading back still fit."""
    if until is None:
        return None
    wall = foreseen.costs().wall
    return Deadline(until, wall["slices"] + wall["store"])


@contextmanager
def _environment() -> Iterator[int]:
    """One BLAS thread, a tuned allocator, a fresh record of the peak; yields the resident size before the run."""
    machine.tune_allocator()
    machine.reset_peak()
    held = machine.resident_bytes()
    with one_blas_thread():
        yield held


def _split(options: dict[str, Any]) -> tuple[dict[str, Any], dict[str, Any]]:
    """Options of reading, and those of the decomposition."""
    return (
        {name: value for name, value in options.items() if name in Reading.names()},
        {name: value for name, value in options.items() if name not in Reading.names()},
    )


def _refuse_unknown(options: dict[str, Any], known: frozenset[str]) -> None:
    """Refuse options that nobody knows."""
    for name in options:
        if name not in known:
            choices = ", ".join(sorted(known | Reading.names()))
            raise OptionError(f"{name!r} is not an option", remedy=f"Choose from: {choices}.")


def _request(options: dict[str, Any]) -> Request:
    """The user's options as a request."""
    _refuse_unknown(options, frozenset(field.name for field in fields(Request)))
    memory = options.get("memory")
    return Request(**{**options, "memory": None if memory is None else parse_bytes(memory)})


def _ceiling(request: Request) -> int:
    """The memory ceiling, bytes."""
    return request.memory if request.memory is not None else machine.default_ceiling()


def _foresee(source: Source, options: dict[str, Any], control: Control, *, probe: bool) -> Forecast:
    """Plan, and predict the time."""
    request = _request(options)
    plan = make_plan(
        source.spec, request, ceiling=_ceiling(request), processors=machine.processors(),
        result_bytes=lambda rank: _result_bytes(source.spec, rank), line_nonzeros=line_counter(source),
    )  # fmt: skip
    free = machine.available_bytes()
    if free < plan.planned_bytes:
        planned = show_bytes(plan.planned_bytes)
        note = f"only {show_bytes(free)} of memory are free now, less than the {planned} planned: expect swapping"
        plan = replace(plan, remarks=(*plan.remarks, note))
    return make_forecast(source, plan, control, probe=probe)


def _settle_missing(source: Source, options: dict[str, Any], control: Control) -> Source:
    """Count missing entries where they are to be filled or left out, once it is known that the options can be met."""
    if not isinstance(source, MissingSource):
        return source
    return settle_missing(source, _foresee(source, options, control, probe=False).plan, control)


def _require_same_reading(factors: Factors, spec: MatrixSpec) -> None:
    """Refuse to compare a result with a matrix whose entries were made otherwise."""
    made, name = factors.attributes["source"], factors.path or "the result"
    policy = (made.get("missing") or {}).get("policy", "refuse")
    now = "refuse" if spec.missing is None else spec.missing.policy
    if policy != now:
        raise OptionError(
            f"{name} was made with --missing {policy}, and the matrix is now read with --missing {now}",
            remedy=f"Add --missing {policy}.",
        )
    decoded = made.get("decoded") or ""
    if decoded != spec.decoded:
        raise OptionError(
            f"{name} was made of entries that were decoded otherwise",
            evidence=[f"then: {decoded or 'as stored'}", f"now: {spec.decoded or 'as stored'}"],
            remedy="Leave out --raw." if decoded else "Add --raw.",
        )


def _result_bytes(spec: MatrixSpec, rank: int) -> int:
    """What writing the result holds in memory."""
    wide = np.dtype(np.complex128 if spec.dtype.kind == "c" else np.float64)
    # Which axis holds the samples does not change the sum over both sides.
    named = [plan_names(names.count, names.held) for names in (spec.row_names, spec.column_names) if names is not None]
    names_bytes = sum(cost.memory_bytes for cost in named)
    return store_cost(spec.shape, rank, wide).memory_bytes + names_bytes + order_bytes(spec)


def _path_of(source: Any) -> Path | None:
    """The file behind what the user gave, for the check that the output does not harm it."""
    return Path(source) if isinstance(source, (str, Path)) else None


def _scratch_folder(scratch: str | Path | None, out: Path | None) -> Path:
    """Where the tall products go."""
    if scratch is not None:
        return Path(scratch).expanduser()
    return Path(tempfile.gettempdir()) if out is None else out.expanduser().resolve().parent

"""What the user asked for, checked against the matrix before anything is read."""

from __future__ import annotations

import math
import numbers
from dataclasses import dataclass, replace
from typing import Literal

from bigsvd.errors import OptionError
from bigsvd.source import CONTRADICTORY, MatrixSpec
from bigsvd.units import show_count, show_shape

DEFAULT_RANK = 50
DEFAULT_MAX_RANK = 500
ROUTES = ("auto", "direct", "gram", "tsqr", "krylov")

Samples = Literal["rows", "columns"]
_CHOICES = {
    "samples": ("rows", "columns", None),
    "center": ("features", "none"),
    "scale": ("unit", "none"),
    "precision": ("auto", "single", "double"),
    "route": ROUTES,
    "axis": ("auto", "rows", "columns"),
    "products": ("auto", "sparse", "dense"),
}


@dataclass(frozen=True)
class Request:
    """Options of a decomposition, as the user gave them.

    Attributes
    ----------
    rank : int or None
        Components wanted; None stands for 50, or for whatever `variance` needs.
    variance : float or None
        Share of the total variance to reach, in (0, 1].
    max_rank : int
        Most components `variance` may lead to; memory is planned for them.
    samples : {"rows", "columns"} or None
        Stored axis that holds the samples; None stands for what markers in the file say, else rows.
    center, scale : str
        ``features`` or ``none``; ``unit`` (variance one, n − 1) or ``none``.
    tolerance : float
        Wanted width of every interval relative to its value.
    strict : bool
        Components in the bulk count as unmet.
    max_sweeps : int
        Most reads of the whole matrix.
    memory : int or None
        Ceiling of the resident size, bytes; None stands for half of what the machine allows.
    workers : int or None
        Threads; None stands for one per processor.
    precision, route, axis : str
        ``auto`` or a choice forced by the user.
    products : str
        ``auto``, or forced: ``sparse`` multiplies panels of a sparse matrix without their zeros, ``dense`` with them.
    panel_lines : int or None
        Lines per panel, forced (tests, slices); None lets the planner decide.
    least_sweeps : int
        Fewest basis sweeps (slices, so that they restart).
    width_limit : int or None
        Most columns of the basis, forced down to the least that works (slices, so that they restart).
    seed : int
        Seed of every random number.
    """

    rank: int | None = None
    variance: float | None = None
    max_rank: int = DEFAULT_MAX_RANK
    samples: Samples | None = None
    center: str = "features"
    scale: str = "none"
    tolerance: float = 1e-3
    strict: bool = False
    max_sweeps: int = 8
    memory: int | None = None
    workers: int | None = None
    precision: str = "auto"
    route: str = "auto"
    axis: str = "auto"
    products: str = "auto"
    panel_lines: int | None = None
    width_limit: int | None = None
    least_sweeps: int = 1
    seed: int = 0


def check_request(request: Request, spec: MatrixSpec) -> tuple[Request, tuple[str, ...]]:
    """Refuse what cannot be done with this matrix, and settle the defaults that follow from it.

    Parameters
    ----------
    request : Request
    spec : MatrixSpec

    Returns
    -------
    request : Request
        With rank clipped to min(m, n) and samples settled.
    remarks : tuple of str
        What was changed, in words.

    Raises
    ------
    OptionError
        If an option is out of range or contradicts another, or markers in the file contradict each other.
    """
    for name, allowed in _CHOICES.items():
        if getattr(request, name) not in allowed:
            choices = ", ".join(choice for choice in allowed if choice)
            raise OptionError(f"--{name} {getattr(request, name)} is not a choice", remedy=f"Choose one of: {choices}.")
    _check_numbers(request)
    remarks = []
    least = min(spec.shape)
    if request.rank is not None and request.variance is not None:
        raise OptionError("--rank and --variance were both given", remedy="Give one of them.")
    rank = request.rank if request.rank is not None else DEFAULT_RANK
    if request.variance is not None:
        rank = request.max_rank
    if rank > least:
        if request.rank is not None:
            remarks.append(
                f"rank clipped from {show_count(rank)} to {show_count(least)},"
                f" all that a {show_shape(spec.shape)} matrix has"
            )
        rank = least
    samples, said = _settle_samples(request, spec)
    return replace(request, rank=rank, samples=samples), (*remarks, *said)


def _check_numbers(request: Request) -> None:
    """Refuse numbers out of range."""
    whole = {
        "rank": (request.rank, 1),
        "max_rank": (request.max_rank, 1),
        "max_sweeps": (request.max_sweeps, 1),
        "workers": (request.workers, 1),
        "panel_lines": (request.panel_lines, 1),
        "memory": (request.memory, 1),
        "seed": (request.seed, 0),
    }
    for name, (value, least) in whole.items():
        option = f"--{name.replace('_', '-')}"
        if value is None and name not in ("max_rank", "max_sweeps", "seed"):
            continue
        if not isinstance(value, numbers.Integral) or isinstance(value, bool) or value < least:
            raise OptionError(
                f"{option} must be a whole number of at least {least}, not {value!r}",
                remedy=f"Try {option} {max(least, 20)}.",
            )
    shares = {"variance": request.variance, "tolerance": request.tolerance}
    for name, share in shares.items():
        if share is None and name == "variance":
            continue
        if (
            not isinstance(share, numbers.Real)
            or isinstance(share, bool)
            or not math.isfinite(share)
            or not 0 < share <= 1
        ):
            example = "0.95" if name == "variance" else "1e-3"
            raise OptionError(
                f"--{name} must lie above 0 and at most 1, not {share!r}", remedy=f"Try --{name} {example}."
            )


def _settle_samples(request: Request, spec: MatrixSpec) -> tuple[Samples, list[str]]:
    """What the user says, else what the file says, else rows; with a remark where the user overrules the file."""
    asked, hint = request.samples, spec.samples_hint
    if spec.unfolding is not None:
        settled: Samples = "rows" if spec.unfolding.samples_are_rows else "columns"
        if asked not in (None, settled):
            raise OptionError(
                f"--samples {asked} was given, and the samples of this array are axes of it",
                evidence=[spec.unfolding.words()],
                remedy="Leave out --samples; --sample-axes says which axes become the samples.",
            )
        return settled, []
    if asked is not None:
        overruled = hint in ("rows", "columns") and hint != asked
        said = f"--samples {asked} was given; the file says that samples are its {hint} ({spec.hint_reason})"
        return asked, [said] if overruled else []
    if hint == CONTRADICTORY:
        raise OptionError(
            f"{spec.name}: markers in the file contradict each other about which axis holds the samples",
            evidence=[spec.hint_reason],
            remedy="Say it: --samples rows or --samples columns.",
        )
    return "columns" if hint == "columns" else "rows", []

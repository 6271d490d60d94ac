"""Options that several commands share, and what they mean in words."""

from __future__ import annotations

import shutil
import sys
from collections.abc import Callable, Iterable
from typing import Any, TypeVar

import click

Command = TypeVar("Command", bound=Callable[..., Any])
# Widest lines that are still easy to read, and the width where there is no terminal to ask.
MOST_WIDTH, DEFAULT_WIDTH = 120, 100


def text_width() -> int:
    """Cells of a line of output."""
    return min(shutil.get_terminal_size((DEFAULT_WIDTH, 24)).columns, MOST_WIDTH)


def print_lines(lines: Iterable[str], *, err: bool = False) -> None:
    """Print lines of text."""
    click.echo("\n".join(lines), err=err)


def given(options: dict[str, Any]) -> dict[str, Any]:
    """Options that were set; the api knows the defaults of the others."""
    return {name: value for name, value in options.items() if value is not None}


def progress_stream() -> Any:
    """Where progress and all that is not the answer goes."""
    return sys.stderr


def output_options(command: Command) -> Command:
    """Add ``--quiet`` and ``--json``."""
    command = click.option(
        "--json", "as_json", is_flag=True, help="Print one JSON object (docs/json.md) instead of text."
    )(command)
    return click.option("--quiet", is_flag=True, help="No progress.")(command)


def matrix_option(command: Command) -> Command:
    """Add ``--matrix``."""
    text = "The array inside FILE, as inspect lists it; needed where FILE holds several."
    return click.option("--matrix", metavar="PATH", help=text)(command)


def links_option(command: Command) -> Command:
    """Add ``--follow-links``."""
    text = "Follow links in FILE to other files outside its own folder; inspect lists them."
    return click.option("--follow-links", is_flag=True, default=None, help=text)(command)


def sparse_option(command: Command) -> Command:
    """Add ``--sparse-format``."""
    text = "Whether a sparse group that does not say it is compressed by rows (csr) or by columns (csc)."
    return click.option("--sparse-format", type=click.Choice(["csr", "csc"]), help=text)(command)


def level_option(command: Command) -> Command:
    """Add ``--level``."""
    text = "Of an image kept in several resolutions (OME-Zarr), which one.  [default: 0, the full one]"
    return click.option("--level", type=int, metavar="N", help=text)(command)


def names_options(command: Command) -> Command:
    """Add ``--row-names`` and ``--column-names``."""
    text = "Names of the stored columns, likewise."
    command = click.option("--column-names", metavar="PLACE", help=text)(command)
    text = (
        "Names of the stored rows: a path inside FILE, OTHER:PATH, a text file with a name a line, or an .npy file."
        "  [default: where the layout of FILE keeps them]"
    )
    return click.option("--row-names", metavar="PLACE", help=text)(command)


def reading_options(command: Command) -> Command:
    """Add the options that decide what the entries of FILE are; see `bigsvd.adapt.Reading`."""
    for option in reversed(_AXES):
        command = option(command)
    command = sparse_option(command)
    raw = "Take packed entries as stored: apply no scale_factor, add_offset, _FillValue or other such attribute."
    command = click.option("--raw", is_flag=True, default=None, help=raw)(command)
    gaps = (
        "What becomes of missing entries (NaN): stop; take the mean of their feature; leave out the stored columns, or"
        " rows, that have any. Counted in one more read.  [default: refuse]"
    )
    choices = click.Choice(["refuse", "mean", "drop-columns", "drop-rows"])
    command = click.option("--missing", type=choices, help=gaps)(command)
    text = "What to do with chunks that were never written: stop, or read the fill value.  [default: refuse]"
    return click.option("--absent", type=click.Choice(["refuse", "fill"]), help=text)(
        links_option(level_option(command))
    )


def machine_options(command: Command) -> Command:
    """Add ``--memory`` and ``--workers``."""
    workers = "Threads; they change the time, not the bits.  [default: one per processor, as memory allows]"
    command = click.option("--workers", type=int, metavar="N", help=workers)(command)
    memory = "Ceiling of the resident size, such as 2GiB.  [default: half of what the machine allows]"
    return click.option("--memory", metavar="SIZE", help=memory)(command)


def decomposition_options(command: Command) -> Command:
    """Add everything that decides what is computed and how; the same for ``plan`` and ``decompose``."""
    for option in reversed(_DECOMPOSITION):
        command = option(command)
    return command


def _choice(name: str, choices: str, text: str) -> Callable[[Any], Any]:
    """An option that takes one of a few words."""
    return click.option(name, type=click.Choice(choices.split()), help=text)


def _number(name: str, kind: type, metavar: str, text: str) -> Callable[[Any], Any]:
    """An option that takes a number."""
    return click.option(name, type=kind, metavar=metavar, help=text)


def _text(name: str, metavar: str, text: str) -> Callable[[Any], Any]:
    """An option that takes text."""
    return click.option(name, metavar=metavar, help=text)


_AXES = (
    _text(
        "--sample-axes", "AXES", "Axes of a stack that become the samples, by number or name: 0 or time or time,z.  "
        "[default: the one the file names so]"
    ),
    _text("--region", "PART", "Part of a stack: time=0:5000:2,y=100:200, or by position 0:5000:2,100:200,:"),
    _text("--mask", "PATH", "Features to take, true or 1: FILE.npy, FILE:PATH, or an array in the same file."),
)  # fmt: skip
_DECOMPOSITION: tuple[Callable[[Any], Any], ...] = (
    matrix_option,
    reading_options,
    names_options,
    _number("--rank", int, "K", "Components to compute.  [default: 50]"),
    _number("--variance", float, "SHARE", "Instead of a rank: the share of the total variance to reach, such as 0.95."),
    _number("--max-rank", int, "K", "Most components that --variance may lead to.  [default: 500]"),
    _choice("--samples", "rows columns", "Stored axis that holds the samples.  [default: as the file says, else rows]"),
    _choice("--center", "features none", "Subtract the mean of every feature, as PCA does.  [default: features]"),
    _choice("--scale", "unit none", "Divide every feature by its standard deviation (n − 1).  [default: none]"),
    _number("--tolerance", float, "T", "Wanted width of the intervals relative to their values.  [default: 1e-3]"),
    click.option("--strict", is_flag=True, default=None, help="Count components in a bulk of noise as not met, too."),
    _number("--max-sweeps", int, "N", "Most reads of the whole matrix.  [default: 8]"),
    machine_options,
    _choice("--precision", "auto single double", "Of the products; auto: single where it is safe.  [default: auto]"),
    _choice("--route", "auto direct gram tsqr krylov", "Method.  [default: auto]"),
    _choice("--axis", "auto rows columns", "Axis along which the file is cut into panels.  [default: auto]"),
    _choice("--products", "auto sparse dense", "Leave the zeros of a sparse matrix out of products?  [default: auto]"),
    _number("--seed", int, "N", "Of every random number.  [default: 0]"),
)

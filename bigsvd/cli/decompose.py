"""``bigsvd decompose``: from a file to certified factors."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from bigsvd.cli.options import decomposition_options, given, output_options, print_lines, progress_stream, text_width
from bigsvd.cli.program import MET, NOT_MET, print_json

if TYPE_CHECKING:
    from bigsvd.drive import Forecast


@click.command(short_help="Compute factors of a matrix and prove how good they are.")
@click.argument("file")
@click.option("--out", required=True, metavar="OUT.zarr", help="Folder to be made for the result, a Zarr store.")
@decomposition_options
@click.option(
    "--scratch",
    type=click.Path(exists=True, file_okay=False, writable=True),
    metavar="DIR",
    help="Where intermediate products go.  [default: beside OUT.zarr]",
)
@click.option("--overwrite", is_flag=True, help="Replace an earlier result, once the new one is complete.")
@output_options
def decompose(file: str, out: str, overwrite: bool, quiet: bool, as_json: bool, **options: Any) -> int:
    """Compute the leading singular factors of a matrix in FILE and write them to OUT.zarr.

    The matrix is read panel by panel and may be far larger than memory: the process stays below --memory. At the end
    stand a table of components with the interval each value is proved to lie in, the verdict, and the line that opens
    the result.

    \b
    Examples:
      bigsvd decompose night.h5 --out night_factors.zarr --rank 20 --memory 2GiB
      bigsvd decompose cells.zarr --matrix counts --out cells_factors.zarr --variance 0.9

    \b
    Exit status:
      0    finished, tolerance met
      2    wrong usage or input; nothing was written
      3    finished, tolerance not met: the result says of which components
      1    anything else;  130, 143: interrupted, terminated; nothing was written

    Results describe the numbers stored in the file. For clinical or safety use follow your local rules and have them
    judged by people qualified to do so.
    """
    from pathlib import Path

    from bigsvd import api
    from bigsvd.report import announcement, decomposition_facts, show_progress, summary_lines

    with show_progress(progress_stream(), quiet=quiet) as reporter:

        def planned(forecast: Forecast) -> None:
            if reporter is not None:
                reporter.say([*announcement(forecast, text_width()), ""])

        factors = api.decompose(file, out, overwrite=overwrite, progress=reporter, planned=planned, **given(options))
    if as_json:
        print_json(decomposition_facts(factors.certificate, factors.attributes, factors.path))
    else:
        print_lines(summary_lines(factors.certificate, factors.attributes, Path(out), text_width()))
    return MET if factors.certificate.tolerance_met else NOT_MET

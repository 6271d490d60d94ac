"""``bigsvd decompose``: from a file to certified factors."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from bigsvd.cli.options import decomposition_options, given, output_options, print_lines, progress_stream, text_width
from bigsvd.cli.program import MET, NOT_MET, print_json
from bigsvd.cli.stops import orderly_stops

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
@click.option("--start-over", is_flag=True, help="Discard an unfinished run at OUT.zarr instead of going on with it.")
@click.option(
    "--save-every",
    type=float,
    metavar="SECONDS",
    help="Time between two savings of what was summed, so that a run that was cut goes on.  [default: 5]",
)
@click.option(
    "--finish-by",
    metavar="TIME",
    help="Have a result in place by then, such as 06:30 or 8h: what the last whole sweep proved.",
)
@output_options
@click.pass_obj
def decompose(words: list[str], /, file: str, out: str, quiet: bool, as_json: bool, **options: Any) -> int:
    """Compute the leading singular factors of a matrix in FILE and write them to OUT.zarr.

    The matrix is read panel by panel and may be far larger than memory: the process stays below --memory. At the end
    stand a table of components with the interval each value is proved to lie in, the verdict, and the line that opens
    the result.

    A run that was stopped, killed or cut off goes on where it was when the same line is typed again, and ends with the
    same bits; "bigsvd plan OUT.zarr.run" tells where it stands. OUT.zarr.log says what happened when.

    \b
    Examples:
      bigsvd decompose night.h5 --out night_factors.zarr --rank 20 --memory 2GiB
      bigsvd decompose cells.zarr --matrix counts --out cells_factors.zarr --variance 0.9
      bigsvd decompose cells.h5 --out cells_factors.zarr --rank 50 --finish-by 06:30

    \b
    Exit status:
      0    finished, tolerance met
      3    finished, tolerance not met, or stopped at --finish-by: the result
           says which components are not known well enough
      2    wrong usage or input: mend what the message names
      1    anything else, such as a full disk: the message names it; the same
           line goes on
      130, 143    Ctrl-C, SIGTERM: stopped; the same line goes on
    What to do after each, and lines for cron, systemd and batch schedulers:
    docs/overnight.md.

    Results describe the numbers stored in the file. For clinical or safety use follow your local rules and have them
    judged by people qualified to do so.
    """
    from pathlib import Path

    from bigsvd import api
    from bigsvd.report import announcement, decomposition_facts, show_progress, summary_lines

    with show_progress(progress_stream(), quiet=quiet) as reporter, orderly_stops(reporter, out, words) as stops:

        def planned(forecast: Forecast) -> None:
            if reporter is not None:
                reporter.say([*announcement(forecast, text_width()), ""])

        factors = api.decompose(file, out, progress=stops, planned=planned, command=words, **given(options))
    strongest = factors.strongest_features()
    if as_json:
        print_json(decomposition_facts(factors.certificate, factors.attributes, factors.path, strongest))
    else:
        print_lines(summary_lines(factors.certificate, factors.attributes, Path(out), text_width(), strongest))
    return MET if factors.certificate.tolerance_met else NOT_MET

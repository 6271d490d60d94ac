"""``bigsvd verify``: whether a result still holds, by itself and against its matrix."""

from __future__ import annotations

from typing import Any

import click

from bigsvd.cli.options import (
    given,
    machine_options,
    matrix_option,
    output_options,
    print_lines,
    progress_stream,
    reading_options,
    text_width,
)
from bigsvd.cli.program import MET, NOT_MET, print_json, report_error
from bigsvd.errors import DamagedResultError


@click.command(short_help="Check a result, by itself and against its matrix.")
@click.argument("store", metavar="OUT.zarr")
@click.argument("file", required=False)
@matrix_option
@reading_options
@machine_options
@click.option("--seed", type=int, metavar="N", help="Of the fresh slices.  [default: another than the run's]")
@output_options
def verify(store: str, file: str | None, quiet: bool, as_json: bool, **options: Any) -> int:
    """Check a result: its checksums and factors, and with FILE the factors against the matrix.

    With FILE the matrix is read once more in double precision, by a sweep that knows nothing of how the factors were
    found, and fresh slices are decomposed exactly and compared.

    \b
    Example:
      bigsvd verify night_factors.zarr night.h5

    \b
    Exit status:
      0    agrees
      3    does not agree, or is damaged
      2    wrong usage or input, such as a folder that is no result
    """
    from bigsvd import api
    from bigsvd.report import show_progress, verification_facts, verification_lines

    try:
        with show_progress(progress_stream(), quiet=quiet) as listener:
            found = api.verify(store, file, progress=listener, **given(options))
    except DamagedResultError as error:
        # The very thing this command is asked about, so it is an answer.
        report_error(error, as_json=as_json)
        return NOT_MET
    if as_json:
        print_json(verification_facts(store, file, found))
    else:
        print_lines(verification_lines(store, file, found, text_width()))
    return MET if found.agrees else NOT_MET

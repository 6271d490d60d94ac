"""``bigsvd plan``: what would be done, and what it would cost."""

from __future__ import annotations

from typing import Any

import click

from bigsvd.cli.options import decomposition_options, given, output_options, print_lines, progress_stream, text_width
from bigsvd.cli.program import print_json


@click.command(short_help="Say what decompose would do, and what it would cost.")
@click.argument("file")
@decomposition_options
@output_options
def plan(file: str, quiet: bool, as_json: bool, **options: Any) -> None:
    """Say what decompose would do with FILE, and what it would cost.

    Prints which axis holds the samples, every choice with its reason, the memory term by term against the ceiling,
    the bytes to read and the time. Of a matrix of 64 MB or more a few panels are read to predict the time; nothing is
    written.

    \b
    Example:
      bigsvd plan night.h5 --matrix /frames --rank 20 --memory 2GiB
    """
    from bigsvd import api
    from bigsvd.report import plan_facts, plan_lines, show_progress

    with show_progress(progress_stream(), quiet=quiet) as listener:
        forecast = api.forecast(file, progress=listener, **given(options))
    if as_json:
        print_json(plan_facts(forecast))
    else:
        print_lines(plan_lines(forecast, text_width()))

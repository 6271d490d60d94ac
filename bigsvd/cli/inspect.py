"""``bigsvd inspect``: what a file holds."""

from __future__ import annotations

import click

from bigsvd.cli.options import output_options, print_lines, text_width
from bigsvd.cli.program import print_json


@click.command(short_help="List every matrix in a file, and what to type next.")
@click.argument("file")
@output_options
def inspect(file: str, quiet: bool, as_json: bool) -> None:
    """List every matrix in FILE, and what to type to decompose it.

    Shows path, shape, type, chunks, filters, decoded and stored size of each; of arrays that are no matrix, why not.
    Reads metadata only.

    \b
    Example:
      bigsvd inspect night.h5
    """
    from bigsvd.report import survey_facts, survey_lines
    from bigsvd.source import survey

    found = survey(file)
    if as_json:
        print_json(survey_facts(file, found))
    else:
        print_lines(survey_lines(file, found, text_width()))

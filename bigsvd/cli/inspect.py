"""``bigsvd inspect``: what a file holds."""

from __future__ import annotations

from typing import Any

import click

from bigsvd.cli.options import given, links_option, output_options, print_lines, sparse_option, text_width
from bigsvd.cli.program import print_json


@click.command(short_help="List every matrix in a file, and what to type next.")
@click.argument("file")
@links_option
@sparse_option
@output_options
def inspect(file: str, quiet: bool, as_json: bool, **options: Any) -> None:
    """List every matrix in FILE, and what to type to decompose it.

    Shows path, shape, type, chunks, filters, decoded and stored size of each; of arrays that are no matrix, why not.
    Reads metadata only. Links to files outside the folder of FILE are listed with the place that they lead to.

    \b
    Example:
      bigsvd inspect night.h5
    """
    from bigsvd.report import survey_facts, survey_lines
    from bigsvd.source import Access, survey

    found = survey(file, Access(**given(options)))
    if as_json:
        print_json(survey_facts(file, found))
    else:
        print_lines(survey_lines(file, found, text_width()))

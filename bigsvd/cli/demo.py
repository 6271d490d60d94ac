"""``bigsvd demo``: invented data to try the program on."""

from __future__ import annotations

from pathlib import Path

import click

from bigsvd.cli.options import output_options, print_lines, progress_stream, text_width
from bigsvd.cli.program import print_json


@click.command(short_help="Write two invented matrices to try the program on.")
@click.argument("folder", metavar="DIR", type=click.Path(file_okay=False))
@output_options
def demo(folder: str, quiet: bool, as_json: bool) -> None:
    """Write two invented matrices with known structure into DIR, to try the program on.

    An imaging stack (HDF5, frames × pixels) and a matrix of water samples (Zarr), 1.6 GB decoded each, 2.1 GB on disk
    together, within two minutes. Nothing in them was measured.

    \b
    Example:
      bigsvd demo demo-data
    """
    from bigsvd.demo import INVENTED, write_demo
    from bigsvd.report import demo_facts, demo_lines, show_progress
    from bigsvd.sweep import Progress

    with show_progress(progress_stream(), quiet=quiet) as listener:

        def tell(name: str, done: int, total: int) -> None:
            if listener is not None:
                listener(Progress(f"writing {name}", 0, done, total))

        files = write_demo(Path(folder), progress=tell)
    if as_json:
        print_json(demo_facts(INVENTED, files))
    else:
        print_lines(demo_lines(INVENTED, files, text_width()))

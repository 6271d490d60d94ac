"""``bigsvd plan``: what would be done, and what it would cost."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from bigsvd.cli.options import decomposition_options, given, output_options, print_lines, progress_stream, text_width
from bigsvd.cli.program import print_json
from bigsvd.errors import ResultError


@click.command(short_help="Say what decompose would do and cost, or where a stopped run stands.")
@click.argument("file")
@decomposition_options
@output_options
def plan(file: str, quiet: bool, as_json: bool, **options: Any) -> None:
    """Say what decompose would do with FILE, and what it would cost.

    Prints which axis holds the samples, every choice with its reason, the memory term by term against the ceiling,
    the bytes to read and the time. Of a matrix of 64 MB or more a few panels are read to predict the time; nothing is
    written.

    With OUT.zarr.run, the folder beside the result of a run that is not finished, in place of FILE: says where that
    run stands, and what to type to go on.

    \b
    Examples:
      bigsvd plan night.h5 --matrix /frames --rank 20 --memory 2GiB
      bigsvd plan night_factors.zarr.run
    """
    from bigsvd import api
    from bigsvd.report import plan_facts, plan_lines, show_progress

    if _tell_standing(Path(file), as_json=as_json, options=given(options)):
        return
    with show_progress(progress_stream(), quiet=quiet) as listener:
        forecast = api.forecast(file, progress=listener, **given(options))
    if as_json:
        print_json(plan_facts(forecast))
    else:
        print_lines(plan_lines(forecast, text_width()))


def _tell_standing(path: Path, *, as_json: bool, options: dict[str, Any]) -> bool:
    """Say where an unfinished run stands, if the path is the folder of one."""
    from bigsvd.journal import is_run_folder, read_standing
    from bigsvd.report import read_status, standing_facts, standing_lines

    if path.name.endswith(".run") and not path.exists():
        out = path.with_name(path.name.removesuffix(".run"))
        there = f"{out} is in place" if out.exists() else f"{out} is not there either"
        raise ResultError(
            f"no unfinished run stands at {path}", evidence=[there], remedy="Give the command that is to make it."
        )
    if not is_run_folder(path):
        return False
    if options:
        name = next(iter(options)).replace("_", "-")
        raise click.UsageError(f"--{name} has no meaning for the folder of a run, which has its options")
    standing, status = read_standing(path), read_status(path)
    if as_json:
        print_json(standing_facts(standing, status))
    else:
        print_lines(standing_lines(standing, status, text_width()))
    return True

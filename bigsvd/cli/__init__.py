"""The command line: one file a command; each parses, calls the api and prints."""

from __future__ import annotations

import click

from bigsvd.cli.decompose import decompose
from bigsvd.cli.demo import demo
from bigsvd.cli.inspect import inspect
from bigsvd.cli.plan import plan
from bigsvd.cli.program import Program
from bigsvd.cli.verify import verify

__all__ = ["main"]


@click.group(cls=Program, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="bigsvd", message="bigsvd %(version)s")
def main() -> None:
    """Compute the leading singular factors (PCA) of a matrix larger than memory, with proof of accuracy.

    The matrix lies in an HDF5 file, a Zarr store or an .npy file. It is read panel by panel under a memory ceiling,
    in two to four reads; what comes out is a Zarr store with the factors and a certificate of how near they are to
    the exact ones.

    \b
    A first session:
      bigsvd inspect night.h5
      bigsvd plan night.h5 --rank 20 --memory 2GiB
      bigsvd decompose night.h5 --out night_factors.zarr --rank 20 --memory 2GiB
      bigsvd verify night_factors.zarr night.h5
    No file at hand? "bigsvd demo DIR" writes invented ones.

    \b
    Exit status:
      0    done; decompose: tolerance met; verify: agrees
      3    decompose: finished, tolerance not met or time over; verify: does
           not agree
      2    wrong usage or input; the message says what to mend
      1    anything else
      130, 143    Ctrl-C, SIGTERM
    After 1, 130 and 143 the same decompose line goes on where it was.
    """


for command in (inspect, plan, decompose, verify, demo):
    main.add_command(command)

"""The command line: parses, calls, prints, exits."""

from __future__ import annotations

import os
import sys

import click

from wakeledger.cli.calibrate import calibrate
from wakeledger.cli.exits import run
from wakeledger.cli.grids import grids
from wakeledger.cli.increment import increment
from wakeledger.cli.inspect import inspect
from wakeledger.cli.plan import plan
from wakeledger.cli.reduce import reduce
from wakeledger.cli.repeats import repeats
from wakeledger.cli.show import show


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="wakeledger", message="%(prog)s %(version)s")
def wakeledger() -> None:
    """Turn a plane of flow data behind a body into a drag ledger.

    Profile, induced and wave drag and lift, each with its uncertainty and an independent cross-check, kept in one
    archive.

    Exit status: 0 done; 1 done, but a check failed; 2 the input is wrong; 3 the program itself failed.
    """


for command in (reduce, inspect, show, increment, repeats, grids, plan, calibrate):
    wakeledger.add_command(command)


def main() -> None:
    """Entry point of the ``wakeledger`` program."""
    # Draws have threads of their own; those of the linear algebra only get into their way.
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    sys.exit(run(wakeledger, sys.argv[1:]))

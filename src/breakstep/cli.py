"""The command line: what each command takes, in which order it works, and how errors reach the user.

An error raised on purpose becomes one sentence on standard error and exit code 2; a run that the user
stops leaves its profile and exits with 130, as shells expect.
"""

from __future__ import annotations

import sys

import click

from breakstep.commands.compare import compare
from breakstep.commands.kernels import kernels
from breakstep.commands.ledger import ledger
from breakstep.commands.run import run
from breakstep.errors import BreakstepError


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="breakstep")
def cli() -> None:
    """Run operator-split physics in lockstep and as tasks on Dask, and see where every core-second went."""


for command in (compare, run, ledger, kernels):
    cli.add_command(command)


def main() -> None:
    """Entry point of the ``breakstep`` command."""
    try:
        code = cli.main(standalone_mode=False)
    except BreakstepError as error:
        click.echo(f"breakstep: {error}", err=True)
        sys.exit(2)
    except click.ClickException as error:
        error.show()
        sys.exit(2)
    except click.Abort:
        sys.exit(130)
    sys.exit(code if isinstance(code, int) else 0)

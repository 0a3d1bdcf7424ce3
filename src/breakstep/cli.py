"""The command line: which commands there are, and how errors reach the user.

An error raised on purpose becomes a sentence on standard error and exit code 2; a run that the user stops
exits with 130, as shells expect. Anything else is a defect of ours and keeps its traceback.
"""

from __future__ import annotations

import importlib
import sys

import click

from breakstep.errors import BreakstepError

COMMANDS = (
    "compare",
    "run",
    "ledger",
    "why",
    "report",
    "forecast",
    "advise",
    "audit",
    "new",
    "kernels",
    "selfcheck",
    "simulator",
)


class Commands(click.Group):
    """Commands whose modules are imported when they are asked for: numba and Dask take a second or two to load.

    Each is the function of its own name in a module of :mod:`breakstep.commands`.
    """

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Names in the order of the help text."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """The command of a name, if there is one."""
        if cmd_name not in COMMANDS:
            return None
        command: click.Command = getattr(importlib.import_module(f"breakstep.commands.{cmd_name}"), cmd_name)
        return command


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="breakstep")
def cli() -> None:
    """Run operator-split physics in lockstep and as tasks on Dask, and see where every core-second went."""


def main() -> None:
    """Entry point of the ``breakstep`` command."""
    try:
        code = cli.main(prog_name="breakstep", standalone_mode=False)
    except BreakstepError as error:
        _tell(error)
        sys.exit(2)
    except click.ClickException as error:
        error.show()
        sys.exit(2)
    except (click.Abort, KeyboardInterrupt):
        click.echo("breakstep: stopped", err=True)
        sys.exit(130)
    except MemoryError as error:
        why = f" ({error})" if str(error) else ""
        click.echo(f"breakstep: this machine's memory does not suffice{why}; use fewer zones", err=True)
        sys.exit(2)
    sys.exit(code if isinstance(code, int) else 0)


def _tell(error: BreakstepError) -> None:
    """The message, each of its lines a sentence of its own; the lines of the user's code; what is left of the run."""
    for line in str(error).splitlines():
        click.echo(f"breakstep: {line}", err=True)
    for line in str(error.details.get("traceback", "")).splitlines():
        click.echo(f"    {line}", err=True)
    if "profile" in error.details:
        click.echo(f"breakstep: the profile so far is in {error.details['profile']}", err=True)
    if "remedy" in error.details:
        click.echo(f"breakstep: {error.details['remedy']}", err=True)

"""``breakstep ledger``: the accounts of a recorded run."""

from __future__ import annotations

from pathlib import Path

import click

from breakstep.commands.shared import check_json, reading, write_json
from breakstep.errors import ProfileError
from breakstep.profile.store import read_profile
from breakstep.report.account import ledger_lines
from breakstep.report.comparison import run_figures


@click.command()
@click.argument("profile", type=click.Path(path_type=Path))
@click.option("--json", "json_file", type=click.Path(path_type=Path), help="Write the figures there as JSON.")
def ledger(profile: Path, json_file: Path | None) -> None:
    """Print the accounts of PROFILE, a folder that a run recorded."""
    check_json(json_file)
    with reading(profile, ProfileError):
        recorded = read_profile(profile)
    write_json(json_file, {"scenario": recorded.manifest["scenario"].get("name", ""), **run_figures(recorded)})
    for line in ledger_lines(recorded):
        click.echo(line)

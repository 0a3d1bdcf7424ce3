"""``breakstep run``: one run of a scenario, recorded."""

from __future__ import annotations

from pathlib import Path

import click

from breakstep.commands.session import Session, Stopped
from breakstep.commands.shared import check_json, open_dispatch, output_folder, run_options, write_json
from breakstep.report.comparison import run_figures
from breakstep.report.terminal import ledger_lines


@click.command()
@run_options
@click.option(
    "--barriers", default="tasked", show_default=True, help="lockstep, tasked, or names joined by commas."
)
@click.option("--dispatch", type=click.Choice(["native", "serial"]), help="Who runs the tasks.")
def run(
    scenario: str,
    overrides: tuple[str, ...],
    workers: int | None,
    threads: int | None,
    placement: str | None,
    address: str | None,
    scheduler_file: Path | None,
    out: Path | None,
    json_file: Path | None,
    barriers: str,
    dispatch: str | None,
) -> int:
    """Run SCENARIO once and print where its core-seconds went."""
    session = Session.load(scenario, overrides, placement)
    session.barriers(barriers)
    check_json(json_file)
    settings = session.scenario.run
    folder = output_folder(out, session.scenario.name)
    name = dispatch or settings.dispatch
    with open_dispatch(
        name, workers or settings.workers, threads or settings.threads, address, scheduler_file
    ) as engine:
        try:
            _, profile = session.execute(engine, barriers, folder)
        except Stopped as stopped:
            click.echo(f"stopped; the profile so far is in {stopped.folder}", err=True)
            return 130
    for line in ledger_lines(profile):
        click.echo(line)
    click.echo(f"profile: {folder}")
    write_json(json_file, {"scenario": session.scenario.name, **run_figures(profile)})
    return 0

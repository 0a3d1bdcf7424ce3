"""``breakstep run``: one run of a scenario, recorded, with checkpoints if asked for."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import click

from breakstep.commands.session import Session, Stopped
from breakstep.commands.shared import (
    check_json,
    choose_place,
    crowded,
    open_dispatch,
    output_folder,
    reading,
    run_options,
    tell_remarks,
    timeout_option,
    write_json,
)
from breakstep.engine.checkpoint import checkpoints, last_checkpoint, read_manifest
from breakstep.errors import BreakstepError, CheckpointError, ScenarioError
from breakstep.report.account import ledger_lines
from breakstep.report.comparison import run_figures

CHECKPOINTS = "checkpoints"  # folder below a run's output folder


@click.command()
@run_options
@timeout_option
@click.option("--barriers", help="lockstep, tasked (the default), or names joined by commas.")
@click.option("--checkpoint-every", type=click.IntRange(1), metavar="N", help="Save the state every N cycles.")
@click.option(
    "--resume",
    type=click.Path(path_type=Path),
    metavar="DIR",
    help="Go on from the last checkpoint in DIR, the output folder of an earlier run; leave SCENARIO out.",
)
def run(
    scenario: str | None,
    overrides: tuple[str, ...],
    workers: int | None,
    threads: int | None,
    dilate: float | None,
    placement: str | None,
    dispatch: str | None,
    memory_limit: int | None,
    address: str | None,
    scheduler_file: Path | None,
    out: Path | None,
    json_file: Path | None,
    barriers: str | None,
    checkpoint_every: int | None,
    resume: Path | None,
    task_timeout: float | None,
) -> int:
    """Run SCENARIO once and print where its core-seconds went."""
    resumed, session, choice = _begin(scenario, overrides, resume, barriers, placement, memory_limit, dilate)
    session.options = session.saving_every(checkpoint_every)
    session.allow(task_timeout)
    tell_remarks(session.scenario.remarks)
    check_json(json_file)
    place = choose_place(session.scenario.run, dispatch, workers, threads, address, scheduler_file)
    session.check_dispatch(place.dispatch)
    if (checkpoint_every or resume) and place.dispatch != "resident":
        raise ScenarioError("checkpoints need the resident dispatch; leave --dispatch out")
    folder = output_folder(out, session.scenario.name)
    place = replace(
        crowded(place, session.program),
        checkpoints=(folder / CHECKPOINTS).absolute() if checkpoint_every else None,
        resume=resumed,
        facts={"scenario": session.facts(), "barriers": choice, "checkpoint_every": checkpoint_every or 0},
    )
    with open_dispatch(place) as engine:
        try:
            _, profile = session.execute(engine, choice, folder)
        except Stopped as stopped:
            click.echo(f"breakstep: stopped; the profile so far is in {stopped.folder}", err=True)
            if checkpoints(folder / CHECKPOINTS):
                click.echo(f"breakstep: {go_on(folder)}", err=True)
            return 130
        except BreakstepError as error:
            if checkpoints(folder / CHECKPOINTS):
                error.details["remedy"] = go_on(folder)
            raise
    write_json(json_file, {"scenario": session.scenario.name, **run_figures(profile)})
    for line in ledger_lines(profile):
        click.echo(line)
    click.echo(f"Profile: {folder}")
    return 0


def go_on(folder: Path) -> str:
    """How to go on with a run that left a checkpoint."""
    return f"to go on from its last checkpoint: breakstep run --resume {folder}"


def _begin(
    scenario: str | None,
    overrides: tuple[str, ...],
    resume: Path | None,
    barriers: str | None,
    placement: str | None,
    memory_limit: int | None,
    dilate: float | None,
) -> tuple[Path | None, Session, str]:
    """The checkpoint to go on from, if any, the session, and the choice of barriers."""
    if resume is None:
        if scenario is None:
            raise ScenarioError("name a scenario to run, or --resume the folder of an earlier run")
        session = Session.load(scenario, overrides, placement, memory_limit or 0, dilate)
        choice = barriers or "tasked"
        session.barriers(choice)
        return None, session, choice
    if scenario is not None:
        raise ScenarioError("--resume takes its scenario from the checkpoint; leave SCENARIO out")
    for override in overrides:
        if not override.startswith("run."):
            raise ScenarioError(
                f"--set {override}: a run that goes on keeps its physics; only keys below run. may change"
            )
    with reading(resume, CheckpointError):
        folder = last_checkpoint(resume / CHECKPOINTS if (resume / CHECKPOINTS).is_dir() else resume)
        manifest = read_manifest(folder)
    session = Session.from_tables(manifest["scenario"], folder, overrides, placement, memory_limit or 0, dilate)
    if list(session.program.tile_shape) != manifest["tile"]:
        raise CheckpointError(
            f"{folder}: tiles of {manifest['tile']} zones cannot be resumed with others; leave mesh.tile"
        )
    choice = barriers or str(manifest.get("barriers", "tasked"))
    session.barriers(choice)
    return folder, session, choice

"""``breakstep compare``: the same scenario both ways, in alternating order, and what the difference was."""

from __future__ import annotations

from pathlib import Path

import click

from breakstep.commands.session import Session, Stopped
from breakstep.commands.shared import (
    check_json,
    choose_place,
    crowded,
    open_dispatch,
    output_folder,
    run_options,
    tell_remarks,
    timeout_option,
    write_json,
)
from breakstep.engine.run import Dispatch
from breakstep.errors import ScenarioError
from breakstep.profile.run import Profile
from breakstep.report.comparison import Comparison, Difference, first_difference, first_traced_difference
from breakstep.report.terminal import comparison_lines


@click.command()
@run_options
@timeout_option
@click.option("--pairs", type=click.IntRange(1), default=3, show_default=True, help="How often to run both modes.")
@click.option(
    "--barriers", default="lockstep", show_default=True,
    help="What tasked is compared with: lockstep, tasked, or names joined by commas.",
)  # fmt: skip
def compare(
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
    pairs: int,
    barriers: str,
    task_timeout: float | None,
) -> int:
    """Run SCENARIO with barriers and without, and say what leaving them out gives back."""
    if scenario is None:
        raise ScenarioError("name a scenario to compare")
    session = Session.load(scenario, overrides, placement, memory_limit or 0, dilate)
    session.allow(task_timeout)
    session.barriers(barriers)
    tell_remarks(session.scenario.remarks)
    check_json(json_file)
    place = choose_place(session.scenario.run, dispatch, workers, threads, address, scheduler_file)
    session.check_dispatch(place.dispatch)
    place = crowded(place, session.program)
    folder = output_folder(out, session.scenario.name)
    try:
        with open_dispatch(place) as engine:
            comparison = compare_pairs(session, engine, barriers, folder, pairs)
    except Stopped as stopped:
        click.echo(f"breakstep: stopped; the profile so far is in {stopped.folder}", err=True)
        return 130
    write_json(json_file, comparison.as_json())
    for line in comparison_lines(comparison):
        click.echo(line)
    click.echo(f"Profiles: {folder}")
    return 0 if comparison.identical else 1


def compare_pairs(session: Session, engine: Dispatch, barriers: str, folder: Path, pairs: int) -> Comparison:
    """Pairs in alternating order, so that a machine that drifts favours neither side.

    Raises
    ------
    Stopped, BreakstepError
        As :meth:`Session.execute`.
    """
    left: list[Profile] = []
    right: list[Profile] = []
    for pair in range(1, pairs + 1):
        order = [(barriers, left, "lockstep"), ("tasked", right, "tasked")]
        for choice, profiles, label in order if pair % 2 else reversed(order):
            title = f"pair {pair} of {pairs}, {choice}"
            _, profile = session.execute(engine, choice, folder / f"{label}-{pair}", title=title)
            profiles.append(profile)
    return Comparison(left, right, _difference(session, engine, barriers, folder, left, right))


def _difference(
    session: Session, engine: Dispatch, barriers: str, folder: Path, left: list[Profile], right: list[Profile]
) -> Difference | None:
    """None when all runs agree; else the first differing task, from a traced run of each mode."""
    found = [first_difference(left[0], other) for other in [*left[1:], *right]]
    differing = [difference for difference in found if difference is not None]
    if not differing:
        return None
    _, one = session.execute(engine, barriers, folder / "lockstep-traced", title="tracing the difference", trace=True)
    _, two = session.execute(engine, "tasked", folder / "tasked-traced", title="tracing the difference", trace=True)
    return first_traced_difference(one, two) or differing[0]

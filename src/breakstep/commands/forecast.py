"""``breakstep forecast``: a recorded program played on a machine, with questions asked of it."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import click

from breakstep.commands.shared import check_json, reading, write_json
from breakstep.errors import ForecastError, ProfileError
from breakstep.forecast.answer import answer, recorded_errors
from breakstep.forecast.basis import Basis, basis_of
from breakstep.forecast.figures import scenario_name
from breakstep.forecast.lift import lift
from breakstep.forecast.machines import RECORDED, Machine, load_machine
from breakstep.forecast.question import KEYS, parse_question
from breakstep.forecast.setting import recorded_machine
from breakstep.profile.run import Profile
from breakstep.profile.store import profiles_in, read_profile
from breakstep.report.forecast import forecast_lines

TRACED = "-traced"  # folders of runs that were slowed down to look for a difference


def read_all(folders: Sequence[Path]) -> list[Profile]:
    """Profiles in folders, each a profile or a folder of some.

    Raises
    ------
    ProfileError
        One cannot be read.
    """
    found: list[Profile] = []
    for folder in folders:
        with reading(folder, ProfileError):
            inside = [one for one in profiles_in(folder) if not one.name.endswith(TRACED)] or [folder]
            found += [read_profile(one, check_digests=False) for one in inside]
    return found


def machine_named(name: str, basis: Basis) -> Machine:
    """The machine of recording, one that comes with the package, or one of a file.

    Raises
    ------
    MachineError
        All its faults together.
    """
    return recorded_machine(basis.first) if name == RECORDED else load_machine(name)


def worker_counts(text: str | None) -> list[int]:
    """Numbers of workers joined by commas.

    Raises
    ------
    ForecastError
    """
    parts = [part.strip() for part in text.split(",")] if text is not None else []
    if not all(part.isdigit() and 1 <= int(part) <= 10_000_000 for part in parts):
        raise ForecastError(f"--workers {text}: expected whole numbers from 1 on joined by commas, as 2,8,64")
    return [int(part) for part in parts]


@click.command()
@click.argument("profiles", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="PROFILE...")
@click.option("--machine", default=RECORDED, show_default=True, help="A machine that comes with it, or a TOML file.")
@click.option("--workers", metavar="N,N,...", help="Numbers of workers (default: doubling up to cores and tiles).")
@click.option(
    "--what-if", "asked", multiple=True, metavar="KEY=VALUE",
    help=f"Ask what would be if; may be repeated. Keys: {', '.join(KEYS)}.",
)  # fmt: skip
@click.option(
    "--check", "checks", multiple=True, type=click.Path(path_type=Path), metavar="PROFILE",
    help="Compare with recorded runs that the forecast is not made from; may be repeated.",
)  # fmt: skip
@click.option("--json", "json_file", type=click.Path(path_type=Path), help="Write the figures there as JSON.")
def forecast(
    profiles: tuple[Path, ...],
    machine: str,
    workers: str | None,
    asked: tuple[str, ...],
    checks: tuple[Path, ...],
    json_file: Path | None,
) -> None:
    """Say how long the program recorded in PROFILE... would take on a machine, in lockstep and as tasks.

    Several recorded runs of one program, of either mode, make it more certain.
    """
    check_json(json_file)
    counts = worker_counts(workers)
    basis = basis_of(read_all(profiles))
    chosen = machine_named(machine, basis)
    question = parse_question(asked, basis.program)
    if counts and question.workers is not None:
        raise ForecastError("--workers and --what-if workers= name numbers of workers each; give one of them")
    figures = answer(basis, chosen, question, counts)
    figures["checked"] = [checked(basis, folder) for folder in checks]
    figures["what_if"] = list(asked)
    write_json(json_file, figures)
    for line in forecast_lines(scenario_name(basis), figures, asked):
        click.echo(line)


def checked(basis: Basis, folder: Path) -> dict[str, object]:
    """Runs in a folder compared with what the basis says of their place and mode."""
    runs = [lift(profile) for profile in read_all([folder])]
    for run in runs:
        if not run.same_program(basis.first):
            raise ProfileError(f"{folder}: not the program that the forecast is made from; give runs of one scenario")
    return {"profile": str(folder), "recorded": recorded_errors(basis, runs)}

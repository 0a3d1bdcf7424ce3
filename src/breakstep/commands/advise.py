"""``breakstep advise``: what to change first, what it should gain, and, if asked, whether it does."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import click

from breakstep.commands.forecast import machine_named, read_all
from breakstep.commands.shared import check_json, output_folder, write_json
from breakstep.commands.verify import verify_advice
from breakstep.errors import ForecastError, ScenarioError
from breakstep.forecast.advice import Adviser, command_of
from breakstep.forecast.answer import recorded_errors
from breakstep.forecast.basis import Basis, basis_of
from breakstep.forecast.figures import ranking_figures, scenario_name
from breakstep.forecast.machines import RECORDED
from breakstep.forecast.question import parse_question
from breakstep.forecast.ranking import rank_kinds
from breakstep.forecast.setting import changed_program
from breakstep.report.forecast import advice_lines
from breakstep.report.wording import counted
from breakstep.scenario.load import load_scenario


@click.command()
@click.argument("profiles", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="PROFILE...")
@click.option("--machine", default=RECORDED, show_default=True, help="A machine that comes with it, or a TOML file.")
@click.option("--workers", type=click.IntRange(1), help="Workers to advise for (default: as recorded).")
@click.option("--what-if", "asked", multiple=True, metavar="KEY=VALUE", help="As for forecast.")
@click.option("--verify", is_flag=True, help="Run the first advice for real, in turn with what it is compared to.")
@click.option("--pairs", type=click.IntRange(2), default=3, show_default=True, help="How often, with --verify.")
@click.option("--out", type=click.Path(path_type=Path), help="Folder for the profiles of --verify.")
@click.option("--json", "json_file", type=click.Path(path_type=Path), help="Write the figures there as JSON.")
def advise(
    profiles: tuple[Path, ...],
    machine: str,
    workers: int | None,
    asked: tuple[str, ...],
    verify: bool,
    pairs: int,
    out: Path | None,
    json_file: Path | None,
) -> None:
    """Rank barriers and reductions of the program recorded in PROFILE..., and say what to try first."""
    check_json(json_file)
    if verify and (machine != RECORDED or asked):
        raise ForecastError("--verify runs on this machine, as recorded; leave --machine and --what-if out")
    basis = basis_of(read_all(profiles))
    chosen, question = machine_named(machine, basis), parse_question(asked, basis.program)
    tiles = changed_program(basis.program, question).tile_count
    count = workers or question.workers or min(basis.first.workers, tiles)
    if count > tiles:
        raise ForecastError(
            f"{count} workers for {counted(tiles, 'tile')}: expected at most one a tile; ask for fewer workers"
            " or for smaller tiles (--what-if tile=...)"
        )
    ranking = rank_kinds(basis, chosen, question, count)
    found = Adviser(basis, chosen, question, count, tuple(differences(basis))).advice(ranking)
    threads = question.threads or chosen.threads
    figures: dict[str, Any] = {
        "machine": {"name": chosen.name, "title": chosen.title, "common_practice": list(chosen.common_practice)},
        "workers": count,
        "recorded": recorded_errors(basis),
        **ranking_figures(ranking),
        "advice": [one.facts(command_of(one, basis, count, threads)) for one in found],
    }
    if verify and found:
        folder = output_folder(out, f"{scenario_name(basis)}-verify")
        figures["verify"] = verify_advice(basis, found[0], count, threads, pairs, folder)
    write_json(json_file, figures)
    for line in advice_lines(scenario_name(basis), figures):
        click.echo(line)


def differences(basis: Basis) -> list[str]:
    """Overrides that make the scenario of that name the one that was recorded; none where no such name is known."""
    facts = basis.first.profile.manifest["scenario"]
    try:
        named = load_scenario(str(facts.get("name", "")), ()).resolved()
    except ScenarioError:
        return []
    recorded = facts.get("resolved", {})
    ran_by = ("run.workers", "run.threads")  # said by options
    return [one for one in _different(named, recorded) if one.partition("=")[0] not in ran_by]


def _different(named: Mapping[str, Any], recorded: Mapping[str, Any], path: str = "") -> Iterator[str]:
    for key, value in recorded.items():
        here, there = f"{path}{key}", named.get(key)
        if isinstance(value, Mapping) and isinstance(there, Mapping):
            yield from _different(there, value, f"{here}.")
        elif value != there and value is not None and not isinstance(value, Mapping):
            yield f"{here}={_as_toml(value)}"


def _as_toml(value: Any) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    return f'"{value}"' if isinstance(value, str) else str(value).replace("'", '"')

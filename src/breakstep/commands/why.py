"""``breakstep why``: the chain of causes behind a wait of a recorded run."""

from __future__ import annotations

from pathlib import Path

import click

from breakstep.commands.shared import check_json, reading, write_json
from breakstep.errors import ChoiceError, ProfileError
from breakstep.profile.store import read_profile


@click.command()
@click.argument("profile", type=click.Path(path_type=Path))
@click.option("--tile", metavar="I,J", help="Only waits before tasks of this tile: its place in the grid, from 0.")
@click.option("--cycle", type=int, help="Only waits before tasks of this cycle, counted from 0.")
@click.option("--step", help="Only waits before tasks of this step.")
@click.option("--json", "json_file", type=click.Path(path_type=Path), help="Write the figures there as JSON.")
def why(profile: Path, tile: str | None, cycle: int | None, step: str | None, json_file: Path | None) -> None:
    """Say why a thread stood idle in PROFILE: the longest wait, or the longest of those named.

    The parts add up to the wait.
    """
    check_json(json_file)
    place = None if tile is None else _place(tile)
    with reading(profile, ProfileError):
        recorded = read_profile(profile)
    found = recorded.why(tile=place, cycle=cycle, step=step)
    write_json(json_file, {"scenario": recorded.manifest["scenario"].get("name", ""), **found.as_json()})
    for line in found.lines():
        click.echo(line)


def _place(text: str) -> tuple[int, ...]:
    """A tile's place in the grid.

    Raises
    ------
    ChoiceError
    """
    try:
        return tuple(int(part) for part in text.split(","))
    except ValueError as fault:
        raise ChoiceError(
            f"--tile {text}: expected the place of a tile in the grid, such as 1,0; give whole numbers joined by commas"
        ) from fault

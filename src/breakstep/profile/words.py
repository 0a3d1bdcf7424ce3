"""What accounts, tasks and places are called when a run is told to people. Knows names, no figures."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Final

#: What each account is called in tables.
LABELS: Final = {
    "compute": "compute",
    "stolen": "kernel, no processor",
    "neighbour": "wait: neighbour tile",
    "reduction": "wait: reduction",
    "barrier": "wait: barrier",
    "transfer": "bytes, ghost zones",
    "engine": "dispatch (engine)",
    "unemployed": "out of work",
}


def tile_grid(tiles: Sequence[Mapping[str, Any]]) -> dict[tuple[int, int, int], int]:
    """Number of the tile at each place of the grid: columns, rows and layers of tiles counted from 0."""
    places = [sorted({tile["origin"][axis] for tile in tiles}) for axis in range(3)]
    grid = {}
    for number, tile in enumerate(tiles):
        i, j, k = (places[axis].index(tile["origin"][axis]) for axis in range(3))
        grid[i, j, k] = number
    return grid


def tile_names(tiles: Sequence[Mapping[str, Any]]) -> list[str]:
    """Each tile as ``I,J``: its place in the grid, without the trailing axes along which there is but one tile."""
    grid = tile_grid(tiles)
    kept = max((axis + 1 for place in grid for axis in range(3) if place[axis]), default=1)
    names = {number: ",".join(map(str, place[:kept])) for place, number in grid.items()}
    return [names.get(number, str(number)) for number in range(len(tiles))]


def task_name(task: Mapping[str, Any], tiles: Sequence[str]) -> str:
    """A task in words, without its worker: ``burn on tile 1,0 in cycle 3``."""
    stage, kind = str(task["stage"]).removeprefix("barrier:"), task["kind"]
    what = {
        "step": f"{stage} on tile {_named(task['tile'], tiles)}",
        "combine": f"the reduction {stage}",
        "count": f"the count at the barrier behind {stage}",
        "release": f"the release of the barrier behind {stage}",
        "pack": f"the rims of {stage} on tile {_named(task['tile'], tiles)}",
    }[kind]
    return f"{what} {moment_name(task)}"


def _named(tile: int, tiles: Sequence[str]) -> str:
    return tiles[tile] if 0 <= tile < len(tiles) else "?"


def moment_name(task: Mapping[str, Any]) -> str:
    """When in the march a task was: its cycle, and iteration if there is one."""
    if task["cycle"] < 0:
        return "before the first cycle"
    again = f", iteration {task['iteration']}" if task["iteration"] >= 0 else ""
    return f"in cycle {task['cycle']}{again}"

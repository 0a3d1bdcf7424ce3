"""What tiles and tasks are called."""

from __future__ import annotations

from typing import Any

import pytest

from breakstep.profile.ledger import ACCOUNTS
from breakstep.profile.schema import TASK_KINDS
from breakstep.profile.words import LABELS, task_name, tile_grid, tile_names


def tiles(*origins: tuple[int, int, int]) -> list[dict[str, Any]]:
    return [{"origin": list(origin), "shape": [4, 4, 4]} for origin in origins]


def test_every_account_has_a_label_in_order() -> None:
    assert tuple(LABELS) == ACCOUNTS


def test_tiles_are_named_by_their_place() -> None:
    flat = tiles((0, 0, 0), (0, 4, 0), (4, 0, 0), (4, 4, 0))
    assert tile_names(flat) == ["0,0", "0,1", "1,0", "1,1"]
    assert tile_grid(flat)[1, 0, 0] == 2
    assert tile_names(tiles((0, 0, 0), (4, 0, 0))) == ["0", "1"]
    assert tile_names(tiles((0, 0, 0), (0, 0, 4))) == ["0,0,0", "0,0,1"]
    assert tile_names(tiles((0, 0, 0))) == ["0"]


@pytest.mark.parametrize(
    ("kind", "stage", "name"),
    [
        ("step", "sweep_y+burn", "sweep_y+burn on tile 1 in cycle 2, iteration 3"),
        ("combine", "dt", "the reduction dt in cycle 2, iteration 3"),
        ("count", "barrier:burn", "the count at the barrier behind burn in cycle 2, iteration 3"),
        ("release", "barrier:burn", "the release of the barrier behind burn in cycle 2, iteration 3"),
        ("pack", "relax", "the rims of relax on tile 1 in cycle 2, iteration 3"),
    ],
)
def test_tasks_of_every_kind(kind: str, stage: str, name: str) -> None:
    assert kind in TASK_KINDS
    assert task_name({"kind": kind, "stage": stage, "tile": 1, "cycle": 2, "iteration": 3}, ["0", "1"]) == name


def test_before_the_first_cycle() -> None:
    task = {"kind": "step", "stage": "dt", "tile": 9, "cycle": -1, "iteration": -1}
    assert task_name(task, ["0"]) == "dt on tile ? before the first cycle"

"""Splittings as rules: laws of cost, maps laid over tiles, neighbours, and what is refused."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.errors import ForecastError
from breakstep.forecast.implicit import replay_tiles, task_costs
from breakstep.forecast.laws import Cost, Law, laid_over
from breakstep.forecast.model import MachineModel
from breakstep.forecast.tiles import Gate, TiledSplitting, TileStage, along, around

UNIT = 1_000_000


def costs(law: Law, tiles: int = 1000, cycles: int = 400) -> np.ndarray:
    splitting = TiledSplitting((tiles,), cycles, (TileStage(Cost.even(tiles, UNIT, law)),))
    return task_costs(splitting).ravel() / UNIT


@pytest.mark.parametrize(
    ("law", "mean", "deviation"),
    [
        (Law.exponential(), 1.0, 1.0),
        (Law.of(lambda u: u), 0.5, 12**-0.5),
        (Law.constant(), 1.0, 0.0),
        (Law.measured(np.array([1.0, 1.0, 1.0, 5.0])), 2.0, 3**0.5),
    ],
    ids=["exponential", "uniform", "constant", "measured"],
)
def test_draws_have_the_law_asked_for(law: Law, mean: float, deviation: float) -> None:
    """Of 400,000 draws the mean errs by 1/632 deviations; three of those, and more for the last."""
    found = costs(law)
    between = 0.15 if deviation > 1.5 else 0.0  # 1 and 5 are joined by a line: 1 is drawn less often than 3 in 4
    assert abs(found.mean() - mean) <= 3 * deviation / 632 + between
    assert abs(found.std() - deviation) <= 0.01 + 2 * between


def test_draws_of_neighbours_and_of_cycles_are_not_related() -> None:
    """Correlations of 400,000 pairs err by 1/632; four of those for ten pairings."""
    found = costs(Law.exponential()).reshape(400, 1000)
    for shift in range(1, 6):
        across = np.corrcoef(found[:, :-shift].ravel(), found[:, shift:].ravel())[0, 1]
        along_time = np.corrcoef(found[:-shift].ravel(), found[shift:].ravel())[0, 1]
        assert max(abs(across), abs(along_time)) < 4 / 632


def test_the_slowest_of_a_million_is_drawn_from_the_tail() -> None:
    """Of n exponential times the largest is ln n on the scale of 1: 13.8 here, within a handful."""
    assert 11 < costs(Law.exponential(), 1000, 1000).max() < 22


def test_a_film_of_maps_is_played_in_order() -> None:
    film = np.array([[5, 1, 1], [1, 5, 1]])
    splitting = TiledSplitting((3,), 4, (TileStage(Cost.mapped(film)),))
    assert task_costs(splitting).tolist() == [[5, 1, 1], [1, 5, 1], [5, 1, 1], [1, 5, 1]]


def test_a_map_is_stretched_or_repeated() -> None:
    assert laid_over((2,), (6,)).tolist() == [0, 0, 0, 1, 1, 1]
    assert laid_over((2,), (6,), repeat=True).tolist() == [0, 1, 1, 0, 0, 1]
    assert laid_over((2, 1), (2, 3)).tolist() == [0, 0, 0, 1, 1, 1]


def test_neighbours_of_a_closed_and_of_an_open_box() -> None:
    stage = TileStage(Cost.even(6, 1), along(0, 1))
    for periodic, expected in ((True, [3, 2, 1, 3]), (False, [-1, -1, 1, 3])):
        table, sets = TiledSplitting((2, 3), 1, (stage,), periodic).neighbours()
        assert sorted(table[0].tolist()) == sorted(expected)
        assert sets.tolist() == [15]
    assert len(around(2)) == 8
    assert len(around(3)) == 26


def test_a_gate_holds_everybody() -> None:
    film = np.array([[3, 1], [1, 3]])
    free = TiledSplitting((2,), 6, (TileStage(Cost.mapped(film)),))
    late = TiledSplitting((2,), 6, (TileStage(Cost.mapped(film), gates=(Gate(0, 2),)),))
    machine, owner = MachineModel(2), np.arange(2, dtype=np.int32)
    assert replay_tiles(free, machine, owner).makespan_ns == 12
    assert replay_tiles(free.lockstep(), machine, owner).makespan_ns == 18
    assert replay_tiles(late, machine, owner).makespan_ns == 12


def test_what_cannot_be_played_is_told() -> None:
    with pytest.raises(ForecastError, match="does not come before it"):
        TiledSplitting((2,), 3, (TileStage(Cost.even(2, 1), gates=(Gate(0, 0),)),))
    with pytest.raises(ForecastError, match="has costs for 3 tiles; expected 2"):
        TiledSplitting((2,), 3, (TileStage(Cost.even(3, 1)),))
    one_way = TiledSplitting((3,), 3, (TileStage(Cost.even(3, 1), ((-1, 0, 0),)),))
    with pytest.raises(ForecastError, match="stage 0 needs neighbours in one direction") as caught:
        replay_tiles(one_way, MachineModel(2, contention=True), np.array([0, 1, 2]))
    assert len(caught.value.details["faults"]) == 3

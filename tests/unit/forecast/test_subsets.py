"""Gains of barriers removed together: what the tables of all subsets and the fair shares say."""

from __future__ import annotations

import itertools
from fractions import Fraction

import numpy as np
import pytest

from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.fixed import Schedule
from breakstep.forecast.graph import BARRIER, STEP, ReplayGraph, build_graph
from breakstep.forecast.model import MachineModel
from breakstep.forecast.subsets import best_order, fair_shares, subset_makespans, subset_replays


def uncoupled(phases: list[tuple[int, ...]]) -> ReplayGraph:
    """Tiles that need nothing of each other, with a barrier of its own kind between any two phases."""
    width = len(phases[0])
    times, kind, tile, edges = [], [], [], []
    for number, phase in enumerate(phases):
        begin = number * (width + 1)
        times += [*phase, 0]
        kind += [STEP] * width + [BARRIER]
        tile += [*range(width), -1]
        edges += [(begin + at, begin + width, number + 1) for at in range(width)]
        if number:
            edges += [(begin - 1, begin + at, number) for at in range(width)]
            edges += [(begin - width - 1 + at, begin + at, 0) for at in range(width)]
    return build_graph(
        times,
        [edge[0] for edge in edges],
        [edge[1] for edge in edges],
        kind=np.array(kind, dtype=np.int8),
        tile=np.array(tile, dtype=np.int32),
        edge_kind=np.array([edge[2] for edge in edges], dtype=np.int8),
        edge_kinds=("data", *(f"barrier:{number}" for number in range(len(phases)))),
    )


@pytest.mark.parametrize(
    ("phases", "makespans"),
    [([(3, 1), (2, 2), (1, 3)], [8, 8, 8, 6]), ([(3, 1), (1, 3), (3, 1)], [9, 7, 7, 7])],
    ids=["only together", "either one"],
)
def test_gains_neither_add_nor_come_alone(phases: list[tuple[int, ...]], makespans: list[int]) -> None:
    """Two tiles, two barriers, by hand: without neither, the first, the second, both."""
    graph, machine = uncoupled(phases), MachineModel(2)
    owner = graph.owners(np.arange(2))
    schedule = Schedule.of(replay_owner(graph, machine, owner))
    assert subset_makespans(graph, machine, schedule, [1, 2]).tolist() == makespans
    assert subset_replays(graph, machine, owner, [1, 2]).tolist() == makespans
    gain = makespans[0] - makespans[-1]
    assert fair_shares(np.array(makespans)).tolist() == [gain / 2, gain / 2]


def test_makespans_are_sums_over_what_lies_between_barriers() -> None:
    """With full barriers, all 128 subsets: the busiest tiles between those kept sum to the makespan."""
    rng = np.random.default_rng(3)
    times = rng.integers(1, 100, (8, 5))
    graph, machine = uncoupled([tuple(row) for row in times.tolist()]), MachineModel(5)
    owner = graph.owners(np.arange(5))
    schedule = Schedule.of(replay_owner(graph, machine, owner))
    found = subset_makespans(graph, machine, schedule, list(range(1, 8)))
    for subset in range(128):
        cuts = [0, *(place + 1 for place in range(7) if not subset >> place & 1), 8]
        assert found[subset] == sum(times[a:b].sum(axis=0).max() for a, b in itertools.pairwise(cuts))
    for subset, place in itertools.product(range(128), range(7)):
        assert found[subset | 1 << place] <= found[subset]  # fixed order: removing never costs


def test_fair_shares_are_means_over_orders() -> None:
    """Shapley's definition spelled out over all orders of three kinds."""
    makespans = np.array([1000, 966, 978, 929, 905, 871, 858, 668])
    shares = [Fraction(0)] * 3
    for order in itertools.permutations(range(3)):
        removed = 0
        for kind in order:
            shares[kind] += Fraction(int(makespans[removed] - makespans[removed | 1 << kind]), 6)
            removed |= 1 << kind
    assert fair_shares(makespans) == pytest.approx([float(share) for share in shares], rel=1e-12)  # rounding only
    assert sum(shares) == 332


def test_order_of_removal_is_greedy_and_sums_to_the_whole_gain() -> None:
    makespans = np.array([1000, 966, 978, 929, 905, 871, 858, 668])
    assert best_order(makespans) == [(2, 95), (1, 47), (0, 190)]

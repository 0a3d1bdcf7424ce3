"""Reductions used later, and bytes alive at once, on graphs small enough to work out by hand."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.errors import ForecastError
from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.graph import REDUCTION, STEP, ReplayGraph, build_graph
from breakstep.forecast.lag import with_lag
from breakstep.forecast.memory import high_water
from breakstep.forecast.model import MachineModel


def reduced(cycles: int) -> ReplayGraph:
    """Two uncoupled tiles, slow in turns; each cycle needs the reduction over the cycle before."""
    times, kind, cycle, edges = [], [], [], []
    for number in range(cycles):
        begin = 3 * number
        times += [*((3, 1) if number % 2 == 0 else (1, 3)), 0]
        kind += [STEP, STEP, REDUCTION]
        cycle += [number] * 3
        edges += [(begin, begin + 2, 1), (begin + 1, begin + 2, 1)]
        if number:
            edges += [
                (begin - 1, begin, 1),
                (begin - 1, begin + 1, 1),
                (begin - 3, begin, 0),
                (begin - 2, begin + 1, 0),
            ]
    return build_graph(
        times,
        [edge[0] for edge in edges],
        [edge[1] for edge in edges],
        kind=np.array(kind, dtype=np.int8),
        name=np.array([0, 0, 1] * cycles, dtype=np.int32),
        tile=np.array([0, 1, -1] * cycles, dtype=np.int32),
        cycle=np.array(cycle, dtype=np.int32),
        edge_kind=np.array([edge[2] for edge in edges], dtype=np.int8),
        names=("step", "dt"),
        edge_kinds=("data", "reduction:dt"),
    )


def test_a_lag_of_one_cycle_unties_tiles_that_take_turns() -> None:
    graph, machine = reduced(6), MachineModel(2)
    owner = graph.owners(np.arange(2))
    assert replay_owner(graph, machine, owner).makespan_ns == 18
    assert replay_owner(with_lag(graph, 1, cycles=1), machine, owner).makespan_ns == 12
    assert with_lag(graph, 1).producer.tolist() == graph.producer.tolist()


def test_values_that_do_not_exist_are_not_waited_for() -> None:
    assert with_lag(reduced(3), 1, cycles=9).edges == reduced(3).edges - 4


@pytest.mark.parametrize(("kind", "cycles"), [(0, 1), (1, -1)])
def test_only_reductions_have_a_lag(kind: int, cycles: int) -> None:
    with pytest.raises(ForecastError, match=r"expected one of the reductions \[1\]"):
        with_lag(reduced(3), kind, cycles=cycles)


def chain(sizes: list[int], crossing: int) -> ReplayGraph:
    """A chain of tasks of 10 ns; every edge carries ``crossing`` bytes."""
    count = len(sizes)
    return build_graph(
        [10] * count, range(count - 1), range(1, count), output_bytes=sizes, edge_bytes=[crossing] * (count - 1)
    )


def test_an_output_lives_until_its_reader_ends() -> None:
    """100 and 20 together, then 20 and 3, of which the last stays."""
    graph, machine = chain([100, 20, 3], 7), MachineModel(1)
    found = replay_owner(graph, machine, np.zeros(3, dtype=np.int32))
    assert high_water(graph, machine, found).tolist() == [120]


def test_what_crosses_lives_at_its_reader() -> None:
    """Worker 0 holds 100, later the 7 bytes that cross back beside its 3; worker 1 holds 7 and 20."""
    graph, machine = chain([100, 20, 3], 7), MachineModel(2)
    found = replay_owner(graph, machine, np.array([0, 1, 0], dtype=np.int32))
    assert high_water(graph, machine, found).tolist() == [100, 27]

"""Graphs and machines: what they refuse, and what they derive."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.errors import ForecastError
from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.fixed import Schedule, recorded_schedule, replay_fixed
from breakstep.forecast.graph import ALL_KINDS, BARRIER, STEP, ReplayGraph, build_graph
from breakstep.forecast.model import MachineModel
from breakstep.forecast.subsets import subset_makespans


def two_phases() -> ReplayGraph:
    """Tiles 0 and 1, two phases with a barrier node between them; tile 1 is slow first, tile 0 then."""
    return build_graph(
        [1, 3, 0, 3, 1],
        [0, 1, 2, 2, 0, 1],
        [2, 2, 3, 4, 3, 4],
        kind=np.array([STEP, STEP, BARRIER, STEP, STEP], dtype=np.int8),
        tile=np.array([0, 1, -1, 0, 1], dtype=np.int32),
        edge_kind=np.array([1, 1, 1, 1, 0, 0], dtype=np.int8),
        edge_kinds=("data", "barrier:first"),
    )


def test_all_faults_of_a_graph_are_told_together() -> None:
    with pytest.raises(ForecastError) as caught:
        build_graph([1, -1], [1, 0], [0, 1], edge_bytes=[0, -1], edge_kind=np.array([0, 3], dtype=np.int8))
    assert len(caught.value.details["faults"]) == 4
    assert "edge 0 goes from task 1 to task 0" in str(caught.value)


def test_edges_by_consumer_and_by_producer_are_the_same_edges() -> None:
    graph = two_phases()
    out = graph.outgoing
    producer = np.repeat(np.arange(graph.tasks), np.diff(out.first))
    there = sorted(zip(producer.tolist(), out.consumer.tolist(), out.edge_kind.tolist(), strict=True))
    here = sorted(zip(graph.producer.tolist(), graph.consumer.tolist(), graph.edge_kind.tolist(), strict=True))
    assert there == here


def test_kinds_are_sets() -> None:
    graph = two_phases()
    assert graph.kinds_of("barrier:") == [1]
    assert graph.without([]) == ALL_KINDS
    assert [graph.without([1]) >> kind & 1 for kind in (0, 1, 2)] == [1, 0, 1]


def test_owners_follow_tiles() -> None:
    assert two_phases().owners(np.array([1, 0], dtype=np.int32)).tolist() == [1, 0, -1, 1, 0]


def test_a_barrier_lifted() -> None:
    graph, machine = two_phases(), MachineModel(2)
    owner = graph.owners(np.arange(2, dtype=np.int32))
    assert replay_owner(graph, machine, owner).makespan_ns == 6
    assert replay_owner(graph, machine, owner, kinds=graph.without([1])).makespan_ns == 4


@pytest.mark.parametrize(("workers", "arity", "depth"), [(1, 8, 0), (2, 8, 1), (8, 8, 1), (9, 8, 2), (1_000_000, 8, 7)])
def test_a_tree_costs_two_hops_a_level(workers: int, arity: int, depth: int) -> None:
    machine = MachineModel(workers, hop_ns=5, arity=arity)
    assert (machine.tree_depth, machine.tree_ns) == (depth, 10 * depth)


def test_an_owner_must_be_a_worker() -> None:
    with pytest.raises(ForecastError, match="Task 1 belongs to worker 2; expected a worker from 0 to 1"):
        replay_owner(two_phases(), MachineModel(2), np.array([0, 2, -1, 0, 0], dtype=np.int32))


def test_a_schedule_must_be_of_this_graph_and_its_edges() -> None:
    graph, machine = two_phases(), MachineModel(2)
    free = replay_owner(graph, machine, graph.owners(np.arange(2)), kinds=graph.without([1]))
    backwards = Schedule(free.slot, free.order[::-1].copy())
    with pytest.raises(ForecastError, match="point backwards"):
        replay_fixed(graph, machine, backwards)
    with pytest.raises(ForecastError, match="expected 5 tasks on threads 0 to 0"):
        replay_fixed(graph, MachineModel(1), Schedule.of(free))


def test_a_recorded_order_survives_clocks_that_disagree() -> None:
    """Worker 1's clock is 2 ns behind, so its second task seems to end before the barrier is through."""
    graph = two_phases()
    slot = np.array([0, 1, -1, 0, 1], dtype=np.int32)
    start, finish = np.array([0, 0, 3, 3, 1]), np.array([1, 3, 3, 6, 2])
    schedule = recorded_schedule(graph, slot, start, finish)
    assert replay_fixed(graph, MachineModel(2), schedule).makespan_ns == 6


def test_a_recorded_order_that_no_run_can_have_had() -> None:
    graph = two_phases()
    slot = np.array([0, 0, -1, 0, 0], dtype=np.int32)
    with pytest.raises(ForecastError, match="would wait for each other"):
        recorded_schedule(graph, slot, np.array([5, 6, 7, 1, 2]), np.array([6, 7, 7, 2, 3]))


def test_too_many_kinds_to_try_all_subsets() -> None:
    graph = two_phases()
    schedule = Schedule(np.zeros(5, dtype=np.int32), np.arange(5, dtype=np.int32))
    with pytest.raises(ForecastError, match="expected at most 8"):
        subset_makespans(graph, MachineModel(1), schedule, list(range(1, 10)))


def test_an_empty_graph() -> None:
    graph = build_graph([], [], [])
    found = replay_owner(graph, MachineModel(3), np.zeros(0, dtype=np.int32))
    assert (found.makespan_ns, found.idle_ns.tolist()) == (0, [0, 0, 0])

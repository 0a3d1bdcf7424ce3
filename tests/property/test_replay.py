"""The compiled replay engines against a plain one and networkx, on a thousand random graphs, to the nanosecond."""

from __future__ import annotations

import networkx as nx
import numpy as np
import pytest

from breakstep.forecast.bounds import heads, lower_bounds, tails
from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.fixed import Schedule, Variant, fixed_makespans, recorded_schedule, replay_fixed
from breakstep.forecast.free import replay_free
from breakstep.forecast.graph import STEP, ReplayGraph
from breakstep.forecast.model import MachineModel
from breakstep.forecast.results import Replay
from tests.plain_replay import PlainReplay, Played
from tests.random_graphs import random_graph, random_kinds, random_machine

BLOCK = 100


def seeds(block: int) -> range:
    return range(block * BLOCK, (block + 1) * BLOCK)


def agree(found: Replay, plain: Played, graph: ReplayGraph) -> None:
    tasks = range(graph.tasks)
    assert found.start_ns.tolist() == [plain.start.get(task, 0) for task in tasks]
    assert found.finish_ns.tolist() == [plain.finish[task] for task in tasks]
    assert found.slot.tolist() == [plain.slot.get(task, -1) for task in tasks]
    assert found.order.tolist() == plain.order
    assert found.makespan_ns == plain.makespan(graph)


def balances(found: Replay, graph: ReplayGraph, machine: MachineModel) -> None:
    """Threads x makespan = busy + overhead + idle, on every worker; no thread runs two tasks at once."""
    total = found.busy_ns + found.overhead_ns + found.idle_ns
    assert np.all(total == machine.threads * found.makespan_ns)
    assert np.all(found.idle_ns >= 0)
    assert int(found.busy_ns.sum()) == int(graph.duration_ns[graph.on_worker].sum())
    for slot in range(machine.slots):
        mine = np.flatnonzero(found.slot == slot)
        mine = mine[np.lexsort((found.finish_ns[mine], found.start_ns[mine]))]
        assert np.all(found.finish_ns[mine[:-1]] <= found.start_ns[mine[1:]])


@pytest.mark.parametrize("block", range(10))
def test_a_plain_engine_agrees(block: int) -> None:
    for seed in seeds(block):
        rng = np.random.default_rng(seed)
        graph, machine = random_graph(rng), random_machine(rng)
        kinds = random_kinds(rng, graph)
        rank = None if rng.random() < 0.5 else rng.integers(-3, 4, graph.tasks).astype(np.int32)
        owner = rng.integers(0, machine.workers, graph.tasks).astype(np.int32)
        locality = bool(rng.integers(2))
        owned = replay_owner(graph, machine, owner, rank, kinds)
        agree(owned, PlainReplay(graph, machine, owner, rank, kinds).play(), graph)
        balances(owned, graph, machine)
        free = replay_free(graph, machine, rank, kinds, locality)
        agree(free, PlainReplay(graph, machine, None, rank, kinds, locality).play(), graph)
        balances(free, graph, machine)
        again = replay_fixed(graph, machine, Schedule.of(owned), kinds)
        assert again.finish_ns.tolist() == owned.finish_ns.tolist()
        assert again.start_ns.tolist() == owned.start_ns.tolist()
        assert again.order.tolist() == owned.order.tolist()
        assert again.received_bytes.tolist() == owned.received_bytes.tolist()
        recorded = recorded_schedule(graph, owned.slot, owned.start_ns, owned.finish_ns, kinds)
        if not machine.contention:  # messages that arrive at one moment may change places
            assert replay_fixed(graph, machine, recorded, kinds).makespan_ns == owned.makespan_ns


@pytest.mark.parametrize("block", range(3))
def test_fixed_orders_are_monotone_and_lanes_agree(block: int) -> None:
    """A better network, less overhead, fewer edges, shorter tasks: never longer, whatever the order."""
    for seed in seeds(block):
        rng = np.random.default_rng(seed)
        graph, machine = random_graph(rng), random_machine(rng)
        owner = rng.integers(0, machine.workers, graph.tasks).astype(np.int32)
        replayed = replay_owner(graph, machine, owner)
        schedule = Schedule.of(replayed)
        ideal = MachineModel(machine.workers, machine.threads)
        variants = [
            Variant(machine),
            Variant(machine, graph.without([1])),
            Variant(machine, graph.without([1, 2, 3])),
            Variant(ideal),
            Variant(machine, factors={0: 0.5}),
        ]
        makespans = fixed_makespans(graph, schedule, variants).tolist()
        assert makespans[0] == replayed.makespan_ns
        assert makespans[0] >= makespans[1] >= makespans[2]
        assert max(makespans[3:]) <= makespans[0]
        for variant, makespan in zip(variants[:4], makespans, strict=False):
            assert replay_fixed(graph, variant.machine, schedule, variant.kinds).makespan_ns == makespan
        half = np.where(graph.name == 0, np.rint(graph.duration_ns * 0.5).astype(np.int64), graph.duration_ns)
        assert replay_fixed(graph.with_durations(half), machine, schedule).makespan_ns == makespans[4]


def longest_paths(graph: ReplayGraph, machine: MachineModel, owner: np.ndarray) -> tuple[int, list[int]]:
    """The longest path to the end of a step, and the longest way to each task, by networkx."""
    net = nx.DiGraph()
    net.add_node("begin")
    for task in range(graph.tasks):
        step = graph.kind[task] == STEP
        length = int(graph.duration_ns[task]) + (machine.overhead_ns if step else machine.tree_ns)
        net.add_edge(("in", task), ("out", task), weight=length)
        net.add_edge("begin", ("in", task), weight=0)
        if step:
            net.add_edge(("out", task), "end", weight=0)
        for edge in range(graph.first[task], graph.first[task + 1]):
            source = int(graph.producer[edge])
            crosses = step and graph.kind[source] == STEP and owner[source] != owner[task]
            cost = machine.transfer_ns(int(graph.edge_bytes[edge])) if crosses else 0
            known = net.get_edge_data(("out", source), ("in", task), {"weight": 0})["weight"]
            net.add_edge(("out", source), ("in", task), weight=max(cost, known))
    way = dict.fromkeys(net, 0)
    for node in nx.topological_sort(net):
        for _, after, weight in net.out_edges(node, data="weight"):
            way[after] = max(way[after], way[node] + weight)
    before_end = net.subgraph([*nx.ancestors(net, "end"), "end"]) if "end" in net else net.subgraph(["begin"])
    return nx.dag_longest_path_length(before_end), [way["in", task] for task in range(graph.tasks)]


@pytest.mark.parametrize("block", range(2))
def test_longest_paths_are_those_of_networkx(block: int) -> None:
    for seed in seeds(block):
        rng = np.random.default_rng(seed)
        graph, machine = random_graph(rng), random_machine(rng)
        owner = rng.integers(0, machine.workers, graph.tasks).astype(np.int32)
        longest, ways = longest_paths(graph, machine, owner)
        bounds = lower_bounds(graph, machine, owner)
        assert bounds.path_ns == longest
        assert heads(graph, machine, owner).tolist() == ways
        steps = graph.on_worker
        through = heads(graph, machine, owner) + tails(graph, machine, owner)
        assert int(through[steps].max(initial=0)) == longest
        assert bounds.best_ns <= replay_owner(graph, machine, owner).makespan_ns

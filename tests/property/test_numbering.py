"""Numbers and edges of whole phases, against the graph that spells out every task for the same owners."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass, field

import networkx as nx
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from breakstep.engine.resident.barriers import WORKER_ARITY
from breakstep.engine.resident.plan import ReductionTree
from breakstep.graph.numbering import Numbering, PhaseEdges, level_sizes
from breakstep.graph.stages import Template, build_template
from breakstep.graph.tasks import TREE_ARITY, EdgeKind, HaloPlans, Kind, Task, TaskGraph
from breakstep.graph.unroll import Phase
from breakstep.mesh.tiling import Tiling
from tests.property.test_graph import play, tilings
from tests.splittings import follow, scripts, splittings

DRAWS = settings(deadline=None, suppress_health_check=[HealthCheck.too_slow, HealthCheck.filter_too_much])
Relation = set[tuple[object, object]]


@dataclass
class Laid:
    """Phases, numbered and with their edges, and the same phases spelled out."""

    phases: list[Phase]
    numbering: Numbering
    edges: dict[EdgeKind, list[tuple[int, int]]]
    tasks: dict[int, Task]
    names: dict[int, object] = field(default_factory=dict)  # number -> what the task is, in either numbering's terms

    def numbered(self, kind: EdgeKind) -> list[tuple[object, object]]:
        """Edges of the numbering, between named tasks."""
        return [(self.names[p], self.names[c]) for p, c in self.edges[kind]]


def lay(phases: list[Phase], template: Template, tiling: Tiling, owners: Sequence[int], workers: int) -> Laid:
    """Both ways of spelling phases out."""
    barriers = frozenset(p.waits_for for p in phases if p.waits_for is not None)
    stages = frozenset(p.stage.index for p in phases if p.number in barriers)
    numbering, graph = Numbering(len(tiling), workers, stages), TaskGraph(tiling, owners)
    writer = PhaseEdges(numbering, HaloPlans(tiling), owners, WORKER_ARITY)
    laid = Laid(phases, numbering, defaultdict(list), {})
    for phase in phases:
        numbering.add(phase)
        for producers, consumers, kind in writer.into(phase):
            laid.edges[kind] += zip(producers.tolist(), consumers.tolist(), strict=True)
        tasks = graph.expand(phase, barrier_after=phase.stage.index in stages)
        laid.tasks.update({task.number: task for task in tasks})
        laid.names.update(names(numbering, phase, ReductionTree(owners), workers))
    return laid


def names(numbering: Numbering, phase: Phase, tree: ReductionTree, workers: int) -> dict[int, object]:
    """What each number of a phase stands for; no number may stand for two things."""
    found: dict[int, object] = {
        numbering.step(phase.number, t): ("step", phase.number, t) for t in range(numbering.tiles)
    }
    for making in phase.makes:
        for level, index in tree.nodes:
            number = numbering.node(making.instance, level, index)
            assert number not in found
            found[number] = ("node", making.instance, level, index)
    if numbering.phases[phase.number].barrier is not None:
        counters = {numbering.counter(phase.number, worker): worker for worker in range(workers)}
        assert len(counters) == workers
        assert not counters.keys() & found.keys()
        found.update({number: ("counter", phase.number, worker) for number, worker in counters.items()})
        found[numbering.release(phase.number)] = ("release", phase.number)
    return found


@st.composite
def laid(draw: st.DrawFn) -> Laid:
    """Two cycles of a random splitting, with some barriers, for one to ten workers; some own no tile."""
    splitting, tiling = draw(splittings()), draw(tilings())
    template = build_template(splitting, fuse=draw(st.booleans()))
    known = template.barrier_names()
    barriers = tuple(draw(st.one_of(st.just(list(known)), st.lists(st.sampled_from(known), unique=True))))
    phases = play(follow(template, 2, draw(scripts(splitting, 2)), barriers))
    workers = draw(st.sampled_from([1, 2, 3, 10]))
    owners = [draw(st.integers(0, workers - 1)) for _ in range(len(tiling))]
    return lay(phases, template, tiling, owners, workers)


def spelled_names(pair: Laid) -> dict[int, object]:
    """Names of the spelled-out tasks, but for packs and counters; nodes of a tree are made level by level."""
    found: dict[int, object] = {}
    places: dict[int, list[tuple[int, int]]] = {}
    order = [(level, i) for level, size in enumerate(pair.numbering.levels) for i in range(size)]
    for number, task in pair.tasks.items():
        if task.kind is Kind.STEP:
            found[number] = ("step", task.phase.number, task.tile)
        elif task.kind is Kind.COMBINE:
            assert task.making is not None
            instance = task.making.instance
            found[number] = ("node", instance, *places.setdefault(instance, list(order)).pop(0))
        elif task.kind is Kind.RELEASE:
            found[number] = ("release", task.phase.number)
    assert not any(places.values())
    return found


def spelled(pair: Laid, kind: EdgeKind) -> Relation:
    """Edges of one kind between named tasks; a pack stands for the task that it cuts from."""
    known, found = spelled_names(pair), set()
    for number, name in known.items():
        for producer, carried in pair.tasks[number].edges():
            source = pair.tasks.get(producer)
            maker = source.children[0] if source is not None and source.kind is Kind.PACK else producer
            if maker >= 0 and carried is kind:  # below 0 is the initial state
                found.add((known[maker], name))
    return found


@settings(DRAWS, max_examples=40)
@given(laid())
def test_data_and_reductions_relate_the_same_tasks(pair: Laid) -> None:
    for kind in (EdgeKind.DATA, EdgeKind.REDUCTION):
        numbered = pair.numbered(kind)
        assert len(numbered) == len(set(numbered))
        assert set(numbered) == spelled(pair, kind)


@settings(DRAWS, max_examples=40)
@given(laid())
def test_barriers_relate_the_same_tasks(pair: Laid) -> None:
    """From steps through any counters to the release, and from the release to steps."""
    numbered = pair.numbered(EdgeKind.BARRIER)
    graph = nx.DiGraph(numbered)
    known = spelled_names(pair)
    behind = {(p, c) for p, c in numbered if p[0] == "release"}  # type: ignore[index]
    assert behind == {(p, c) for p, c in _barrier_edges(pair, known) if p[0] == "release"}  # type: ignore[index]
    before = {(s, r) for r in graph if r[0] == "release" for s in nx.ancestors(graph, r) if _are_of_one(s, r)}
    assert before == {(p, c) for p, c in _barrier_edges(pair, known) if c[0] == "release"}  # type: ignore[index]


def _are_of_one(step: tuple[object, ...], release: tuple[object, ...]) -> bool:
    return step[:2] == ("step", release[1])


def _barrier_edges(pair: Laid, known: dict[int, object]) -> Relation:
    """Counters left out."""
    found: Relation = set()
    for task in pair.tasks.values():
        if task.kind is Kind.RELEASE:
            found |= {(known[s], known[task.number]) for count in task.children for s in pair.tasks[count].children}
        elif task.release is not None:
            found.add((known[task.release], known[task.number]))
    return found


@settings(DRAWS, max_examples=30)
@given(laid())
def test_counters_form_one_tree_over_all_workers(pair: Laid) -> None:
    workers = pair.numbering.workers
    for phase in pair.phases:
        if pair.numbering.phases[phase.number].barrier is None:
            continue
        counters = {("counter", phase.number, worker) for worker in range(workers)}
        edges = [(p, c) for p, c in pair.numbered(EdgeKind.BARRIER) if p in counters]
        assert len(edges) == workers, "each reports once: to another counter, or to the release"
        below = defaultdict(list)
        for producer, consumer in edges:
            below[consumer].append(producer)
        assert max(len(those) for those in below.values()) <= WORKER_ARITY
        assert below["release", phase.number] == [("counter", phase.number, 0)]
        assert nx.is_directed_acyclic_graph(nx.DiGraph(edges))


@settings(DRAWS, max_examples=30)
@given(laid())
def test_numbers_are_given_out_once_and_edges_close_no_cycle(pair: Laid) -> None:
    assert sorted(pair.names) == list(range(len(pair.names)))
    both = [edge for edges in pair.edges.values() for edge in edges]
    assert {number for edge in both for number in edge} <= set(pair.names)
    assert nx.is_directed_acyclic_graph(nx.DiGraph(both))
    counted = sum(
        pair.numbering.tiles + len(p.makes) * sum(level_sizes(pair.numbering.tiles)) for p in pair.phases
    ) + sum(pair.numbering.workers + 1 for p in pair.phases if pair.numbering.phases[p.number].barrier is not None)
    assert len(pair.names) == counted


@settings(DRAWS, max_examples=30)
@given(laid(), st.integers(0, 40))
def test_what_is_forgotten_is_older_than_what_is_asked_for(pair: Laid, before: int) -> None:
    kept = [phase for phase in pair.phases if phase.number >= before]
    steps = {phase.number: pair.numbering.step(phase.number, 0) for phase in kept}
    roots = {m.instance: pair.numbering.root(m.instance) for phase in kept for m in phase.makes}
    pair.numbering.forget(before)
    assert pair.numbering.phases.keys() == steps.keys()
    assert pair.numbering.instances.keys() == roots.keys()
    assert {number: pair.numbering.step(number, 0) for number in steps} == steps
    assert {instance: pair.numbering.root(instance) for instance in roots} == roots


def test_levels_by_hand() -> None:
    """Arity 8: 1 to 8 tiles have one node, 9 to 64 two levels, 65 and more three."""
    assert TREE_ARITY == 8
    expected = {1: [1], 8: [1], 9: [2, 1], 64: [8, 1], 65: [9, 2, 1], 513: [65, 9, 2, 1]}
    assert {tiles: level_sizes(tiles) for tiles in expected} == expected

"""The graph under random splittings, tilings, owners, lags and verdicts, against a classical code and networkx."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import networkx as nx
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from breakstep.engine.program import Program
from breakstep.engine.run import whole_field
from breakstep.errors import ConvergenceError
from breakstep.graph.stages import build_template
from breakstep.graph.tasks import ANYWHERE, EdgeKind, Kind, Task, TaskGraph, conflicts
from breakstep.graph.unroll import INITIAL, Phase
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.mesh.tiling import Tiling
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Repeat, Splitting
from breakstep.steps.step import Read, Step
from tests.reference import March
from tests.shuffled import Shuffled
from tests.splittings import NAMES, Follower, classical, follow, says_stop, scripts, splittings
from tests.toys import Toy, as_it_is, rate, smooth

CYCLES = 3
SLOW_DRAWS = settings(
    max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow, HealthCheck.filter_too_much]
)


def play(follower: Follower) -> list[Phase]:
    """Every phase up to the end, or to the repeat that does not converge."""
    try:
        for _ in follower.events():
            pass
    except ConvergenceError:
        follower.log.converged = False
    return follower.phases


@SLOW_DRAWS
@given(st.data(), splittings(), st.booleans())
def test_unrolled_steps_read_what_a_classical_code_reads(data: st.DataObject, splitting: Splitting, fuse: bool) -> None:
    """Versions, values with their lags, iterations up to the verdict and the lag, and the error at the last."""
    script = data.draw(scripts(splitting, CYCLES))
    follower = follow(build_template(splitting, fuse=fuse), CYCLES, script)
    play(follower)
    expected = classical(splitting, CYCLES, script)
    assert follower.log.entries == expected.entries
    assert follower.log.converged == expected.converged


@SLOW_DRAWS
@given(st.data(), splittings())
def test_emission_depends_on_the_verdicts_alone(data: st.DataObject, splitting: Splitting) -> None:
    """Barriers change who waits for whom, and nothing else; a second unrolling repeats the first."""
    script = data.draw(scripts(splitting, CYCLES))
    template = build_template(splitting)
    first, second, barred = (
        play(follow(template, CYCLES, script, barriers)) for barriers in ((), (), template.barrier_names())
    )
    assert first == second
    assert [(p.number, p.stage, p.cycle, p.iteration, p.sources, p.values, p.gate, p.makes) for p in first] == [
        (p.number, p.stage, p.cycle, p.iteration, p.sources, p.values, p.gate, p.makes) for p in barred
    ]
    assert all(p.waits_for is None for p in first)
    assert [p.waits_for for p in barred] == [None, *(p.number for p in barred[:-1])]


@SLOW_DRAWS
@given(st.data(), splittings(), st.sets(st.sampled_from(NAMES)))
def test_live_phases_are_all_that_later_phases_read(data: st.DataObject, splitting: Splitting, state: set[str]) -> None:
    follower = follow(build_template(splitting), CYCLES, data.draw(scripts(splitting, CYCLES)))
    held: set[int] = {INITIAL}
    try:
        for phase in follower.events():
            assert set(phase.sources.values()) <= held
            held = (held | {phase.number}) & follower.unroller.live_phases(state)
    except ConvergenceError:
        return
    assert {follower.unroller.latest(name) for name in state} <= held


@dataclass
class Spelled:
    """A graph with its tasks."""

    tasks: dict[int, Task]
    graph: TaskGraph
    phases: list[Phase]

    def edges(self) -> list[tuple[int, int, EdgeKind]]:
        """Producer, consumer and kind, the initial state left out."""
        return [(p, t.number, kind) for t in self.tasks.values() for p, kind in t.edges() if p >= 0]

    def steps(self, phase: int) -> list[Task]:
        """A phase's step tasks by tile."""
        return [t for t in self.tasks.values() if t.kind is Kind.STEP and t.phase.number == phase]


def spell(phases: Sequence[Phase], barriers: frozenset[int], tiling: Tiling, owners: Sequence[int]) -> Spelled:
    """All tasks of these phases."""
    graph = TaskGraph(tiling, owners)
    tasks = [t for p in phases for t in graph.expand(p, barrier_after=p.stage.index in barriers)]
    assert [t.number for t in tasks] == sorted({t.number for t in tasks})
    return Spelled({t.number: t for t in tasks}, graph, list(phases))


@st.composite
def tilings(draw: st.DrawFn) -> Tiling:
    """Four to twelve tiles, periodic or not along either axis."""
    edges = [draw(st.sampled_from([Edge.PERIODIC, Edge.OUTFLOW])) for _ in range(2)]
    shape = (draw(st.integers(2, 6)), draw(st.integers(2, 4)))
    return Tiling(Mesh(shape, (1.0, 1.0), tuple((e, e) for e in edges)), (1, 2))


@st.composite
def graphs(draw: st.DrawFn) -> tuple[Spelled, Spelled]:
    """The same phases spelled out in lockstep and without barriers."""
    splitting, tiling = draw(splittings()), draw(tilings())
    template = build_template(splitting, fuse=draw(st.booleans()))
    script = draw(scripts(splitting, 2))
    names = template.barrier_names()
    barred = play(follow(template, 2, script, names))
    free = play(follow(template, 2, script))
    workers = draw(st.integers(0, 4))
    place = st.just(ANYWHERE) if workers == 0 else st.integers(0, workers - 1)
    owners = [draw(place) for _ in range(len(tiling))]
    return (
        spell(barred, template.stages_with_barrier(names), tiling, owners),
        spell(free, frozenset(), tiling, owners),
    )


def directed(spelled: Spelled, *kinds: EdgeKind) -> nx.DiGraph[int]:
    """The edges of these kinds as a graph of networkx."""
    graph: nx.DiGraph[int] = nx.DiGraph()
    graph.add_nodes_from(spelled.tasks)
    graph.add_edges_from((p, c) for p, c, kind in spelled.edges() if kind in kinds)
    return graph


@settings(SLOW_DRAWS, max_examples=30)
@given(graphs())
def test_graphs_are_acyclic_and_emitted_producers_first(pair: tuple[Spelled, Spelled]) -> None:
    for spelled in pair:
        assert nx.is_directed_acyclic_graph(directed(spelled, *EdgeKind))
        assert all(producer < consumer for producer, consumer, _ in spelled.edges())
        assert all(producer in spelled.tasks for producer, _, _ in spelled.edges())


def fingerprint(spelled: Spelled) -> dict[tuple[object, ...], object]:
    """Each task but those of barriers, by what it is, with its edges but those of barriers."""
    keys: dict[int, tuple[object, ...]] = {}
    counts: dict[tuple[object, ...], int] = defaultdict(int)
    found: dict[tuple[object, ...], object] = {}
    for task in spelled.tasks.values():
        if task.kind in (Kind.COUNT, Kind.RELEASE):
            continue
        base = (task.kind, task.phase.number, task.tile, task.worker)
        keys[task.number] = (*base, counts[base])
        counts[base] += 1
        kept = [(p, kind) for p, kind in task.edges() if kind is not EdgeKind.BARRIER]
        inputs = [(keys[p] if p >= 0 else p, kind) for p, kind in kept]
        rims = [(r.field, r.rim, r.packed) for r in task.rims]
        found[keys[task.number]] = (sorted(inputs, key=repr), rims, task.label)
    return found


@settings(SLOW_DRAWS, max_examples=30)
@given(graphs())
def test_lockstep_is_the_tasked_graph_with_barrier_edges(pair: tuple[Spelled, Spelled]) -> None:
    lockstep, tasked = pair
    assert fingerprint(lockstep) == fingerprint(tasked)
    assert not any(kind is EdgeKind.BARRIER for _, _, kind in tasked.edges())
    assert all(t.kind not in (Kind.COUNT, Kind.RELEASE) for t in tasked.tasks.values())


@settings(SLOW_DRAWS, max_examples=20)
@given(graphs())
def test_lockstep_orders_consecutive_phases_fully(pair: tuple[Spelled, Spelled]) -> None:
    """By barrier edges alone, whatever the data says."""
    lockstep, _ = pair
    control = directed(lockstep, EdgeKind.BARRIER)
    for before, after in pairwise(lockstep.phases):
        later = {task.number for task in lockstep.steps(after.number)}
        for task in lockstep.steps(before.number):
            assert later <= nx.descendants(control, task.number)


@settings(SLOW_DRAWS, max_examples=30)
@given(graphs())
def test_barriers_carry_control_only_along_a_tree(pair: tuple[Spelled, Spelled]) -> None:
    lockstep, _ = pair
    legal = {(Kind.STEP, Kind.COUNT), (Kind.COUNT, Kind.RELEASE), (Kind.RELEASE, Kind.STEP)}
    for producer, consumer, kind in lockstep.edges():
        ends = (lockstep.tasks[producer].kind, lockstep.tasks[consumer].kind)
        assert (kind is EdgeKind.BARRIER) == (ends in legal)
        if ends == (Kind.STEP, Kind.COUNT):  # what a counter waits for never leaves its worker
            workers = lockstep.tasks[producer].worker, lockstep.tasks[consumer].worker
            assert workers[0] == workers[1]
    for task in lockstep.tasks.values():
        if task.kind is Kind.COUNT and task.worker != ANYWHERE:
            assert [t.worker for t in lockstep.tasks.values() if t.kind is Kind.COUNT and t.phase == task.phase].count(
                task.worker
            ) == 1


@settings(SLOW_DRAWS, max_examples=30)
@given(graphs())
def test_tiles_never_leave_their_worker(pair: tuple[Spelled, Spelled]) -> None:
    """Only packed rims, picked contributions, reduction nodes and releases are read from another worker."""
    for spelled in pair:
        for producer, consumer, _ in spelled.edges():
            made, used = spelled.tasks[producer], spelled.tasks[consumer]
            if made.kind is not Kind.STEP:
                continue
            if made.worker != ANYWHERE:
                assert made.worker == used.worker
            elif used.kind in (Kind.STEP, Kind.PACK):
                assert made.tile == used.tile
            else:
                assert used.kind is Kind.COUNT
                assert used.children == (producer,)


@settings(SLOW_DRAWS, max_examples=30)
@given(graphs())
def test_packs_hold_exactly_the_rims_that_cross(pair: tuple[Spelled, Spelled]) -> None:
    _, spelled = pair
    for task in spelled.tasks.values():
        for rim in task.rims:
            if rim.packed:
                pack = spelled.tasks[rim.producer]
                assert pack.cuts.count((rim.field, rim.rim, task.tile)) == 1
                assert pack.tile == rim.rim.neighbour
        if task.kind is Kind.PACK and task.making is None:
            wanted = [
                (r.field, r.rim, t.tile) for t in spelled.tasks.values() for r in t.rims if r.producer == task.number
            ]
            assert sorted(map(repr, task.cuts)) == sorted(map(repr, wanted))


@settings(SLOW_DRAWS, max_examples=20)
@given(graphs())
def test_conflicting_phases_are_ordered_by_data(pair: tuple[Spelled, Spelled]) -> None:
    """A tile that reads what another wrote last comes after it; renaming removes the other conflicts."""
    _, spelled = pair
    data = directed(spelled, EdgeKind.DATA)
    last: dict[str, Phase] = {}
    for phase in spelled.phases:
        steps = spelled.steps(phase.number)
        for read in phase.stage.reads:
            writer = last.get(read.field)
            if writer is None:
                assert all(task.own[read.field] == -1 - task.tile for task in steps)
                continue
            assert read.field in conflicts(writer, phase)["flow"]
            written = spelled.steps(writer.number)
            for task in steps:
                rims = spelled.graph.plans.plan(task.tile, read).rims
                for tile in {task.tile, *(rim.neighbour for rim in rims)}:
                    assert nx.has_path(data, written[tile].number, task.number)
        last.update(dict.fromkeys(phase.stage.writes, phase))


@settings(SLOW_DRAWS, max_examples=30)
@given(graphs())
def test_reductions_reach_every_tile_once_along_a_tree(pair: tuple[Spelled, Spelled]) -> None:
    _, spelled = pair
    for phase in spelled.phases:
        for making in phase.makes:
            leaves = _leaves(spelled, spelled.graph.root(making.instance), phase)
            assert leaves == [task.number for task in spelled.steps(phase.number)]


def _leaves(spelled: Spelled, number: int, phase: Phase) -> list[int]:
    task = spelled.tasks[number]
    assert task.phase is phase
    if task.kind is Kind.STEP:
        return [number]
    return [leaf for child in task.children for leaf in _leaves(spelled, child, phase)]


@st.composite
def toys_and_cuts(draw: st.DrawFn) -> tuple[Toy, tuple[int, ...]]:
    """A toy in one, two or three dimensions, and tiles for it."""
    shape, cut = draw(
        st.sampled_from([((12,), (3,)), ((13,), (5,)), ((9, 4), (3, 2)), ((7, 5), (4, 5)), ((6, 3, 4), (3, 3, 2))])
    )
    edges = tuple(draw(st.sampled_from(list(Edge))) for _ in shape)
    flags = {name: draw(st.booleans()) for name in ("repeats", "two_orders", "two_passes")}
    lags = {name: draw(st.integers(0, 2)) for name in ("dt_lag", "residual_lag")}
    return Toy(shape, edges, cycles=3, **flags, **lags), cut  # type: ignore[arg-type]


@settings(SLOW_DRAWS, max_examples=25)
@given(st.data(), toys_and_cuts(), st.booleans(), st.integers(0, 2**32 - 1))
def test_any_order_gives_the_classical_answer_to_the_bit(
    data: st.DataObject, toy_and_cut: tuple[Toy, tuple[int, ...]], fuse: bool, seed: int
) -> None:
    """Tasks in random order, several owners, some barriers, against the whole mesh marched step by step."""
    toy, cut = toy_and_cut
    program = Program(toy.problem(), cut, fuse)
    tiles = range(len(program.tiling))
    owners = data.draw(st.sampled_from([[0 for _ in tiles], [t % 3 for t in tiles], [ANYWHERE for _ in tiles]]))
    barriers = data.draw(st.lists(st.sampled_from(program.template.barrier_names()), unique=True))
    run = Shuffled(program, barriers, owners, seed)
    made = run.run()
    expected = March(toy.problem()).fields
    for name, whole in expected.items():
        assert np.array_equal(whole_field(program, made[name]), whole)


def test_random_orders_do_differ() -> None:
    """So that the test above does not run one order again and again."""
    program = Program(Toy((12,)).problem(), (3,))
    first, second = (Shuffled(program, (), [0] * 4, seed) for seed in (1, 2))
    first.run()
    second.run()
    assert sorted(first.order) == sorted(second.order)
    assert first.order != second.order
    cycles = [first.tasks[number].phase.cycle for number in first.order]
    assert cycles != sorted(cycles)


def test_a_reduced_time_step_waits_and_a_lagged_one_does_not() -> None:
    """Without a lag each cycle waits for all of the one before through dt; with a lag cycles overlap."""
    overlaps = {}
    for lag in (0, 1):
        program = Program(Toy((48,), dt_lag=lag, repeats=False, cycles=4).problem(), (4,))
        run = Shuffled(program, (), [0] * 12, seed=3)
        run.run()
        steps = [run.tasks[n] for n in run.order if run.tasks[n].kind is Kind.STEP and run.tasks[n].phase.values]
        overlaps[lag] = any(a.phase.cycle > b.phase.cycle for a, b in pairwise(steps))
    assert overlaps == {0: False, 1: True}


@pytest.mark.parametrize("lag", [0, 1, 2])
def test_a_verdict_taken_back_does_not_start_the_repeat_again(lag: int) -> None:
    """With a lag, iterations behind the stop still run and may measure a larger residual."""
    until = Reduction("v", rate, (Read("a"),), Combine.MAX, as_it_is, lag)
    repeat = Repeat("p", (Step("q", smooth, (Read("a"),), ("a",)),), until, says_stop, 9)
    splitting = Splitting(((repeat,),))
    script = {(0, 0): [False] * 5 + [True], (1, 0): [True, False, False, False, True]}
    follower = follow(build_template(splitting), 2, script)
    play(follower)
    ran = [p.cycle for p in follower.phases if follower.executed[p.number]]
    assert (ran.count(0), ran.count(1)) == (6 + lag, 1 + lag)
    assert follower.unroller.iterations("p") == 1 + lag

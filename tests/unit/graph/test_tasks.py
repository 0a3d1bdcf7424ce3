"""Tasks in small: what one phase becomes, with edges written out."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest

from breakstep.graph.stages import build_template
from breakstep.graph.tasks import ANYWHERE, TREE_ARITY, EdgeKind, Kind, Task, TaskGraph, conflicts
from breakstep.graph.unroll import Phase, Unroller
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.mesh.tiling import Tiling
from tests.toys import Toy


def line_of_tiles(count: int, edge: Edge = Edge.PERIODIC) -> Tiling:
    """Tiles of three zones along x."""
    return Tiling(Mesh((3 * count,), (1.0,), ((edge, edge),)), (3,))


def phases(cycles: int = 1, barriers: tuple[str, ...] = ()) -> list[Phase]:
    """Of the toy without a repeat: dt, then smooth, drift, grow+trade, blur (with dt) a cycle."""
    events = Unroller(build_template(Toy((12,), repeats=False).splitting()), cycles, barriers).run()
    return [event for event in events if isinstance(event, Phase)]


def expand(owners: list[int], upto: int = 2, barrier: str = "") -> tuple[TaskGraph, list[list[Task]]]:
    """The tasks of the first phases; a barrier stands behind the stage named."""
    graph = TaskGraph(line_of_tiles(len(owners)), owners)
    found = phases(barriers=(barrier,) if barrier else ())[:upto]
    return graph, [graph.expand(p, barrier_after=p.stage.name == barrier) for p in found]


def kinds(tasks: list[Task]) -> dict[str, int]:
    """How many tasks of each kind."""
    return dict(Counter(str(task.kind) for task in tasks))


def test_one_owner_needs_no_packing() -> None:
    _, (start, smooth) = expand([0, 0, 0, 0])
    assert kinds(start) == {"step": 4, "combine": 1}
    assert kinds(smooth) == {"step": 4}
    assert all(not rim.packed for task in smooth for rim in task.rims)


def test_rims_bound_for_one_worker_share_a_pack() -> None:
    """Two owners of two tiles each on a ring: each tile has one neighbour on the other worker."""
    _, (start, smooth) = expand([0, 0, 1, 1])
    assert kinds(smooth) == {"pack": 4, "step": 4}
    assert kinds(start) == {"step": 4, "pack": 2, "combine": 1}  # two contributions come from the other worker
    packs = {task.number: task for task in smooth if task.kind is Kind.PACK}
    for task in smooth:
        for rim in task.rims:
            assert rim.packed == (rim.producer in packs)
            if rim.packed:
                assert packs[rim.producer].tile == rim.rim.neighbour
                assert packs[rim.producer].worker != task.worker


def test_two_tiles_on_a_ring_pack_both_rims_together() -> None:
    _, (_, smooth) = expand([0, 1])
    packs = [task for task in smooth if task.kind is Kind.PACK]
    assert [(task.tile, len(task.cuts)) for task in packs] == [(1, 2), (0, 2)] or [
        (task.tile, len(task.cuts)) for task in packs
    ] == [(0, 2), (1, 2)]


def test_without_owners_every_rim_is_packed_but_a_tile_s_own() -> None:
    _, (_, smooth) = expand([ANYWHERE] * 3)
    assert kinds(smooth) == {"pack": 3, "step": 3}
    graph = TaskGraph(line_of_tiles(1), [ANYWHERE])
    alone = [graph.expand(phase, barrier_after=False) for phase in phases()[:2]][1]
    assert kinds(alone) == {"step": 1}


def test_a_barrier_counts_on_each_worker_and_releases_once() -> None:
    graph, (_, smooth, drift) = expand([0, 0, 1, 1], upto=3, barrier="smooth")
    assert kinds(smooth) == {"pack": 4, "step": 4, "count": 2, "release": 1}
    (release,) = (task for task in smooth if task.kind is Kind.RELEASE)
    counts = [task for task in smooth if task.kind is Kind.COUNT]
    assert [task.worker for task in counts] == [0, 1]
    assert sorted(number for task in counts for number in task.children) == list(graph.step_tasks(2))
    assert release.children == tuple(task.number for task in counts)
    assert release.label == "barrier:smooth"
    later = [task for task in drift if task.kind is Kind.STEP]
    assert all((release.number, EdgeKind.BARRIER) in list(task.edges()) for task in later)
    assert all(task.release is None for task in smooth)


@pytest.mark.parametrize("tiles", [1, TREE_ARITY, TREE_ARITY + 1, TREE_ARITY**2 + 1])
def test_reduction_trees_have_a_fixed_arity(tiles: int) -> None:
    graph, (start,) = expand([0] * tiles, upto=1)
    nodes = [task for task in start if task.kind is Kind.COMBINE]
    expected, level = 0, tiles
    while True:
        level = -(-level // TREE_ARITY)
        expected += level
        if level == 1:
            break
    assert len(nodes) == expected
    assert max(len(task.children) for task in nodes) <= TREE_ARITY
    assert graph.root(0) == nodes[-1].number
    assert nodes[-1].label == "dt"


def test_the_shape_of_a_tree_does_not_depend_on_owners() -> None:
    """Children stand in order of tile numbers whoever owns them, so that sums keep their bits."""

    def leaves(owners: list[int]) -> list[list[int]]:
        _, (start,) = expand(owners, upto=1)
        tile_of = {task.number: task.tile for task in start if task.tile >= 0}
        return [[tile_of[n] for n in task.children if n in tile_of] for task in start if task.kind is Kind.COMBINE]

    assert leaves([0] * 20) == leaves([t % 3 for t in range(20)]) == leaves([ANYWHERE] * 20)


def test_results_are_finished_from_the_result_before() -> None:
    graph = TaskGraph(line_of_tiles(4), [0] * 4)
    tasks = [task for phase in phases(2) for task in graph.expand(phase, barrier_after=False)]
    roots = [task for task in tasks if task.kind is Kind.COMBINE]
    assert [task.previous for task in roots] == [None, roots[0].number, roots[1].number]
    assert (roots[0].number, EdgeKind.REDUCTION) in list(roots[1].edges())


def test_values_and_gates_are_reduction_edges() -> None:
    graph, (start, _, _, grow) = expand([0] * 3, upto=4)
    root = graph.root(0)
    assert start[-1].number == root
    steps = [task for task in grow if task.kind is Kind.STEP]
    assert all((root, EdgeKind.REDUCTION) in list(task.edges()) for task in steps)
    assert steps[0].label == "grow+trade"


def test_phases_that_nothing_reads_are_forgotten() -> None:
    graph, _ = expand([0] * 3, upto=4)
    assert graph.forget(frozenset({2, 4})) == [1, 3]
    assert graph.forget(frozenset({2, 4})) == []
    assert list(graph.step_tasks(2)) == [4, 5, 6]


def test_bernstein_conditions() -> None:
    found = phases()
    smooth, drift, grow = found[1], found[2], found[3]
    assert conflicts(smooth, grow) == {"flow": {"u"}, "anti": {"u"}, "output": {"u"}}
    assert conflicts(smooth, drift) == {"flow": set(), "anti": set(), "output": set()}


@pytest.mark.parametrize("lags", [(0, 0), (2, 1)])
@pytest.mark.parametrize("barriers", [(), ("smooth", "solve")])
def test_what_is_kept_does_not_grow_with_the_run(lags: tuple[int, int], barriers: tuple[str, ...]) -> None:
    """After 10 cycles and after 100: as many phases, roots, releases and results; and all that is named is there."""
    toy = Toy((12,), dt_lag=lags[0], residual_lag=lags[1])
    template = build_template(toy.splitting())
    unroller, graph, sizes = Unroller(template, 101, barriers), TaskGraph(line_of_tiles(4), [0, 0, 1, 1]), {}
    behind, generator = template.stages_with_barrier(barriers), unroller.run()
    event, cycle = next(generator), -1
    while cycle < 100:
        if isinstance(event, Phase):
            if event.cycle > cycle:
                sizes[event.cycle] = kept(graph, unroller)
                cycle = event.cycle
            graph.expand(event, barrier_after=event.stage.index in behind)
            graph.forget(unroller.live_phases(("u", "w", "v")))
            graph.forget_control(unroller.live_instances(), unroller.barred)
            event = next(generator)
        else:
            assert all(graph.root(instance) >= 0 for instance in event.instances)
            event = generator.send([np.array([[1.0 if k % 5 else 0.0]]) for k in event.instances])
    assert sum(sizes[100]) > 0
    assert max(sum(sizes[c]) for c in range(90, 101)) <= max(sum(sizes[c]) for c in range(10, 21))


def kept(graph: TaskGraph, unroller: Unroller) -> tuple[int, int, int]:
    """How much is remembered of phases, of roots and releases, and of results."""
    results = sum(len(made.kept) for made in unroller._cycle_results.values())
    return len(graph._step_tasks), len(graph._roots) + len(graph._releases), results

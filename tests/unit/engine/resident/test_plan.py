"""Neighbours here and there, and rims to cut, on a line of tiles; homes of reduction nodes."""

from __future__ import annotations

import pytest

from breakstep.engine.resident.plan import ReductionTree, WorkerPlan
from breakstep.mesh.mesh import Edge
from breakstep.steps.step import Read
from tests.mixtures import mixing
from tests.unit.engine.resident.hands import line, phase_like

BOTH = mixing("both", [Read("a", (1, 0, 0)), Read("b", (2, 0, 0)), Read("c")], ["a"])


def test_what_a_line_reads_here_and_there() -> None:
    plan = WorkerPlan(line([BOTH]), [0, 0, 1, 0], 0)
    stage = plan.program.template.stages[0]
    assert plan.tiles == (0, 1, 3)
    halo = plan.reach(stage, ("a",))
    assert halo.here == {0: (0, 1), 1: (1, 0), 3: (3,)}
    assert halo.there == {0: (), 1: (2,), 3: (2,)}
    assert {tile: list(to) for tile, to in halo.cuts.items()} == {1: [1], 3: [1]}
    assert [(field, tile, rim.offset) for field, tile, rim in halo.cuts[1][1]] == [("a", 2, (-1, 0, 0))]
    local = plan.reach(stage, ("c",))
    assert local.here == {0: (0,), 1: (1,), 3: (3,)}
    assert not any(local.there.values())
    assert local.cuts == {}


def test_fields_of_one_version_are_read_together() -> None:
    plan = WorkerPlan(line([BOTH]), [0, 1, 1, 1], 1)
    phase = phase_like(plan.program, sources={"a": 4, "b": 4, "c": 2})
    assert [source for source, _ in plan.reaches(phase)] == [4, 2]
    (_, together), _ = plan.reaches(phase)
    assert [(f, t, rim.source[0]) for f, t, rim in together.cuts[1][0]] == [
        ("a", 0, slice(0, 1)),
        ("b", 0, slice(0, 2)),
    ]
    assert together.there == {1: (0,), 2: (), 3: ()}


def test_a_periodic_line_of_two_tiles_reads_the_same_neighbour_on_both_sides() -> None:
    plan = WorkerPlan(line([BOTH], tiles=2, edge=Edge.PERIODIC), [0, 1], 0)
    reach = plan.reach(plan.program.template.stages[0], ("a",))
    assert reach.there == {0: (1,)}
    assert [rim.offset[0] for _, _, rim in reach.cuts[0][1]] == [-1, 1]


def test_a_worker_without_tiles_reads_and_owes_nothing() -> None:
    plan = WorkerPlan(line([BOTH]), [0, 0, 0, 0], 1)
    reach = plan.reach(plan.program.template.stages[0], ("a", "b"))
    assert plan.tiles == ()
    assert (reach.here, reach.there, reach.cuts) == ({}, {}, {})


@pytest.mark.parametrize(("tiles", "shape"), [(1, [1]), (8, [1]), (9, [2, 1]), (65, [9, 2, 1])])
def test_a_node_lives_with_the_owner_of_its_first_tile(tiles: int, shape: list[int]) -> None:
    owners = list(range(tiles))
    tree = ReductionTree(owners)
    assert [sum(level == at for at, _ in tree.nodes) for level in range(tree.top + 1)] == shape
    assert {(level, index): node.home for (level, index), node in tree.nodes.items()} == {
        (level, index): 8 ** (level + 1) * index for level, size in enumerate(shape) for index in range(size)
    }
    below = [tiles, *shape]
    assert [sum(n.children for n in tree.nodes.values() if n.level == at) for at in range(len(shape))] == below[:-1]

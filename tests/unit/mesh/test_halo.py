"""Halos in small: what a kernel finds beyond an edge, written out number by number."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.mesh.fields import Field
from breakstep.mesh.halo import assemble, cut, plan_halo
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.mesh.tiling import Tiling

FLOW = Field("flow", ("level", "along"), normal={0: (1,)}, fixed={(0, 0): (7.0, 8.0), (0, 1): (9.0, 6.0)})


@pytest.mark.parametrize(
    ("edge", "level", "along"),
    [
        (Edge.PERIODIC, [3, 4, 1, 2, 3, 4, 1, 2], [30, 40, 10, 20, 30, 40, 10, 20]),
        (Edge.OUTFLOW, [1, 1, 1, 2, 3, 4, 4, 4], [10, 10, 10, 20, 30, 40, 40, 40]),
        (Edge.REFLECTING, [2, 1, 1, 2, 3, 4, 4, 3], [-20, -10, 10, 20, 30, 40, -40, -30]),
        (Edge.FIXED, [7, 7, 1, 2, 3, 4, 9, 9], [8, 8, 10, 20, 30, 40, 6, 6]),
    ],
)
def test_one_tile_along_one_axis(edge: Edge, level: list[int], along: list[int]) -> None:
    tiling = Tiling(Mesh((4,), (1.0,), ((edge, edge),)), (4,))
    own = np.array([[1.0, 2.0, 3.0, 4.0], [10.0, 20.0, 30.0, 40.0]]).reshape(2, 4, 1, 1)
    plan = plan_halo(tiling, 0, (2, 0, 0))
    made = assemble(plan, FLOW, own, {rim.offset: cut(rim, own) for rim in plan.rims})
    assert made[:, :, 0, 0].tolist() == [level, along]


def test_rims_are_views_until_they_are_assembled() -> None:
    """A halo costs one copy, not two."""
    tiling = Tiling(Mesh((4,), (1.0,), ((Edge.PERIODIC, Edge.PERIODIC),)), (2,))
    neighbour = np.zeros((2, 2, 1, 1))
    (left, right) = plan_halo(tiling, 0, (1, 0, 0)).rims
    assert np.shares_memory(cut(left, neighbour), neighbour)
    assert (left.neighbour, right.neighbour) == (1, 1)
    assert left.zones == 1


def test_corners_hold_nan_unless_asked_for() -> None:
    edges = ((Edge.PERIODIC, Edge.PERIODIC),) * 2
    tiling = Tiling(Mesh((2, 2), (1.0, 1.0), edges), (2, 2))
    own = np.ones((2, 2, 2, 1))
    made = {}
    for corners in (False, True):
        plan = plan_halo(tiling, 0, (1, 1, 0), corners)
        made[corners] = assemble(plan, FLOW, own, {rim.offset: cut(rim, own) for rim in plan.rims})
    assert np.isnan(made[False][:, [0, 0, -1, -1], [0, -1, 0, -1]]).all()
    assert np.isnan(made[False]).sum() == 8
    assert (made[True] == 1.0).all()

"""The mesh: three axes always, and every fault of a declaration at once."""

from __future__ import annotations

import pytest

from breakstep.errors import TilingError
from breakstep.mesh.mesh import Edge, Mesh

PERIODIC = (Edge.PERIODIC, Edge.PERIODIC)
OPEN = (Edge.OUTFLOW, Edge.REFLECTING)


def test_absent_axes_have_one_zone_and_do_not_count() -> None:
    mesh = Mesh((8,), (0.5,), (OPEN,))
    assert mesh.zones == (8, 1, 1)
    assert mesh.widths == (0.5, 1.0, 1.0)
    assert mesh.active == (True, False, False)
    assert mesh.origin == (0.0,)
    assert not mesh.is_periodic(0)
    assert not mesh.is_periodic(2)


def test_edges_are_found_by_axis_and_side() -> None:
    mesh = Mesh((4, 4), (1.0, 1.0), (PERIODIC, OPEN), origin=(-2.0, 3.0))
    assert mesh.is_periodic(0)
    assert mesh.edge(1, 0) is Edge.OUTFLOW
    assert mesh.edge(1, 1) is Edge.REFLECTING
    assert mesh.origin == (-2.0, 3.0)


def test_words_stand_for_edges() -> None:
    """A word that was kept as it is would be no member of Edge, and taken for an edge that is not periodic."""
    mesh = Mesh((4, 4), (1.0, 1.0), (["periodic", "periodic"], ("outflow", "reflecting")))  # type: ignore[arg-type]
    assert mesh == Mesh((4, 4), (1.0, 1.0), (PERIODIC, OPEN))
    assert mesh.is_periodic(0)
    assert mesh.edge(1, 1) is Edge.REFLECTING


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (((), (), ()), "one to three axes, not 0"),
        (((2,) * 4, (1.0,) * 4, (OPEN,) * 4), "one to three axes, not 4"),
        (((4, 4), (1.0,), (OPEN, OPEN)), "one entry an axis each"),
        (((0,), (1.0,), (OPEN,)), "at least one zone along each axis"),
        (((4,), (0.0,), (OPEN,)), "zone widths must be positive"),
        (((4,), (float("nan"),), (OPEN,)), "zone widths must be positive"),
        (((4,), (float("inf"),), (OPEN,)), "zone widths must be positive"),
        (
            ((4,), (1.0,), (("open", "outflow"),)),
            "x edges must be two of periodic, reflecting, outflow, fixed, not open",
        ),
        (((4,), (1.0,), (Edge.PERIODIC,)), "x edges must be two of periodic, reflecting, outflow, fixed, not periodic"),
        (((4,), (1.0,), ("periodic",)), "x edges must be two of"),
        (((4, 4), (1.0, 1.0), (OPEN, (Edge.OUTFLOW, Edge.PERIODIC))), "both y edges must be periodic or neither"),
        (((4,), (1.0,), (OPEN,), (0.0, 0.0)), "the origin of a mesh needs one entry an axis"),
    ],
)
def test_impossible_meshes_are_refused(arguments: tuple[object, ...], sentence: str) -> None:
    with pytest.raises(TilingError, match=sentence):
        Mesh(*arguments)  # type: ignore[arg-type]


def test_all_faults_are_told_together() -> None:
    with pytest.raises(TilingError) as caught:
        Mesh((0,), (-1.0,), ((Edge.PERIODIC, Edge.OUTFLOW),))
    assert str(caught.value).count(";") == 2

"""Tilings: what fits is cut evenly but for the last tile; what does not is refused with a sentence."""

from __future__ import annotations

import pytest

from breakstep.errors import TilingError
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.mesh.tiling import Tiling

PERIODIC = (Edge.PERIODIC, Edge.PERIODIC)
OPEN = (Edge.OUTFLOW, Edge.OUTFLOW)


def mesh_of(*shape: int) -> Mesh:
    """Periodic along x, open along the others."""
    edges = (PERIODIC, OPEN, OPEN)[: len(shape)]
    return Mesh(shape, (1.0,) * len(shape), edges)


def test_the_last_tile_of_an_axis_may_be_shorter() -> None:
    tiling = Tiling(mesh_of(10, 4), (4, 4))
    assert tiling.grid == (3, 1, 1)
    assert [tile.shape for tile in tiling.tiles] == [(4, 4, 1), (4, 4, 1), (2, 4, 1)]
    assert tiling.narrowest(0) == 2


def test_tiles_are_numbered_with_the_last_axis_fastest() -> None:
    tiling = Tiling(mesh_of(4, 6), (2, 2))
    assert [tile.place[:2] for tile in tiling.tiles] == [(0, 0), (0, 1), (0, 2), (1, 0), (1, 1), (1, 2)]


def test_neighbours_wrap_along_periodic_axes_only() -> None:
    tiling = Tiling(mesh_of(6, 6), (2, 2))
    assert tiling.neighbour(0, (-1, 0, 0)) == 6
    assert tiling.neighbour(0, (0, -1, 0)) is None
    assert tiling.neighbour(0, (-1, 1, 0)) == 7
    assert tiling.neighbour(0, (0, 0, 1)) is None


def test_a_single_periodic_tile_is_its_own_neighbour() -> None:
    tiling = Tiling(mesh_of(4), (4,))
    assert tiling.neighbour(0, (1, 0, 0)) == tiling.neighbour(0, (-1, 0, 0)) == 0


@pytest.mark.parametrize(
    ("tile_shape", "sentence"),
    [
        ((4,), r"tile shape \[4\] has 1 entries for a mesh with 2 axes"),
        ((4, 7), "a tile 7 zones long does not fit 6 zones along y"),
        ((0, 2), "a tile 0 zones long does not fit 10 zones along x"),
    ],
)
def test_tiles_that_do_not_fit_are_refused(tile_shape: tuple[int, ...], sentence: str) -> None:
    with pytest.raises(TilingError, match=sentence):
        Tiling(mesh_of(10, 6), tile_shape)


@pytest.mark.parametrize(
    ("widths", "sentence"),
    [
        ((3, 0, 0), "a step reads a halo of 3 zones along x, but the narrowest tile has 2; make tiles larger"),
        ((0, 0, 1), "a step reads a halo along z, which the mesh does not have"),
    ],
)
def test_halos_past_the_next_tile_are_refused(widths: tuple[int, int, int], sentence: str) -> None:
    with pytest.raises(TilingError, match=sentence):
        Tiling(mesh_of(10, 6), (4, 6)).require_halo(widths, "a step")

"""Halos against ``numpy.pad`` over the whole mesh: every tile must see what the undivided mesh would show it."""

from __future__ import annotations

import itertools

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from breakstep.mesh.fields import Field
from breakstep.mesh.halo import assemble, cut, plan_halo
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.mesh.tiling import Tiling
from breakstep.steps.step import Array, Read
from tests.reference import beyond, pad_mesh

FIELD = Field(
    "gas",
    ("density", "along_x", "along_y", "along_z"),
    normal={0: (1,), 1: (2,), 2: (3,)},
    fixed={(axis, side): (1.0, 2.0 + axis, 3.0 + side, -4.0) for axis in range(3) for side in (0, 1)},
)
SIDES = st.one_of(
    st.just((Edge.PERIODIC, Edge.PERIODIC)),
    st.tuples(*[st.sampled_from([Edge.REFLECTING, Edge.OUTFLOW, Edge.FIXED])] * 2),
)


@st.composite
def cuttings(draw: st.DrawFn) -> tuple[Tiling, Read]:
    """A mesh of one to three axes, a tiling and a halo that fits it; often one or two tiles along an axis."""
    dimensions = draw(st.integers(1, 3))
    shape, tile_shape, widths = [], [], []
    for _ in range(dimensions):
        width = draw(st.integers(0, 3))
        extent = draw(st.integers(max(width, 1), 5))
        tiles = draw(st.integers(1, 3))
        last = draw(st.integers(max(width, 1), extent))  # the last tile may be shorter
        shape.append(extent * (tiles - 1) + last)
        tile_shape.append(extent if tiles > 1 else last)
        widths.append(width)
    edges = tuple(draw(SIDES) for _ in range(dimensions))
    tiling = Tiling(Mesh(tuple(shape), (1.0,) * dimensions, edges), tuple(tile_shape))
    halo = (*widths, 0, 0)[:3]
    return tiling, Read("gas", halo, corners=draw(st.booleans()))  # type: ignore[arg-type]


def whole_mesh(tiling: Tiling) -> Array:
    """Numbers that differ from zone to zone and component to component."""
    return np.random.default_rng(1).normal(size=(FIELD.size, *tiling.mesh.zones))


def seen_by(tiling: Tiling, tile: int, read: Read, whole: Array) -> Array:
    """The padded array of a tile, put together from its neighbours' arrays."""
    arrays = [whole[(slice(None), *t.slices())] for t in tiling.tiles]
    plan = plan_halo(tiling, tile, read.halo, read.corners)
    rims = {rim.offset: cut(rim, arrays[rim.neighbour]) for rim in plan.rims}
    return assemble(plan, FIELD, arrays[tile], rims)


def expected_by(tiling: Tiling, tile: int, read: Read, whole: Array) -> Array:
    """The same window cut out of the padded whole mesh."""
    place = tiling.tiles[tile]
    padded = pad_mesh(whole, FIELD, tiling.mesh, Read("gas", read.halo, corners=True))
    spans = zip(place.origin, place.shape, read.halo, strict=True)
    window = padded[(slice(None), *(slice(o, o + n + 2 * w) for o, n, w in spans))].copy()
    if not read.corners:
        window[:, beyond(place.shape, read.halo) > 1] = np.nan
    return window


@settings(max_examples=150, deadline=None)
@given(cuttings())
def test_tiles_see_what_the_whole_mesh_shows(cutting: tuple[Tiling, Read]) -> None:
    tiling, read = cutting
    tiling.require_halo(read.halo, "a step")
    whole = whole_mesh(tiling)
    for tile in range(len(tiling)):
        made = seen_by(tiling, tile, read, whole)
        assert np.array_equal(made, expected_by(tiling, tile, read, whole), equal_nan=True)
        assert not made.flags.writeable


@settings(max_examples=60, deadline=None)
@given(cuttings())
def test_rims_and_edges_fill_each_declared_ghost_zone_once(cutting: tuple[Tiling, Read]) -> None:
    """Without corners, no zone of a padded array is filled twice; only corners are left empty."""
    tiling, read = cutting
    for tile in range(len(tiling)):
        plan = plan_halo(tiling, tile, read.halo, corners=False)
        filled = np.zeros(plan.padded_shape, dtype=int)
        for box in [plan.interior, *(r.target for r in plan.rims), *(f.target for f in plan.fills)]:
            filled[box] += 1
        corners = beyond(tiling.tiles[tile].shape, read.halo) > 1
        assert np.array_equal(filled, np.where(corners, 0, 1))


@settings(max_examples=60, deadline=None)
@given(cuttings())
def test_tilings_cover_every_zone_once(cutting: tuple[Tiling, Read]) -> None:
    tiling, _ = cutting
    covered = np.zeros(tiling.mesh.zones, dtype=int)
    for tile in tiling.tiles:
        covered[tile.slices()] += 1
        assert covered[tile.slices()].size == tile.zones
    assert (covered == 1).all()
    assert [tile.number for tile in tiling.tiles] == list(range(len(tiling)))


@settings(max_examples=60, deadline=None)
@given(cuttings())
def test_neighbours_are_mutual_and_touch(cutting: tuple[Tiling, Read]) -> None:
    tiling, _ = cutting
    offsets = itertools.product((-1, 0, 1), (-1, 0, 1), (-1, 0, 1))
    for tile, offset in itertools.product(range(len(tiling)), offsets):
        neighbour = tiling.neighbour(tile, offset)
        if neighbour is None:
            axes = [axis for axis in range(3) if offset[axis]]
            assert any(not tiling.mesh.is_periodic(axis) for axis in axes)
            continue
        opposite = (-offset[0], -offset[1], -offset[2])
        assert tiling.neighbour(neighbour, opposite) == tile
        here, there = tiling.tiles[tile], tiling.tiles[neighbour]
        for axis in range(3):
            ahead = here.origin[axis] + here.shape[axis] * (offset[axis] > 0)
            behind = there.origin[axis] + there.shape[axis] * (offset[axis] < 0)
            zones = tiling.mesh.zones[axis]
            assert ahead % zones == behind % zones

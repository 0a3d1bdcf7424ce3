"""Other tiles: the same program on a mesh that is cut differently.

Costs are put together anew from those of the recorded tiles. Whole tiles that become one are summed, which is exact
but for ghost zones that are no more. A tile that is cut gives each piece its share of zones: that spreads a
hot spot evenly over the tile, so that finer tiles come out better balanced than hot spots smaller than a tile
will let them be. What is neither kernel nor per task goes partly with the tile's border and partly with its
zones; the shares at :data:`RIM_WITH_ZONES` were measured.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from breakstep.errors import ForecastError
from breakstep.forecast.program import CostTables, Floats, Pattern, Program, Tiles

Offset = tuple[int, int, int]

#: Measured on ember_field with tiles of 48 x 48 and of 96 x 96 zones, two workers: putting ghost zones together took
#: 2.9 times as long a task (the border twice, the zones four times as many), checks and bookkeeping inside a task 2.1
#: times, and the gap before a task 2.0 times.
RIM_WITH_ZONES, REST_WITH_ZONES = 0.43, 0.35


def retiled(program: Program, shape: Sequence[int]) -> Program:
    """A program on tiles of another shape; the last tile of an axis may be shorter.

    Raises
    ------
    ForecastError
        The shape does not fit the mesh, or the profile does not show what tiles exchange along an axis.
    """
    old = program.tiles
    extents = _extents(old, shape)
    new = _cut(old, extents)
    for axis, (before, after) in enumerate(zip(old.grid, new.grid, strict=True)):
        if before == 1 and after > 1:
            raise ForecastError(
                f"tile: the profile has one tile along {'xyz'[axis]} and does not show what neighbours there"
                " exchange; record it with two or more, or leave that axis whole"
            )
    patterns = tuple(_pattern(old, new, pattern) for pattern in program.patterns)
    return replace(program, tiles=new, patterns=patterns, costs=_costs(program.costs, old, new))


def _extents(tiles: Tiles, shape: Sequence[int]) -> Offset:
    mesh = mesh_shape(tiles)
    active = [axis for axis in range(3) if mesh[axis] > 1]
    if len(shape) < len(active):
        raise ForecastError(f"tile: expected {len(active)} numbers of zones for this mesh, came {len(shape)}")
    extents = (*shape, 1, 1)[:3]
    for axis in range(3):
        if not 1 <= extents[axis] <= mesh[axis]:
            raise ForecastError(f"tile: {extents[axis]} zones do not fit {mesh[axis]} along {'xyz'[axis]}")
    return extents[0], extents[1], extents[2]


def mesh_shape(tiles: Tiles) -> Offset:
    """Zones of the whole mesh."""
    nx, ny, nz = (tiles.origin + tiles.shape).max(axis=0).tolist()
    return nx, ny, nz


def _cut(tiles: Tiles, extents: Offset) -> Tiles:
    mesh = mesh_shape(tiles)
    starts = itertools.product(*(range(0, mesh[axis], extents[axis]) for axis in range(3)))
    origin = np.array(list(starts), dtype=np.int64)
    shape = np.minimum(np.array(extents), np.array(mesh) - origin)
    return replace(tiles, origin=origin, shape=shape.astype(np.int64))


def offsets_of(tiles: Tiles, pattern: Pattern) -> set[Offset]:
    """From a reading tile to those it reads, in places of the grid; across an edge that wraps, the short way."""
    apart = tiles.places[pattern.producer] - tiles.places[pattern.consumer]
    apart = np.where(np.abs(apart) > 1, -np.sign(apart), apart)
    found = {(int(x), int(y), int(z)) for x, y, z in np.unique(apart, axis=0)}
    for axis in range(3):
        if tiles.grid[axis] == 2 and tiles.periodic[axis]:  # both neighbours are the same tile
            found |= {tuple(-o if i == axis else o for i, o in enumerate(offset)) for offset in found}  # type: ignore[misc]
    return found


def _pattern(old: Tiles, new: Tiles, pattern: Pattern) -> Pattern:
    places, grid = new.places, np.array(new.grid)
    periodic = np.array(new.periodic)
    number = np.ravel_multi_index(tuple(places.T), new.grid)
    at = np.empty(len(number), dtype=np.int64)
    at[number] = np.arange(len(number))
    pairs = []
    for offset in offsets_of(old, pattern):
        there = places + np.array(offset)
        inside = ((there >= 0) & (there < grid) | periodic).all(axis=1)
        there %= grid
        mine = np.flatnonzero(inside)
        pairs.append(np.stack([mine, at[np.ravel_multi_index(tuple(there[mine].T), new.grid)]]))
    consumer, producer = np.unique(np.concatenate(pairs, axis=1), axis=1)
    return Pattern(producer, consumer)


def shares(old: Tiles, new: Tiles) -> Floats:
    """Share of each old tile's zones that lies in each new tile, shape (old, new)."""
    zones = np.ones((len(old.origin), len(new.origin)))
    for axis in range(3):
        low = np.maximum(old.origin[:, None, axis], new.origin[None, :, axis])
        high = np.minimum((old.origin + old.shape)[:, None, axis], (new.origin + new.shape)[None, :, axis])
        zones *= np.maximum(high - low, 0)
    return zones / old.zones[:, None]


def overhead_factor(old: Tiles, new: Tiles) -> float:
    """How many times as long the gap before a task is on other tiles: what it frees grows with the tile."""
    return 1.0 - REST_WITH_ZONES + REST_WITH_ZONES * float(new.zones.mean() / old.zones.mean())


def _border(tiles: Tiles, mesh: Offset) -> Floats:
    """Zones of each tile's border, along axes that the mesh has."""
    zones = tiles.zones.astype(np.float64)
    return np.asarray(sum(2.0 * zones / tiles.shape[:, axis] for axis in range(3) if mesh[axis] > 1))


def _costs(costs: CostTables, old: Tiles, new: Tiles) -> CostTables:
    share = shares(old, new)
    mesh = mesh_shape(old)
    mean = share * old.zones[:, None] / new.zones[None, :]  # of the old tiles that a new one touches
    border = _border(old, mesh)
    a_face = (1.0 - RIM_WITH_ZONES) * costs.surface / np.where(border > 0, border, 1.0)
    rim = (a_face @ mean) * _border(new, mesh) + RIM_WITH_ZONES * (costs.surface @ share)
    rest = (1.0 - REST_WITH_ZONES) * (costs.rest @ mean) + REST_WITH_ZONES * (costs.rest @ share)
    return CostTables(
        kernel={step: values @ share for step, values in costs.kernel.items()},
        surface=rim,
        rest=rest,
        output=costs.output @ share,
    )


def tile_shapes(tiles: Tiles, most: int = 9) -> list[Offset]:
    """Shapes to try: the recorded one halved and doubled along all axes that have several zones, the coarsest first."""
    mesh, recorded = mesh_shape(tiles), tuple(int(n) for n in tiles.shape.max(axis=0))
    found: dict[Offset, None] = {}
    for power in range(-most, most + 1):
        shape = [
            min(max(round(recorded[axis] * 2.0**-power), 1), mesh[axis]) if tiles.grid[axis] > 1 else recorded[axis]
            for axis in range(3)
        ]
        if all(s >= SMALLEST or s == m for s, m in zip(shape, mesh, strict=True)):
            found[shape[0], shape[1], shape[2]] = None
    return sorted(found, reverse=True)


SMALLEST = 8  # zones along an axis: a tile of fewer is mostly ghost zones

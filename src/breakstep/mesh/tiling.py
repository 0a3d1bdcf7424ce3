"""Cutting a mesh into tiles: which zones a tile holds and who its neighbours are."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, field

from breakstep.errors import TilingError
from breakstep.mesh.mesh import AXIS_NAMES, Mesh, Triple


@dataclass(frozen=True)
class Tile:
    """A box of zones: its number, its place in the grid of tiles, its first zone and its extent."""

    number: int
    place: Triple
    origin: Triple
    shape: Triple

    @property
    def zones(self) -> int:
        """How many zones the tile holds."""
        return math.prod(self.shape)

    def slices(self) -> tuple[slice, slice, slice]:
        """Where the tile lies in an array over the whole mesh."""
        return tuple(slice(o, o + n) for o, n in zip(self.origin, self.shape, strict=True))  # type: ignore[return-value]


@dataclass(frozen=True)
class Tiling:
    """All tiles of a mesh, numbered with the last axis fastest; the last tile of an axis may be shorter.

    Raises
    ------
    TilingError
        A tile extent below one or above the mesh, or given for the wrong number of axes.
    """

    mesh: Mesh
    tile_shape: tuple[int, ...]
    grid: Triple = field(init=False)
    tiles: tuple[Tile, ...] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        mesh = self.mesh
        if len(self.tile_shape) != mesh.dimensions:
            raise TilingError(
                f"tile shape {list(self.tile_shape)} has {len(self.tile_shape)} entries"
                f" for a mesh with {mesh.dimensions} axes"
            )
        for name, zones, extent in zip(AXIS_NAMES, mesh.shape, self.tile_shape, strict=False):
            if not 1 <= extent <= zones:
                raise TilingError(f"a tile {extent} zones long does not fit {zones} zones along {name}")
        extents = (*self.tile_shape, *(1,) * (3 - mesh.dimensions))
        grid = tuple(-(-n // t) for n, t in zip(mesh.zones, extents, strict=True))
        object.__setattr__(self, "grid", grid)
        object.__setattr__(self, "tiles", tuple(self._cut(grid, extents)))  # type: ignore[arg-type]

    def _cut(self, grid: Triple, extents: Triple) -> list[Tile]:
        tiles = []
        for number, place in enumerate(itertools.product(*(range(g) for g in grid))):
            origin = tuple(p * e for p, e in zip(place, extents, strict=True))
            shape = tuple(min(e, n - o) for e, n, o in zip(extents, self.mesh.zones, origin, strict=True))
            tiles.append(Tile(number, place, origin, shape))  # type: ignore[arg-type]
        return tiles

    def __len__(self) -> int:
        return len(self.tiles)

    def neighbour(self, tile: int, offset: Triple) -> int | None:
        """Number of the tile at ``offset`` places, or None beyond an edge that is not periodic."""
        place = []
        for axis in range(3):
            at = self.tiles[tile].place[axis] + offset[axis]
            if not 0 <= at < self.grid[axis]:
                if not self.mesh.is_periodic(axis):
                    return None
                at %= self.grid[axis]
            place.append(at)
        return (place[0] * self.grid[1] + place[1]) * self.grid[2] + place[2]

    def narrowest(self, axis: int) -> int:
        """The smallest extent of any tile along an axis."""
        return min(tile.shape[axis] for tile in self.tiles)

    def require_halo(self, widths: Triple, what: str) -> None:
        """Raise TilingError when a halo would reach past the next tile."""
        for axis, width in enumerate(widths):
            narrowest = self.narrowest(axis)
            if width > 0 and not self.mesh.active[axis]:
                raise TilingError(f"{what} reads a halo along {AXIS_NAMES[axis]}, which the mesh does not have")
            if width > narrowest:
                raise TilingError(
                    f"{what} reads a halo of {width} zones along {AXIS_NAMES[axis]}, but the narrowest tile"
                    f" has {narrowest}; make tiles larger or cut the mesh evenly"
                )

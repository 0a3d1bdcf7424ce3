"""Halos: which rims of which neighbours a tile reads, and how a padded array is put together.

A padded array is filled in a fixed order: own zones, rims from neighbours, then each edge of the mesh
axis by axis. Ghost zones that nobody declared (corners, unless asked for) hold NaN, so that a kernel
that reads them is found out rather than served by luck.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Edge, Triple
from breakstep.mesh.tiling import Tiling

Array: TypeAlias = NDArray[np.float64]
Box: TypeAlias = tuple[slice, slice, slice]

OFFSETS: tuple[Triple, ...] = tuple(itertools.product((-1, 0, 1), (-1, 0, 1), (-1, 0, 1)))


@dataclass(frozen=True)
class Rim:
    """The part of one neighbour that a tile reads: where it lies there, and where it goes here."""

    offset: Triple
    neighbour: int
    source: Box
    target: Box

    @property
    def zones(self) -> int:
        """How many zones the rim holds."""
        return int(np.prod([s.stop - s.start for s in self.source]))


@dataclass(frozen=True)
class EdgeFill:
    """Ghost zones beyond one side of the mesh, filled from zones of the same padded array."""

    axis: int
    side: int
    kind: Edge
    target: Box
    source: Box


@dataclass(frozen=True)
class HaloPlan:
    """How one tile's padded array of given halo widths is put together."""

    tile: int
    widths: Triple
    padded_shape: Triple
    interior: Box
    rims: tuple[Rim, ...]
    fills: tuple[EdgeFill, ...]


def plan_halo(tiling: Tiling, tile: int, widths: Triple, corners: bool = False) -> HaloPlan:
    """Work out the rims and edge fills of one tile.

    Parameters
    ----------
    widths : tuple of int
        Halo zones along x, y, z; 0 for none.
    corners : bool
        Whether ghost zones diagonal to the tile are read too.
    """
    shape = tiling.tiles[tile].shape
    padded = tuple(n + 2 * w for n, w in zip(shape, widths, strict=True))
    interior = tuple(slice(w, w + n) for n, w in zip(shape, widths, strict=True))
    return HaloPlan(
        tile=tile,
        widths=widths,
        padded_shape=padded,  # type: ignore[arg-type]
        interior=interior,  # type: ignore[arg-type]
        rims=tuple(_rims(tiling, tile, widths, corners)),
        fills=tuple(_fills(tiling, tile, widths, corners)),
    )


def _rims(tiling: Tiling, tile: int, widths: Triple, corners: bool) -> list[Rim]:
    shape = tiling.tiles[tile].shape
    rims = []
    for offset in OFFSETS:
        along = [axis for axis in range(3) if offset[axis]]
        if not along or any(widths[axis] == 0 for axis in along) or (len(along) > 1 and not corners):
            continue
        neighbour = tiling.neighbour(tile, offset)
        if neighbour is None:
            continue
        source, target = [], []
        for axis in range(3):
            n, w, theirs = shape[axis], widths[axis], tiling.tiles[neighbour].shape[axis]
            if offset[axis] < 0:
                source.append(slice(theirs - w, theirs))
                target.append(slice(0, w))
            elif offset[axis] > 0:
                source.append(slice(0, w))
                target.append(slice(n + w, n + 2 * w))
            else:
                source.append(slice(0, n))
                target.append(slice(w, w + n))
        rims.append(Rim(offset, neighbour, tuple(source), tuple(target)))  # type: ignore[arg-type]
    return rims


def _fills(tiling: Tiling, tile: int, widths: Triple, corners: bool) -> list[EdgeFill]:
    shape = tiling.tiles[tile].shape
    fills = []
    for axis, side in itertools.product(range(3), (0, 1)):
        w, n = widths[axis], shape[axis]
        offset = tuple((-1, 1)[side] if a == axis else 0 for a in range(3))
        if w == 0 or tiling.neighbour(tile, offset) is not None:  # type: ignore[arg-type]
            continue
        kind = tiling.mesh.edge(axis, side)
        across = [_across(widths[a], shape[a], corners) for a in range(3)]
        target, source = list(across), list(across)
        target[axis] = slice(0, w) if side == 0 else slice(n + w, n + 2 * w)
        if kind is Edge.OUTFLOW:
            source[axis] = slice(w, w + 1) if side == 0 else slice(n + w - 1, n + w)
        else:  # the mirror zones, nearest to the edge first
            source[axis] = slice(2 * w - 1, w - 1, -1) if side == 0 else slice(n + w - 1, n - 1, -1)
        fills.append(EdgeFill(axis, side, kind, tuple(target), tuple(source)))  # type: ignore[arg-type]
    return fills


def _across(width: int, extent: int, corners: bool) -> slice:
    return slice(0, extent + 2 * width) if corners else slice(width, width + extent)


def assemble(plan: HaloPlan, field: Field, own: Array, rims: Mapping[Triple, Array]) -> Array:
    """Put a padded array together.

    Parameters
    ----------
    own : ndarray, shape (components, nx, ny, nz)
        The tile's own zones.
    rims : mapping of offset to ndarray
        For each rim of the plan, the neighbour's zones already cut to ``Rim.source``.

    Returns
    -------
    ndarray, shape (components, nx + 2 wx, ny + 2 wy, nz + 2 wz), not writeable
    """
    padded = np.empty((field.size, *plan.padded_shape))
    if sum(width > 0 for width in plan.widths) > 1:
        padded.fill(np.nan)  # only then are there corners
    padded[(slice(None), *plan.interior)] = own
    for rim in plan.rims:
        padded[(slice(None), *rim.target)] = rims[rim.offset]
    for fill in plan.fills:
        _fill_edge(padded, fill, field)
    padded.flags.writeable = False
    return padded


def _fill_edge(padded: Array, fill: EdgeFill, field: Field) -> None:
    target = (slice(None), *fill.target)
    if fill.kind is Edge.FIXED:
        padded[target] = np.asarray(field.fixed[(fill.axis, fill.side)])[:, None, None, None]
        return
    padded[target] = padded[(slice(None), *fill.source)]
    if fill.kind is Edge.REFLECTING:
        for component in field.normal.get(fill.axis, ()):
            padded[(component, *fill.target)] *= -1.0


def cut(rim: Rim, neighbour: Array) -> Array:
    """The zones of a neighbour's array that a rim needs, as a view."""
    return neighbour[(slice(None), *rim.source)]

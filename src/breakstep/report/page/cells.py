"""Tiles as cells of a map: where each is drawn, in which order along a space-filling curve, and what it is called.

A mesh of more tiles than a map can show is drawn in blocks of neighbouring tiles. Axes of one tile are left out;
layers of a three-dimensional mesh stand side by side.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from breakstep.partition import curve_order
from breakstep.profile.frames import Integers
from breakstep.profile.manifest import Manifest
from breakstep.profile.words import tile_names

#: A phone shows a map 350 pixels wide: 20 cells of 17 pixels along a square's edge can still be pointed at.
MOST_CELLS = 400
NOBODY = -1


@dataclass(frozen=True)
class Cells:
    """Cells in the order of the curve.

    Attributes
    ----------
    of_tile : ndarray of int64, shape (tiles,)
        The cell that each tile belongs to.
    places : list of (int, int)
        Column from the left and row from the top of each cell.
    labels : list of str
        The tile's numbers along the mesh's axes, or from where to where a block reaches.
    owners : list of int
        The worker that owns all of a cell's tiles, -1 where there are several.
    columns, rows : int
        Extent of the whole map.
    block : int
        Tiles of a cell along each axis.
    """

    of_tile: Integers
    places: list[tuple[int, int]]
    labels: list[str]
    owners: list[int]
    columns: int
    rows: int
    block: int

    @property
    def count(self) -> int:
        """How many cells there are."""
        return len(self.places)

    def cell_of(self, tile: int) -> int:
        """The cell of a tile; -1 for what belongs to no tile."""
        return int(self.of_tile[tile]) if tile >= 0 else NOBODY

    def as_json(self) -> dict[str, Any]:
        """What the page needs to draw maps."""
        return {
            "columns": self.columns,
            "rows": self.rows,
            "block": self.block,
            "tiles": len(self.of_tile),
            "places": [list(place) for place in self.places],
            "labels": self.labels,
            "owners": self.owners,
        }


def cells_of(manifest: Manifest) -> Cells:
    """The cells of a run's mesh."""
    grid = _grid(manifest)
    extent = grid.max(axis=0) + 1
    block = _block(extent)
    coarse = grid // block
    unique, inverse = np.unique(coarse, axis=0, return_inverse=True)
    inverse = inverse.reshape(-1)
    order = curve_order([(int(a), int(b), int(c)) for a, b, c in unique])
    rank = np.empty(len(order), dtype=np.int64)
    rank[order] = np.arange(len(order))
    corners = [unique[place] for place in order]
    places = [_place(corner, -(-extent // block)) for corner in corners]
    of_tile = rank[inverse]
    names = tile_names(manifest["mesh"]["tiles"])
    return Cells(
        of_tile=of_tile,
        places=places,
        labels=[names[tile] for tile in np.argsort(of_tile)]
        if block == 1
        else [_label(corner, block, extent) for corner in corners],
        owners=_owners(of_tile, np.asarray(manifest["placement"], dtype=np.int64), len(order)),
        columns=max(column for column, _ in places) + 1,
        rows=max(row for _, row in places) + 1,
        block=block,
    )


def _grid(manifest: Manifest) -> Integers:
    """Place of each tile in the grid of tiles, axes of more than one tile first."""
    origins = np.array([tile["origin"] for tile in manifest["mesh"]["tiles"]], dtype=np.int64).reshape(-1, 3)
    numbered = [np.unique(origins[:, axis], return_inverse=True)[1].reshape(-1) for axis in range(3)]
    numbered.sort(key=lambda column: bool(column.max() == 0))
    return np.stack(numbered, axis=1).astype(np.int64)


def _block(extent: Integers) -> int:
    """The smallest block that leaves few enough cells."""
    block = 1
    while math.prod(-(-int(n) // block) for n in extent) > MOST_CELLS:
        block += 1
    return block


def _place(corner: Integers, extent: Integers) -> tuple[int, int]:
    """Where a cell is drawn: the first axis to the right, the second upwards, layers of the third side by side."""
    a, b, layer = (int(n) for n in corner)
    across = math.ceil(math.sqrt(int(extent[2])))
    column = a + (layer % across) * (int(extent[0]) + 1)
    row = (int(extent[1]) - 1 - b) + (layer // across) * (int(extent[1]) + 1)
    return column, row


def _label(corner: Integers, block: int, extent: Integers) -> str:
    """From where to where a block of tiles reaches along each axis."""
    axes = [axis for axis in range(3) if extent[axis] > 1] or [0]
    ends = [(int(corner[a]) * block, min((int(corner[a]) + 1) * block, int(extent[a])) - 1) for a in axes]
    return ",".join(str(low) if low == high else f"{low}-{high}" for low, high in ends)


def _owners(of_tile: Integers, placement: Integers, count: int) -> list[int]:
    lowest: NDArray[np.int64] = np.full(count, np.iinfo(np.int64).max)
    highest = np.full(count, -1, dtype=np.int64)
    np.minimum.at(lowest, of_tile, placement)
    np.maximum.at(highest, of_tile, placement)
    return [int(low) if low == high else NOBODY for low, high in zip(lowest, highest, strict=True)]

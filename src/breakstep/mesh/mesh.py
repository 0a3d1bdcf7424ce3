"""The mesh: a box of equal zones in one, two or three dimensions, and what lies beyond its edges.

It knows geometry only. Absent axes have one zone and no halo, so that kernels see three axes always.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from enum import StrEnum
from typing import TypeAlias

from breakstep.errors import TilingError
from breakstep.mesh.shown import columns

Triple: TypeAlias = tuple[int, int, int]
AXIS_NAMES = ("x", "y", "z")


class Edge(StrEnum):
    """What a kernel finds in the ghost zones beyond one side of the mesh."""

    PERIODIC = "periodic"
    REFLECTING = "reflecting"
    OUTFLOW = "outflow"
    FIXED = "fixed"


@dataclass(frozen=True)
class Mesh:
    """A box of zones.

    Parameters
    ----------
    shape : tuple of int
        Zones along each of one to three axes.
    spacing : tuple of float
        Zone width along the same axes [cm].
    edges : tuple of (Edge, Edge)
        Condition on the low and the high side of each axis, as members of Edge or as their words; both sides are
        periodic or neither is.
    origin : tuple of float
        Position of the low corner [cm].

    Raises
    ------
    TilingError
        Wrong number of axes, no zones, a width that is not positive, or one-sided periodicity.
    """

    shape: tuple[int, ...]
    spacing: tuple[float, ...]
    edges: tuple[tuple[Edge, Edge], ...]
    origin: tuple[float, ...] = ()
    zones: Triple = field(init=False)
    widths: tuple[float, float, float] = field(init=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "edges", tuple(_known_pair(sides) for sides in self.edges))
        faults = list(self._faults())
        if faults:
            raise TilingError("; ".join(faults))
        missing = 3 - self.dimensions
        object.__setattr__(self, "origin", (*(self.origin or (0.0,) * self.dimensions),))
        object.__setattr__(self, "zones", (*self.shape, *(1,) * missing))
        object.__setattr__(self, "widths", (*self.spacing, *(1.0,) * missing))

    def _faults(self) -> list[str]:
        faults = []
        if not 1 <= len(self.shape) <= 3:
            faults.append(f"a mesh has one to three axes, not {len(self.shape)}")
        if not len(self.shape) == len(self.spacing) == len(self.edges):
            faults.append("shape, spacing and edges of a mesh need one entry an axis each")
        if self.origin and len(self.origin) != len(self.shape):
            faults.append("the origin of a mesh needs one entry an axis")
        if any(n < 1 for n in self.shape):
            faults.append(f"a mesh needs at least one zone along each axis, not {self.shape}")
        if any(not 0.0 < dx < math.inf for dx in self.spacing):
            faults.append(f"zone widths must be positive, not {self.spacing}")
        for name, sides in zip(AXIS_NAMES, self.edges, strict=False):
            if len(sides) != 2 or not all(isinstance(side, Edge) for side in sides):
                known = ", ".join(Edge)
                faults.append(f"the {name} edges must be two of {known}, not {', '.join(map(str, sides))}")
            elif (sides[0] is Edge.PERIODIC) != (sides[1] is Edge.PERIODIC):
                faults.append(f"both {name} edges must be periodic or neither")
        return faults

    @property
    def dimensions(self) -> int:
        """Number of axes that the user gave."""
        return len(self.shape)

    @property
    def active(self) -> tuple[bool, bool, bool]:
        """Which of the three axes exist."""
        return (True, self.dimensions > 1, self.dimensions > 2)

    def is_periodic(self, axis: int) -> bool:
        """Whether the two ends of an axis meet."""
        return axis < self.dimensions and self.edges[axis][0] is Edge.PERIODIC

    def edge(self, axis: int, side: int) -> Edge:
        """Condition at the low (0) or high (1) side of an axis."""
        return self.edges[axis][side]

    def _repr_html_(self) -> str:
        """One row an axis, for notebooks."""
        rows = [
            (name, zones, f"{width:g}", f"{low:g}", f"{low + zones * width:g}", f"{sides[0]}, {sides[1]}")
            for name, zones, width, low, sides in zip(
                AXIS_NAMES, self.shape, self.spacing, self.origin, self.edges, strict=False
            )
        ]
        heads = ("axis", "zones", "zone width [cm]", "from [cm]", "to [cm]", "edges")
        return columns(f"Mesh of {math.prod(self.shape)} zones", heads, rows)


def _known_pair(sides: object) -> tuple[object, ...]:
    """The two conditions of an axis; words become members, so that none is mistaken for another kind later."""
    pair = tuple(sides) if isinstance(sides, tuple | list) else (sides,)
    return tuple(Edge(side) if side in tuple(Edge) else side for side in pair)

"""Fields: named component arrays that live on the zones of a mesh.

A field says how many numbers a zone holds and how they behave at an edge; it holds no data.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from breakstep.errors import DeclarationError


@dataclass(frozen=True)
class Field:
    """One field.

    Parameters
    ----------
    name : str
        How steps refer to it.
    components : tuple of str
        Names of the numbers each zone holds; arrays have shape (components, nx, ny, nz).
    units : tuple of str
        Unit of each component, or one unit for all.
    normal : mapping of int to tuple of int
        For each axis, the components that point along it and so change sign in a mirror.
    fixed : mapping of (int, int) to tuple of float
        For each (axis, side) with a fixed edge, the value of each component beyond it.
    scratch : bool
        Made and used within a cycle: not part of the final state, and without an initial state unless given.
    per_tile : bool
        One value a tile rather than a zone: arrays have shape (components, 1, 1, 1). Always scratch.
    """

    name: str
    components: tuple[str, ...]
    units: tuple[str, ...] = ("",)
    normal: Mapping[int, tuple[int, ...]] = field(default_factory=dict)
    fixed: Mapping[tuple[int, int], tuple[float, ...]] = field(default_factory=dict)
    scratch: bool = False
    per_tile: bool = False

    def __post_init__(self) -> None:
        if not self.name.isidentifier():
            raise DeclarationError(f"a field's name must be an identifier, not {self.name!r}")
        if not self.components:
            raise DeclarationError(f"field {self.name!r} needs at least one component")
        if self.per_tile and not self.scratch:
            raise DeclarationError(f"field {self.name!r} holds one value a tile, so it must be scratch")
        if len(self.units) not in (1, self.size):
            raise DeclarationError(
                f"field {self.name!r} gives {len(self.units)} units for {self.size} components; give one or one each"
            )
        for axis, component in ((axis, c) for axis, listed in self.normal.items() for c in listed):
            if not 0 <= component < self.size:
                raise DeclarationError(f"field {self.name!r} has no component {component} to point along axis {axis}")
        for (axis, side), values in self.fixed.items():
            if len(values) != len(self.components):
                raise DeclarationError(
                    f"field {self.name!r}: the fixed edge ({axis}, {side}) gives {len(values)} values"
                    f" for {len(self.components)} components"
                )

    @property
    def size(self) -> int:
        """Numbers a zone holds."""
        return len(self.components)

    def shape(self, zones: tuple[int, int, int]) -> tuple[int, int, int, int]:
        """Shape of its array on a tile of so many zones."""
        return (self.size, 1, 1, 1) if self.per_tile else (self.size, *zones)

    def unit(self, component: int) -> str:
        """Unit of one component."""
        return self.units[component] if len(self.units) > 1 else self.units[0]

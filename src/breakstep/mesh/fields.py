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
    """

    name: str
    components: tuple[str, ...]
    units: tuple[str, ...] = ("",)
    normal: Mapping[int, tuple[int, ...]] = field(default_factory=dict)
    fixed: Mapping[tuple[int, int], tuple[float, ...]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if not self.name.isidentifier():
            raise DeclarationError(f"a field's name must be an identifier, not {self.name!r}")
        if not self.components:
            raise DeclarationError(f"field {self.name!r} needs at least one component")
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

    def unit(self, component: int) -> str:
        """Unit of one component."""
        return self.units[component] if len(self.units) > 1 else self.units[0]

"""What ``[initial]`` and ``[fixed]`` may hold: states of the gas, and how they are laid out in the mesh."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated, Literal

from pydantic import BeforeValidator, Field

from breakstep.kernels.constants import C_LIGHT
from breakstep.scenario.sections import NotNegative, PositiveLength, Section, Temperature, Vector, lists

Density = Annotated[float, Field(ge=1e-30, le=1e16)]
Pressure = Annotated[float, Field(ge=1e-30, le=1e40)]
Speed = Annotated[float, Field(ge=-C_LIGHT, le=C_LIGHT)]
Velocity = Annotated[tuple[Speed, ...], BeforeValidator(lists), Field(min_length=1, max_length=3)]
Composition = dict[str, Annotated[float, Field(ge=0.0, le=1.0)]]
AxisWord = Literal["x", "y", "z"]


class StateSection(Section):
    """A state of the gas, and of the radiation in it."""

    density: Density = Field(description="mass density [g/cm^3]")
    temperature: Temperature | None = Field(default=None, description="temperature of the gas [K]")
    pressure: Pressure | None = Field(default=None, description="pressure, instead of the temperature [erg/cm^3]")
    velocity: Velocity = Field(default=(0.0,), description="velocity along x, y, z [cm/s]")
    composition: Composition = Field(default_factory=dict, description="mass fraction of each species")
    radiation_temperature: Temperature | None = Field(
        default=None, description="temperature of the radiation, that of the gas if left out [K]"
    )


class UniformSection(StateSection):
    """The same state everywhere."""

    kind: Literal["uniform"] = Field(description="how the initial state is laid out")


class SpotSection(Section):
    """A round region that fades into what surrounds it."""

    centre: Vector = Field(description="centre of the spot [cm]")
    radius: PositiveLength = Field(description="distance at which the spot has faded [cm]")
    fade: Annotated[float, Field(ge=1e-6, le=1.0)] = Field(
        default=1.0, description="share of the radius, from outside, over which it fades"
    )
    temperature: Temperature = Field(description="temperature at the centre [K]")
    density: Density | None = Field(default=None, description="density at the centre, if different [g/cm^3]")
    composition: Composition | None = Field(default=None, description="mass fractions at the centre, if different")


class SpotsSection(StateSection):
    """A uniform state with round spots in it, each laid over those before."""

    kind: Literal["spots"] = Field(description="how the initial state is laid out")
    spots: Annotated[tuple[SpotSection, ...], BeforeValidator(lists), Field(min_length=1, max_length=10_000)] = Field(
        description="the spots"
    )


class RiemannSection(Section):
    """Two uniform states that meet at a plane."""

    kind: Literal["riemann"] = Field(description="how the initial state is laid out")
    axis: AxisWord = Field(default="x", description="axis across which the states differ")
    position: NotNegative = Field(description="where they meet along that axis [cm]")
    left: StateSection = Field(description="state below the position")
    right: StateSection = Field(description="state above the position")


class BlastSection(StateSection):
    """A uniform state with energy let loose around a point."""

    kind: Literal["blast"] = Field(description="how the initial state is laid out")
    energy: Annotated[float, Field(gt=0.0, le=1e60)] = Field(
        description="energy let loose: erg in three dimensions, erg/cm in two, erg/cm^2 in one"
    )
    radius: PositiveLength = Field(description="distance within which it is let loose [cm]")
    centre: Vector | None = Field(default=None, description="the point, the middle of the mesh if left out [cm]")


class RadiationSlabSection(StateSection):
    """Uniform gas with a slab of hotter (or colder) radiation across the mesh."""

    kind: Literal["radiation_slab"] = Field(description="how the initial state is laid out")
    axis: AxisWord = Field(default="x", description="axis along which the slab is bounded")
    begins: NotNegative = Field(default=0.0, description="where the slab begins along that axis [cm]")
    ends: PositiveLength = Field(description="where the slab ends along that axis [cm]")
    slab_temperature: Temperature = Field(description="temperature of the radiation in the slab [K]")


InitialSection = UniformSection | SpotsSection | RiemannSection | BlastSection | RadiationSlabSection


class FixedSection(Section):
    """``[fixed]``: the state beyond each edge of kind fixed."""

    x_low: StateSection | None = Field(default=None, description="state beyond the low x edge")
    x_high: StateSection | None = Field(default=None, description="state beyond the high x edge")
    y_low: StateSection | None = Field(default=None, description="state beyond the low y edge")
    y_high: StateSection | None = Field(default=None, description="state beyond the high y edge")
    z_low: StateSection | None = Field(default=None, description="state beyond the low z edge")
    z_high: StateSection | None = Field(default=None, description="state beyond the high z edge")


def edge_key(axis: int, side: int) -> str:
    """The key of one edge in ``[fixed]``."""
    return f"{'xyz'[axis]}_{('low', 'high')[side]}"


def edges(dimensions: int) -> Iterator[tuple[int, int]]:
    """(axis, side) of every edge of a mesh."""
    for axis in range(dimensions):
        yield from ((axis, 0), (axis, 1))

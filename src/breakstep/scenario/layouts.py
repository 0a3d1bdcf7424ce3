"""How an initial state is laid out: the state of every zone as a function of where its centre lies.

Only additions, multiplications, divisions, square roots and comparisons are used, one zone at a time: those
are rounded alike wherever a zone stands in an array, so that no tiling changes a bit. This module refuses to
know equations of state, fields and files.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol, TypeAlias

import numpy as np
from numpy.typing import NDArray

from breakstep.mesh.mesh import Mesh
from breakstep.mesh.tiling import Tile

Array: TypeAlias = NDArray[np.float64]
Point: TypeAlias = tuple[float, ...]


@dataclass(frozen=True)
class State:
    """One state of gas and radiation.

    Parameters
    ----------
    density, temperature : float
        [g/cm^3], [K]
    velocity : tuple of 3 floats
        [cm/s]
    fractions : tuple of float
        Mass fraction of each species.
    radiation_temperature : float or None
        [K]; None for that of the gas.
    """

    density: float
    temperature: float
    velocity: tuple[float, float, float] = (0.0, 0.0, 0.0)
    fractions: tuple[float, ...] = ()
    radiation_temperature: float | None = None


@dataclass
class Zones:
    """The states of the zones of a tile; arrays of shape (nx, ny, nz), vectors in front of that.

    Attributes
    ----------
    density, temperature, radiation_temperature : ndarray
        [g/cm^3], [K], [K]
    velocity : ndarray, shape (3, nx, ny, nz)
        [cm/s]
    fractions : ndarray, shape (n_species, nx, ny, nz)
        Mass fractions.
    deposit : ndarray
        Energy density on top of that of the temperature [erg/cm^3].
    """

    density: Array
    temperature: Array
    radiation_temperature: Array
    velocity: Array
    fractions: Array
    deposit: Array


class Layout(Protocol):
    """The state of every zone of a tile."""

    def zones(self, tile: Tile, mesh: Mesh) -> Zones:
        """States of the tile's zones, a pure function of their centres."""
        ...


def centres(tile: Tile, mesh: Mesh, axis: int) -> Array:
    """Positions of a tile's zone centres along one axis [cm], shaped to broadcast over the tile."""
    first, count = tile.origin[axis], tile.shape[axis]
    low = mesh.origin[axis] if axis < mesh.dimensions else 0.0
    along: Array = low + (np.arange(first, first + count, dtype=np.float64) + 0.5) * mesh.widths[axis]
    shape = [1, 1, 1]
    shape[axis] = count
    return along.reshape(shape)


def distance(tile: Tile, mesh: Mesh, point: Point) -> Array:
    """Distance of zone centres from a point [cm], the shorter way round along periodic axes."""
    squares: Array = np.zeros(tile.shape)
    for axis in range(mesh.dimensions):
        away = np.abs(centres(tile, mesh, axis) - point[axis])
        if mesh.is_periodic(axis):
            away = np.minimum(away, mesh.widths[axis] * mesh.zones[axis] - away)
        squares = squares + away * away
    return np.asarray(np.sqrt(squares))


def faded(away: Array, radius: float, fade: float) -> Array:
    """A weight that is 1 inside and fades to 0 at ``radius``, with two continuous derivatives.

    The quintic 1 - 6 t^5 + 15 t^4 - 10 t^3 over the outer share ``fade`` of the radius: smooth enough for a
    second-order scheme, exactly zero outside, and free of library functions whose bits might differ.
    """
    t = np.clip((away / radius - (1.0 - fade)) / fade, 0.0, 1.0)
    return 1.0 - t * t * t * (10.0 - t * (15.0 - 6.0 * t))


FADED_VOLUME = (1.0, 2.0 * np.pi / 7.0, 5.0 * np.pi / 21.0)
"""Integral of the weight w with radius 1 and fade 1 over a line, a disc and a ball: 2 times the integral of w
from 0 to 1, 2 pi times that of t w, 4 pi times that of t^2 w."""


def uniform(state: State, tile: Tile) -> Zones:
    """The same state in all zones of a tile."""
    shape = tile.shape
    radiation = state.temperature if state.radiation_temperature is None else state.radiation_temperature
    return Zones(
        density=np.full(shape, state.density),
        temperature=np.full(shape, state.temperature),
        radiation_temperature=np.full(shape, radiation),
        velocity=_columns(state.velocity, shape),
        fractions=_columns(state.fractions, shape),
        deposit=np.zeros(shape),
    )


def _columns(values: tuple[float, ...], shape: tuple[int, int, int]) -> Array:
    column = np.array(values, dtype=np.float64).reshape(-1, 1, 1, 1)
    return np.broadcast_to(column, (len(values), *shape)).copy()


@dataclass(frozen=True)
class Uniform:
    """One state everywhere."""

    state: State

    def zones(self, tile: Tile, mesh: Mesh) -> Zones:
        """The state, in every zone."""
        return uniform(self.state, tile)


@dataclass(frozen=True)
class Spot:
    """A round region that fades into what lies below it; None leaves that quantity alone."""

    centre: Point
    radius: float
    fade: float
    temperature: float
    density: float | None = None
    fractions: tuple[float, ...] | None = None


@dataclass(frozen=True)
class Spots:
    """A uniform state with spots laid over it one by one."""

    state: State
    spots: tuple[Spot, ...]

    def zones(self, tile: Tile, mesh: Mesh) -> Zones:
        """Every spot moves the zones towards its own state by its weight there."""
        made = uniform(self.state, tile)
        for spot in self.spots:
            weight = faded(distance(tile, mesh, spot.centre), spot.radius, spot.fade)
            made.temperature = _towards(made.temperature, spot.temperature, weight)
            if spot.density is not None:
                made.density = _towards(made.density, spot.density, weight)
            if spot.fractions is not None:
                column = np.array(spot.fractions).reshape(-1, 1, 1, 1)
                made.fractions = _towards(made.fractions, column, weight)
        if self.state.radiation_temperature is None:
            made.radiation_temperature = made.temperature.copy()
        return made


def _towards(below: Array, value: float | Array, weight: Array) -> Array:
    return below + weight * (value - below)


@dataclass(frozen=True)
class Riemann:
    """Two states that meet at a plane across an axis."""

    axis: int
    position: float
    left: State
    right: State

    def zones(self, tile: Tile, mesh: Mesh) -> Zones:
        """A zone belongs to the side that its centre lies on."""
        is_left = np.broadcast_to(centres(tile, mesh, self.axis) < self.position, tile.shape)
        left, right = uniform(self.left, tile), uniform(self.right, tile)
        return Zones(*(np.where(is_left, a, b) for a, b in zip(_parts(left), _parts(right), strict=True)))


def _parts(zones: Zones) -> tuple[Array, ...]:
    return (
        zones.density,
        zones.temperature,
        zones.radiation_temperature,
        zones.velocity,
        zones.fractions,
        zones.deposit,
    )


@dataclass(frozen=True)
class Blast:
    """A uniform state with energy let loose around a point.

    The energy density follows the smooth weight of a spot, normalised by its integral rather than by a sum
    over zones, so that a zone's share depends on its place alone; the total differs from ``energy`` by the
    error of the midpoint rule.
    """

    state: State
    centre: Point
    radius: float
    energy: float

    def zones(self, tile: Tile, mesh: Mesh) -> Zones:
        """The state, and the energy let loose in each zone."""
        made = uniform(self.state, tile)
        volume = float(FADED_VOLUME[mesh.dimensions - 1]) * self.radius**mesh.dimensions
        made.deposit = (self.energy / volume) * faded(distance(tile, mesh, self.centre), self.radius, 1.0)
        return made


@dataclass(frozen=True)
class RadiationSlab:
    """Uniform gas with a slab of radiation of another temperature across the mesh."""

    state: State
    axis: int
    begins: float
    ends: float
    slab_temperature: float

    def zones(self, tile: Tile, mesh: Mesh) -> Zones:
        """A zone belongs to the slab if its centre does."""
        made = uniform(self.state, tile)
        along = np.broadcast_to(centres(tile, mesh, self.axis), tile.shape)
        inside = (along >= self.begins) & (along < self.ends)
        made.radiation_temperature = np.where(inside, self.slab_temperature, made.radiation_temperature)
        return made

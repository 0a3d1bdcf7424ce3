"""Initial states as arrays: from the states of zones to the fields that steps work on.

Knows the equation of state, the species and the photon groups; a layout says which state each zone has.
An :class:`InitialState` is small, picklable and pure: any worker makes any tile, whatever the tiling.
"""

from __future__ import annotations

from breakstep.kernels.compiled import compiled  # isort: skip  (must precede numba)

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from breakstep.kernels.constants import A_RAD
from breakstep.kernels.eos import GAMMA_LAW, mean_nuclear, state_from_temperature
from breakstep.kernels.transport.opacity import PhotonGroups, planck_fractions
from breakstep.mesh.mesh import Mesh
from breakstep.mesh.tiling import Tile
from breakstep.scenario.layouts import Array, Layout, State, Zones, uniform
from breakstep.steps.hydro import Gas

HOTTEST = 1e12
"""Highest temperature that a state may have [K]; far above any that the equations of state are good for."""
BISECTIONS = 120
"""Halvings of the temperature's logarithm; 60 reach the last bit from twelve decades, the rest is margin."""


@compiled
def energy_densities(
    eos: Array, density: Array, temperature: Array, partials: Array, mass_numbers: Array, charges: Array
) -> Array:
    """Internal energy density of each zone [erg/cm^3].

    Parameters
    ----------
    density, temperature : ndarray, shape (n,)
    partials : ndarray, shape (n_species, n)
        Partial densities or mass fractions.
    """
    energy = np.empty(density.size)
    for z in range(density.size):
        abar, zbar = mean_nuclear(partials[:, z], mass_numbers, charges)
        energy[z] = density[z] * state_from_temperature(eos, density[z], temperature[z], abar, zbar)[0]
    return energy


@compiled
def temperature_at(
    eos: Array, density: float, pressure: float, fractions: Array, mass_numbers: Array, charges: Array
) -> float:
    """Temperature [K] at which the gas has a pressure [erg/cm^3]; NaN where cold electrons exceed it."""
    abar, zbar = mean_nuclear(fractions, mass_numbers, charges)
    if eos[0] == GAMMA_LAW:  # pressure is proportional to temperature
        return pressure / state_from_temperature(eos, density, 1.0, abar, zbar)[1]
    low, high = 1.0, HOTTEST
    if not state_from_temperature(eos, density, low, abar, zbar)[1] < pressure:
        return np.nan
    if not state_from_temperature(eos, density, high, abar, zbar)[1] > pressure:
        return np.nan
    for _ in range(BISECTIONS):
        middle = np.sqrt(low * high)
        if state_from_temperature(eos, density, middle, abar, zbar)[1] < pressure:
            low = middle
        else:
            high = middle
    return float(np.sqrt(low * high))


def gas_array(gas: Gas, zones: Zones) -> Array:
    """The field ``gas``, shape (5 + n_species, nx, ny, nz), in conserved densities."""
    eos, mass_numbers, charges = gas.arrays
    shape = zones.density.shape
    partials = zones.density * zones.fractions
    inner = energy_densities(
        eos,
        zones.density.reshape(-1),
        zones.temperature.reshape(-1),
        partials.reshape(len(gas.species), zones.density.size),
        mass_numbers,
        charges,
    ).reshape(shape)
    u, v, w = zones.velocity
    kinetic = 0.5 * zones.density * (u * u + v * v + w * w)
    momentum = zones.density * zones.velocity
    total = inner + kinetic + zones.deposit
    return np.concatenate([zones.density[None], momentum, total[None], partials])


def radiation_array(groups: PhotonGroups, temperature: Array) -> Array:
    """Black-body energy density in each group [erg/cm^3], shape (G, nx, ny, nz)."""
    flat = temperature.reshape(-1)
    shares = np.empty((groups.count, flat.size))
    planck_fractions(flat, groups.edges, shares)
    squared = flat * flat
    return np.asarray(shares * (A_RAD * (squared * squared))).reshape(groups.count, *temperature.shape)


@dataclass(frozen=True)
class InitialState:
    """The initial value of ``gas`` and, with transport, of ``radiation``, tile by tile.

    Parameters
    ----------
    layout : Layout
    gas : Gas
    groups : PhotonGroups or None
        None without radiation transport.
    """

    layout: Layout
    gas: Gas
    groups: PhotonGroups | None = None

    def __call__(self, tile: Tile, mesh: Mesh) -> Mapping[str, Array]:
        zones = self.layout.zones(tile, mesh)
        arrays = {"gas": gas_array(self.gas, zones)}
        if self.groups is not None:
            arrays["radiation"] = radiation_array(self.groups, zones.radiation_temperature)
        return arrays


ONE_ZONE = Tile(0, (0, 0, 0), (0, 0, 0), (1, 1, 1))


def gas_values(gas: Gas, state: State) -> tuple[float, ...]:
    """One state as the components of ``gas``, for a fixed edge."""
    return tuple(gas_array(gas, uniform(state, ONE_ZONE)).ravel().tolist())


def radiation_values(groups: PhotonGroups, state: State) -> tuple[float, ...]:
    """One state as the components of ``radiation``, for a fixed edge."""
    return tuple(radiation_array(groups, uniform(state, ONE_ZONE).radiation_temperature).ravel().tolist())

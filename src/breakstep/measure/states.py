"""Invented states of matter on which kernels are measured: smooth enough to be stable, nowhere uniform.

Knows what kernels take as gas. Refuses to know what is done with it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from breakstep.kernels.compiled import compiled  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.burning.network import Network
from breakstep.kernels.eos import GammaLaw, Stellar, state_from_temperature

Array = NDArray[np.float64]

DENSITY = 1e7  # [g/cm^3]
SPECIFIC_ENERGY = 1e18  # [erg/g], of the stellar mixture at this density and about 2e9 K
VELOCITY = 2e8  # [cm/s], about a quarter of the speed of sound
FUEL = {"C12": 0.5, "O16": 0.5}  # mass fractions


@compiled
def _specific_energy(eos: Array, density: float, temperature: float, abar: float, zbar: float) -> float:
    energy: float = state_from_temperature(eos, density, temperature, abar, zbar)[0]
    return energy


@dataclass(frozen=True)
class Waves:
    """Waves of a quarter of the mean in density, velocity and energy, and a mixture of all species."""

    shape: tuple[int, int, int]
    species: int

    def _wave(self, phase: float) -> Array:
        i, j, k = np.indices(self.shape)
        angle = 2.0 * math.pi * (i / self.shape[0] + 2.0 * j / self.shape[1] + k) + phase
        return np.asarray(0.25 * np.sin(angle))

    def gas(self) -> Array:
        """Gas as the kernels take it, shape (5 + species, nx, ny, nz)."""
        density = DENSITY * (1.0 + self._wave(0.0))
        velocity = np.stack([VELOCITY * 4.0 * self._wave(1.0 + axis) for axis in range(3)])
        energy = SPECIFIC_ENERGY * (1.0 + self._wave(4.0)) + 0.5 * (velocity**2).sum(axis=0)
        weights = np.stack([1.0 + self._wave(float(k)) for k in range(self.species)])
        fractions = weights / weights.sum(axis=0)
        return np.concatenate([density[None], density * velocity, (density * energy)[None], density * fractions])


def fuel_fractions(network: Network) -> Array:
    """Mass fractions of the fuel in network order."""
    return np.array([FUEL.get(name, 0.0) for name in network.names])


def fuel_at_rest(network: Network, eos: GammaLaw | Stellar, temperatures: Array) -> Array:
    """Fuel at rest in a line of zones, shape (5 + species, n, 1, 1).

    Parameters
    ----------
    temperatures : ndarray, shape (n,)
        [K]
    """
    fractions = fuel_fractions(network)
    moles = fractions / network.mass_numbers
    abar, zbar = 1.0 / moles.sum(), float(moles @ network.charges / moles.sum())
    gas = np.zeros((5 + fractions.size, temperatures.size, 1, 1))
    gas[0] = DENSITY
    gas[5:] = (DENSITY * fractions)[:, None, None, None]
    for zone, temperature in enumerate(temperatures):
        gas[4, zone] = DENSITY * _specific_energy(eos.vector, DENSITY, float(temperature), float(abar), zbar)
    return gas

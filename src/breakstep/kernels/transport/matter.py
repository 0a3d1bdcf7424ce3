"""What matter looks like to radiation: opacities, emission and heat capacity from the gas variables.

This module knows the equation of state and the opacity; it refuses to know the transport equation.

The equation of state must not count the radiation that is transported here: ``GammaLaw`` or
``Stellar(radiation=False)``.
"""

from __future__ import annotations

from breakstep.kernels.compiled import compiled, inlined  # isort: skip  (must precede numba)

from typing import NamedTuple

import numpy as np

from breakstep.kernels.constants import A_RAD
from breakstep.kernels.eos import mean_nuclear, state_from_energy
from breakstep.kernels.transport.layout import Extent, Floats, halo_strides
from breakstep.kernels.transport.opacity import PhotonGroups, PowerLawOpacity, planck_fractions

FIRST_SPECIES = 5
"""Component of the gas that holds the first partial density."""
TOTAL_ENERGY = 4
"""Component of the gas that holds the total energy density."""


class Matter(NamedTuple):
    """Everything about the matter that is the same for all zones, as arrays for the kernels."""

    eos: Floats
    """The equation of state's vector."""
    mass_numbers: Floats
    """Mass numbers of the species, shape (n_species,)."""
    charges: Floats
    """Charges of the species, shape (n_species,)."""
    edges: Floats
    """Boundaries between the photon groups, h nu / k_B [K], shape (G - 1,)."""
    absorption_factors: Floats
    """Absorption at the reference temperature [cm^2/g], shape (G,)."""
    power_law: Floats
    """Reference temperature [K], temperature exponent, scattering [cm^2/g]."""
    redistribution: Floats
    """Shares of the scattering that change the group, shape (G, G)."""


def describe_matter(
    eos: Floats, mass_numbers: Floats, charges: Floats, groups: PhotonGroups, opacity: PowerLawOpacity
) -> Matter:
    """Gather the equation of state's vector, the species, the groups and the opacity."""
    power_law = np.array([opacity.temperature, opacity.temperature_exponent, opacity.scattering])
    return Matter(
        eos=np.asarray(eos, float),
        mass_numbers=np.asarray(mass_numbers, float),
        charges=np.asarray(charges, float),
        edges=groups.edges,
        absorption_factors=opacity.absorption_factors(groups),
        power_law=power_law,
        redistribution=opacity.redistribution(groups),
    )


@inlined
def internal_energy(gas: Floats, place: int) -> float:
    """Internal energy density of one zone [erg/cm^3]: total less kinetic."""
    momentum = gas[1, place] * gas[1, place] + gas[2, place] * gas[2, place] + gas[3, place] * gas[3, place]
    energy: float = gas[TOTAL_ENERGY, place] - 0.5 * momentum / gas[0, place]
    return energy


@inlined
def _thermal_state(gas: Floats, place: int, eos: Floats, mass_numbers: Floats, charges: Floats) -> tuple[float, float]:
    """Temperature [K] and heat capacity [erg/(g K)] of one zone."""
    abar, zbar = mean_nuclear(gas[FIRST_SPECIES:, place], mass_numbers, charges)
    specific = internal_energy(gas, place) / gas[0, place]
    temperature, _, _, heat_capacity = state_from_energy(eos, gas[0, place], specific, abar, zbar)
    return temperature, heat_capacity


@compiled
def temperatures(
    gas: Floats, eos: Floats, mass_numbers: Floats, charges: Floats, extent: Extent, n_axes: int
) -> tuple[Floats, Floats]:
    """Temperature and heat capacity, shape (n_with_halo,); NaN in edge and corner zones, which none reads."""
    s0, s1, _, first = halo_strides(extent, n_axes)
    temperature = np.full(gas.shape[1], np.nan)
    heat_capacity = np.full(gas.shape[1], np.nan)
    r0 = 1 if n_axes > 2 else 0
    r1 = 1 if n_axes > 1 else 0
    for i in range(-r0, extent[0] + r0):
        for j in range(-r1, extent[1] + r1):
            outside = (not 0 <= i < extent[0]) + (not 0 <= j < extent[1])
            ends = 1 - outside
            if outside < 2:
                for k in range(-ends, extent[2] + ends):
                    place = first + i * s0 + j * s1 + k
                    state = _thermal_state(gas, place, eos, mass_numbers, charges)
                    temperature[place] = state[0]
                    heat_capacity[place] = state[1]
    return temperature, heat_capacity


@compiled
def without_halo(values: Floats, extent: Extent, n_axes: int) -> Floats:
    """The inner zones of one component with halo, flat."""
    s0, s1, _, first = halo_strides(extent, n_axes)
    width = extent[2]
    inner = np.empty(extent[0] * extent[1] * width)
    for i in range(extent[0]):
        for j in range(extent[1]):
            place = first + i * s0 + j * s1
            start = (i * extent[1] + j) * width
            inner[start : start + width] = values[place : place + width]
    return inner


@compiled
def opacities_flat(density: Floats, temperature: Floats, factors: Floats, power_law: Floats) -> tuple[Floats, Floats]:
    """Absorption of each group, shape (G, n), and the grey scattering, shape (1, n) [1/cm]."""
    scale = np.empty(density.size)
    scattering = np.empty((1, density.size))
    for z in range(density.size):
        scale[z] = density[z] * (temperature[z] / power_law[0]) ** -power_law[1]
        scattering[0, z] = power_law[2] * density[z]
    absorption = np.empty((factors.size, density.size))
    for g in range(factors.size):
        for z in range(density.size):
            absorption[g, z] = factors[g] * scale[z]
    return absorption, scattering


@compiled
def matter_flat(
    gas: Floats,
    eos: Floats,
    mass_numbers: Floats,
    charges: Floats,
    edges: Floats,
    factors: Floats,
    power_law: Floats,
    extent: Extent,
    n_axes: int,
) -> tuple[Floats, Floats, Floats, Floats, Floats, Floats]:
    """From the gas with halo, shape (n_gas, n_with_halo), what the assembly needs.

    Returns
    -------
    total : ndarray, shape (G, n_with_halo)
    absorption, emission : ndarray, shape (G, n_zones)
    theta, beta, scattering : ndarray, shape (1, n_zones)
        a T^4 [erg/cm^3], its derivative by the material energy density, and the scattering [1/cm].
    """
    hot, capacity = temperatures(gas, eos, mass_numbers, charges, extent, n_axes)
    total, grey = opacities_flat(gas[0], hot, factors, power_law)
    total += grey
    temperature = without_halo(hot, extent, n_axes)
    density = without_halo(gas[0], extent, n_axes)
    absorption, scattering = opacities_flat(density, temperature, factors, power_law)
    emission = np.empty(absorption.shape)
    planck_fractions(temperature, edges, emission)
    volumetric = density * without_halo(capacity, extent, n_axes)
    cubed = A_RAD * (temperature * temperature * temperature)
    theta = np.empty(scattering.shape)
    beta = np.empty(scattering.shape)
    theta[0] = cubed * temperature
    beta[0] = 4.0 * cubed / volumetric
    return total, absorption, emission, theta, beta, scattering

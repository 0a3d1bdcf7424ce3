"""The equations of one burning zone at constant density: abundances, and temperature as one more unknown.

The state of a network with n species is a vector of n + 1: molar abundances Y [mol/g], then the
temperature T [K]. The equations are mass action for Y and the first law at constant density for T::

    c_v dT/dt = sum over reactions of flux * (heat set free - e_Y * nuclei made)

where c_v = (de/dT) and e_Y = (de/dY_nuclei), the energy that one more mole of nuclei takes at constant
temperature: burning three helium nuclei to one carbon leaves fewer ions to hold the thermal energy.
With it, T stays the temperature that the equation of state gives for the energy set free.

The Jacobian is the true one, as a Rosenbrock method needs for its order: analytic in the abundances and in
the rates' temperature, a central difference only for dc_v/dT.

Knows kinetics and the equation of state. Refuses to know how the equations are integrated.
"""

from __future__ import annotations

from typing import NamedTuple

from breakstep.kernels.unmanaged import merged  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.burning.reactions import (
    KineticsScratch,
    NetworkArrays,
    abundance_change,
    abundance_jacobian,
    evaluate_fluxes,
    evaluate_rates,
    evaluate_rates_and_slopes,
    evaluate_slot_slopes,
    heat_gradient,
    heat_release,
)
from breakstep.kernels.eos import state_from_temperature

Floats = NDArray[np.float64]

# Both equations of state have ideal ions: energy and heat capacity are linear in the number of nuclei at
# fixed electrons, density and temperature. So this difference quotient is exact, and its size is free.
_NUCLEI_STEP = 0.125
# Central difference for dc_v/dT, which enters the Jacobian only: truncation about 1e-8, rounding 1e-12.
_TEMPERATURE_STEP = 1e-4


class Zone(NamedTuple):
    """What stays fixed while a zone burns."""

    eos: Floats  # the equation of state's vector
    density: float  # [g/cm^3]
    electrons: float  # sum of Z Y [mol/g]
    self_heating: bool  # False: temperature is held


@merged
def _thermal(zone: Zone, temperature: float, nuclei: float) -> tuple[float, float]:
    """Specific energy and heat capacity for this many nuclei [mol/g]."""
    abar, zbar = 1.0 / nuclei, zone.electrons / nuclei
    energy, _, _, capacity = state_from_temperature(zone.eos, zone.density, temperature, abar, zbar)
    return energy, capacity


@merged
def _per_nuclei(zone: Zone, temperature: float, nuclei: float) -> tuple[float, float, float]:
    """Heat capacity c_v, and the derivatives of energy and of c_v by the number of nuclei."""
    step = _NUCLEI_STEP * nuclei
    energy, capacity = _thermal(zone, temperature, nuclei)
    more_energy, more_capacity = _thermal(zone, temperature, nuclei + step)
    return capacity, (more_energy - energy) / step, (more_capacity - capacity) / step


@merged
def _nuclei(state: Floats, n: int) -> float:
    total = 0.0
    for k in range(n):
        total += state[k]
    return total


@merged
def _load(network: NetworkArrays, state: Floats, kinetics: KineticsScratch) -> None:
    for k in range(network.mass_numbers.size):
        kinetics.molar[k] = state[k]


@merged
def _finish_change(
    network: NetworkArrays, zone: Zone, state: Floats, kinetics: KineticsScratch, change: Floats
) -> None:
    """From rates and abundances in scratch to f, shape (n + 1,)."""
    n = network.mass_numbers.size
    evaluate_fluxes(network.stoichiometry.reactants, kinetics)
    abundance_change(network.stoichiometry, kinetics.flux, change)
    change[n] = 0.0
    if zone.self_heating:
        capacity, per_nuclei, _ = _per_nuclei(zone, state[n], _nuclei(state, n))
        change[n] = heat_release(network.stoichiometry, per_nuclei, kinetics.flux) / capacity


@merged
def right_hand_side(
    network: NetworkArrays, zone: Zone, state: Floats, kinetics: KineticsScratch, change: Floats
) -> None:
    """Write d(state)/dt to ``change``; ``kinetics.weight`` must fit the zone's density."""
    _load(network, state, kinetics)
    evaluate_rates(network.table, state[network.mass_numbers.size], kinetics)
    _finish_change(network, zone, state, kinetics, change)


@merged
def linearise(
    network: NetworkArrays,
    zone: Zone,
    state: Floats,
    kinetics: KineticsScratch,
    change: Floats,
    jacobian: Floats,
) -> None:
    """As `right_hand_side`, and write the packed Jacobian at the same state."""
    n = network.mass_numbers.size
    stoichiometry = network.stoichiometry
    _load(network, state, kinetics)
    evaluate_rates_and_slopes(network.table, state[n], kinetics)
    _finish_change(network, zone, state, kinetics, change)
    evaluate_slot_slopes(stoichiometry.reactants, kinetics)
    abundance_jacobian(stoichiometry, kinetics.slot_slope, jacobian)
    if zone.self_heating:
        _temperature_entries(network, zone, state, kinetics, change, jacobian)


@merged
def _temperature_entries(
    network: NetworkArrays,
    zone: Zone,
    state: Floats,
    kinetics: KineticsScratch,
    change: Floats,
    jacobian: Floats,
) -> None:
    """The Jacobian's column of d/dT and row of dT/dt. Overwrites ``kinetics.flux`` by d(flux)/dT."""
    n = network.mass_numbers.size
    stoichiometry = network.stoichiometry
    nuclei, temperature, heating = _nuclei(state, n), state[n], change[n]
    capacity, per_nuclei, capacity_per_nuclei = _per_nuclei(zone, temperature, nuclei)
    for j in range(n):
        gradient = heat_gradient(stoichiometry, per_nuclei, kinetics.slot_slope, j)
        jacobian[stoichiometry.temperature_row[j]] = (gradient - heating * capacity_per_nuclei) / capacity
    step = _TEMPERATURE_STEP * temperature
    _, above = _thermal(zone, temperature + step, nuclei)
    _, below = _thermal(zone, temperature - step, nuclei)
    made = 0.0
    for r in range(kinetics.flux.size):
        made += stoichiometry.nuclei_made[r] * kinetics.flux[r]
    _slopes_of_fluxes(stoichiometry.reactants, kinetics)
    gradient = heat_release(stoichiometry, per_nuclei, kinetics.flux)
    # d(e_Y)/dT is d(c_v)/dY: both are the mixed second derivative of the energy
    gradient -= capacity_per_nuclei * made + heating * (above - below) / (2.0 * step)
    jacobian[network.elimination.diagonal[n]] = gradient / capacity
    abundance_change(stoichiometry, kinetics.flux, kinetics.slot_slope)
    for i in range(n):
        jacobian[stoichiometry.temperature_column[i]] = kinetics.slot_slope[i]


@merged
def _slopes_of_fluxes(reactants: NDArray[np.uint32], kinetics: KineticsScratch) -> None:
    y = kinetics.molar
    for r in range(kinetics.flux.size):
        product = y[reactants[0, r]] * y[reactants[1, r]] * y[reactants[2, r]]
        kinetics.flux[r] = kinetics.rate_slope[r] * product

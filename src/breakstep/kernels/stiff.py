"""Stiff kinetics of one zone at constant density, with its temperature as one of the unknowns.

The state of a network with n species is a vector of n + 1: molar abundances Y [mol/g], then the
temperature T [K]. The equations are mass action for Y and the first law at constant density for T::

    c_v dT/dt = sum over reactions of flux * (heat set free - e_Y * nuclei made)

where c_v = (de/dT) and e_Y = (de/dY_nuclei), the energy that one more mole of nuclei takes at constant
temperature: burning three helium nuclei to one carbon leaves fewer ions to hold the thermal energy.
With it, T stays the temperature that the equation of state gives for the energy set free.

Rosenbrock's method needs the true Jacobian for its order, so that is what it gets: analytic in Y and in
the rates' temperature, a central difference only for dc_v/dT.

Knows kinetics and the equation of state. Refuses to know zones, tiles, mass fractions' bookkeeping.
"""

from __future__ import annotations

from typing import NamedTuple

from breakstep.kernels.compiled import compiled  # isort: skip  (must precede numba)
from breakstep.kernels.unmanaged import merged, unmanaged  # isort: skip

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.eos import state_from_temperature
from breakstep.kernels.reactions import (
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
    kinetics_scratch,
    weigh_by_density,
)
from breakstep.kernels.rosenbrock import GAMMA, STAGES, A, C
from breakstep.kernels.sparse_lu import factorise, solve

Floats = NDArray[np.float64]
Counters = NDArray[np.int64]

# Outcomes of an integration.
DONE = 0
SUBSTEP_LIMIT = 1
NOT_FINITE = 2

# Places in the counters vector.
SUB_STEPS, REJECTED, RIGHT_HAND_SIDES, JACOBIANS, FACTORISATIONS = range(5)

# Both equations of state have ideal ions: energy and heat capacity are linear in the number of nuclei at
# fixed electrons, density and temperature. So this difference quotient is exact, and its size is free.
_NUCLEI_STEP = 0.125
# Central difference for dc_v/dT, which enters the Jacobian only: truncation about 1e-8, rounding 1e-12.
_TEMPERATURE_STEP = 1e-4

# Step control after Hairer & Wanner's RODAS: safety, largest shrinking and growth in one go.
_SAFETY = 0.9
_SHRINK = 5.0
_GROW = 1.0 / 6.0
# The first sub-step may change no unknown by more than this many tolerances (an Euler estimate).
_FIRST_CHANGE = 10.0
# A last sub-step is stretched by up to this much rather than leaving a sliver behind.
_STRETCH = 1.1


class Zone(NamedTuple):
    """What stays fixed while a zone burns."""

    eos: Floats  # the equation of state's vector
    density: float  # [g/cm^3]
    electrons: float  # sum of Z Y [mol/g]
    self_heating: bool  # False: temperature is held


class StiffScratch(NamedTuple):
    """Work arrays of one caller (thread)."""

    kinetics: KineticsScratch
    start_change: Floats  # (n + 1,) f at the start of the sub-step
    change: Floats  # (n + 1,) f at a stage
    trial: Floats  # (n + 1,) stage argument, at last the proposed state
    stages: Floats  # (STAGES, n + 1) the transformed stages U
    jacobian: Floats  # packed
    matrix: Floats  # packed I / (gamma h) - J and its factors


@compiled
def stiff_scratch(network: NetworkArrays) -> StiffScratch:
    """Allocate work arrays for `network`."""
    n = network.mass_numbers.size + 1
    entries = int(network.elimination.diagonal.size + network.elimination.lower_entry.size)
    entries += network.elimination.upper_entry.size
    return StiffScratch(
        kinetics_scratch(network),
        np.zeros(n),
        np.zeros(n),
        np.zeros(n),
        np.zeros((STAGES, n)),
        np.zeros(entries),
        np.zeros(entries),
    )


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
    network: NetworkArrays, zone: Zone, state: Floats, kinetics: KineticsScratch, change: Floats, jacobian: Floats
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
    network: NetworkArrays, zone: Zone, state: Floats, kinetics: KineticsScratch, change: Floats, jacobian: Floats
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


@merged
def tolerance_norm(
    vector: Floats, state: Floats, other: Floats, mass_numbers: Floats, rtol: float, atol: float
) -> float:
    """Root mean square of ``vector`` in units of the tolerance; NaN if anything is.

    The tolerance is ``atol + rtol X`` for a mass fraction X = A Y and ``rtol T`` for the temperature, with
    the larger of the two states.
    """
    n = mass_numbers.size
    total = 0.0
    for k in range(n):
        size = max(abs(state[k]), abs(other[k]))
        ratio = vector[k] / (atol / mass_numbers[k] + rtol * size)
        total += ratio * ratio
    ratio = vector[n] / (rtol * max(abs(state[n]), abs(other[n])))
    return np.sqrt((total + ratio * ratio) / (n + 1))


@merged
def _prepare_matrix(network: NetworkArrays, h: float, scratch: StiffScratch) -> None:
    for e in range(scratch.matrix.size):
        scratch.matrix[e] = -scratch.jacobian[e]
    for i in range(network.elimination.diagonal.size):
        scratch.matrix[network.elimination.diagonal[i]] += 1.0 / (GAMMA * h)
    factorise(network.elimination, scratch.matrix)


@merged
def _stage(network: NetworkArrays, zone: Zone, state: Floats, h: float, i: int, scratch: StiffScratch) -> None:
    """Compute U_i from the earlier ones."""
    u = scratch.stages[i]
    n = state.size
    if i == 0:
        for k in range(n):
            u[k] = scratch.start_change[k]
    else:
        for k in range(n):
            total = state[k]
            for j in range(i):
                total += A[i, j] * scratch.stages[j, k]
            scratch.trial[k] = total
        right_hand_side(network, zone, scratch.trial, scratch.kinetics, u)
        for k in range(n):
            total = 0.0
            for j in range(i):
                total += C[i, j] * scratch.stages[j, k]
            u[k] += total / h
    solve(network.elimination, scratch.matrix, u)


@merged
def _propose(network: NetworkArrays, zone: Zone, state: Floats, h: float, scratch: StiffScratch) -> None:
    """Leave the state after a sub-step h in ``scratch.trial``, its error estimate in the last stage."""
    _prepare_matrix(network, h, scratch)
    for i in range(STAGES):
        _stage(network, zone, state, h, i, scratch)
    for k in range(state.size):
        scratch.trial[k] += scratch.stages[STAGES - 1, k]


@merged
def _step_factor(error: float) -> float:
    """By what the elementary controller divides the sub-step; the largest shrinking for NaN."""
    factor = np.sqrt(np.sqrt(error)) / _SAFETY
    if not factor < _SHRINK:
        factor = _SHRINK
    return max(factor, _GROW)


@merged
def _predictive_factor(error: float, h: float, last_error: float, last_h: float) -> float:
    """Gustafsson's predictive controller (Hairer & Wanner, section IV.8), clamped alike."""
    return _step_factor(error * error / last_error * (last_h / h) ** 4)


@merged
def first_sub_step(change_norm: float, duration: float) -> float:
    """A sub-step from the zone's own state alone: bits must not depend on neighbours or on the past."""
    if change_norm * duration > _FIRST_CHANGE:
        return _FIRST_CHANGE / change_norm
    return duration


@unmanaged
def integrate(
    network: NetworkArrays,
    zone: Zone,
    state: Floats,
    duration: float,
    rtol: float,
    atol: float,
    max_substeps: int,
    scratch: StiffScratch,
    counters: Counters,
) -> int:
    """Advance ``state`` in place by ``duration`` [s].

    Parameters
    ----------
    rtol, atol : float
        See `tolerance_norm`; the error estimate of each sub-step is kept below 1 in that norm.
    max_substeps : int
        Limit on sub-steps tried, accepted or not.
    counters : ndarray of int64
        Incremented: sub_steps, rejected, right_hand_sides, jacobians, factorisations.

    Returns
    -------
    int
        DONE, SUBSTEP_LIMIT or NOT_FINITE; in the last two cases ``state`` is the last one accepted.
    """
    masses = network.mass_numbers
    weigh_by_density(network.table, zone.density, scratch.kinetics)
    elapsed, h, last_h, last_error = 0.0, 0.0, 0.0, 1.0
    fresh = False
    rejected = False
    for _ in range(max_substeps):
        if not fresh:
            linearise(network, zone, state, scratch.kinetics, scratch.start_change, scratch.jacobian)
            counters[JACOBIANS] += 1
            counters[RIGHT_HAND_SIDES] += 1
            fresh = True
        if h == 0.0:
            norm = tolerance_norm(scratch.start_change, state, state, masses, rtol, atol)
            if not norm < np.inf:
                return NOT_FINITE
            h = first_sub_step(norm, duration)
        last = elapsed + _STRETCH * h >= duration
        if last:
            h = duration - elapsed
        _propose(network, zone, state, h, scratch)
        counters[FACTORISATIONS] += 1
        counters[RIGHT_HAND_SIDES] += STAGES - 1
        error = tolerance_norm(scratch.stages[STAGES - 1], state, scratch.trial, masses, rtol, atol)
        factor = _step_factor(error)
        if not error <= 1.0:
            counters[REJECTED] += 1
            rejected = True
            h /= max(factor, 1.0)
            continue
        counters[SUB_STEPS] += 1
        for k in range(state.size):
            state[k] = scratch.trial[k]
        if last:
            return DONE
        elapsed += h
        if last_h > 0.0:
            factor = max(factor, _predictive_factor(error, h, last_error, last_h))
        if rejected:
            factor = max(factor, 1.0)
        last_h, last_error = h, max(error, 0.01)
        h /= factor
        fresh = False
        rejected = False
    return SUBSTEP_LIMIT

"""Mass-action kinetics on flat arrays: rates, their change of abundances and energy, the Jacobian.

Everything here follows index lists that :mod:`breakstep.kernels.burning.network` made, so an alpha chain and a
textbook kinetics problem run through the same compiled code. A reaction's flux is ::

    prefactor * density**density_exponent * rate(T) * (product of its reactants' molar abundances)

    rate(T) = sum over sets of exp(a0 + sum_{i=1..5} a_i T9**((2 i - 5) / 3) + a6 ln T9),  T9 = T / 1e9 K

(REACLIB's form, Cyburt et al. 2010). Molar abundances Y = X / A are in mol/g, fluxes in mol/g/s.

Refuses to know the equation of state, and does not screen: plasma screening of the reactions is left out.
"""

from __future__ import annotations

from typing import NamedTuple

from breakstep.kernels.unmanaged import merged  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.burning.sparse_lu import Elimination, Floats, Indices
from breakstep.kernels.exponential import exponentials

MAX_REACTANTS = 3


class RateTable(NamedTuple):
    """The sets of all reactions, one after the other, and the reactions' density factors."""

    coefficients: Floats  # (7, n_sets) a0 ... a6
    set_start: Indices  # (n_reactions + 1,)
    prefactor: Floats  # (n_reactions,)
    density_exponent: NDArray[np.int64]  # (n_reactions,)


class Stoichiometry(NamedTuple):
    """Who takes part in which reaction.

    A *slot* is one place for a reactant, three to a reaction; an empty slot holds species number
    ``n_species``, whose abundance is taken as 1. The slope of a slot is the flux without its own factor.
    Entry lists are compressed rows: ``*_start`` delimits the terms of one species or matrix entry.
    """

    reactants: Indices  # (3, n_reactions)
    change_start: Indices  # (n_species + 1,) terms of each species' rate of change
    change_reaction: Indices
    change_coefficient: Floats  # net number made by the reaction, negative if used up
    entry: Indices  # (n_entries,) packed position of a nonzero d(dY_i/dt)/dY_j
    entry_start: Indices  # (n_entries + 1,)
    entry_slot: Indices  # slot number 3 * reaction + place
    entry_coefficient: Floats
    slot_start: Indices  # (n_species + 1,) the slots that each species fills
    slot: Indices
    heat: Floats  # (n_reactions,) binding energy set free [erg/mol]
    nuclei_made: Floats  # (n_reactions,) change of the number of nuclei, mol a mol
    temperature_row: Indices  # (n_species,) packed position of entry (T, j)
    temperature_column: Indices  # (n_species,) packed position of entry (i, T)


class NetworkArrays(NamedTuple):
    """A network as compiled functions take it."""

    mass_numbers: Floats  # (n_species,)
    charges: Floats  # (n_species,)
    binding: Floats  # (n_species,) [erg/mol]
    table: RateTable
    stoichiometry: Stoichiometry
    elimination: Elimination


class KineticsScratch(NamedTuple):
    """Work arrays of one caller (thread); nothing in them outlives one evaluation but ``weight``."""

    weight: Floats  # (n_reactions,) prefactor * density**density_exponent
    rate: Floats  # (n_reactions,)
    rate_slope: Floats  # (n_reactions,) d(rate)/dT
    flux: Floats  # (n_reactions,)
    slot_slope: Floats  # (3 * n_reactions,)
    molar: Floats  # (n_species + 1,), the last one 1
    exponent: Floats  # (n_sets,), and so are the following
    exponent_slope: Floats
    value: Floats
    power: Floats


def kinetics_scratch(network: NetworkArrays) -> KineticsScratch:
    """Allocate work arrays for `network`."""
    n_reactions = network.table.prefactor.size
    n_sets = network.table.coefficients.shape[1]
    return KineticsScratch(
        weight=np.zeros(n_reactions),
        rate=np.zeros(n_reactions),
        rate_slope=np.zeros(n_reactions),
        flux=np.zeros(n_reactions),
        slot_slope=np.zeros(MAX_REACTANTS * n_reactions),
        molar=np.ones(network.mass_numbers.size + 1),
        exponent=np.zeros(n_sets),
        exponent_slope=np.zeros(n_sets),
        value=np.zeros(n_sets),
        power=np.zeros(n_sets),
    )


@merged
def weigh_by_density(table: RateTable, density: float, scratch: KineticsScratch) -> None:
    """Set each reaction's constant factor for a zone of this density [g/cm^3]."""
    for r in range(table.prefactor.size):
        weight = table.prefactor[r]
        for _ in range(table.density_exponent[r]):
            weight *= density
        scratch.weight[r] = weight


@merged
def _exponents(table: RateTable, temperature: float, scratch: KineticsScratch) -> None:
    a = table.coefficients
    t9 = temperature * 1e-9
    root = np.cbrt(t9)
    inverse, inverse_root, five_thirds, log = 1.0 / t9, 1.0 / root, t9 * root * root, np.log(t9)
    exponent = scratch.exponent
    for s in range(exponent.size):
        falling = a[0, s] + a[1, s] * inverse + a[2, s] * inverse_root
        exponent[s] = falling + a[3, s] * root + a[4, s] * t9 + a[5, s] * five_thirds + a[6, s] * log


@merged
def _exponent_slopes(table: RateTable, temperature: float, scratch: KineticsScratch) -> None:
    """d(exponent)/dT [1/K]."""
    a = table.coefficients
    t9 = temperature * 1e-9
    root = np.cbrt(t9)
    per_kelvin = 1e-9 / t9
    inverse = per_kelvin / t9
    inverse_root = per_kelvin / (3.0 * root)
    third = per_kelvin * root / 3.0
    five_thirds = per_kelvin * t9 * root * root * 5.0 / 3.0
    slope = scratch.exponent_slope
    for s in range(slope.size):
        falling = a[6, s] * per_kelvin - a[1, s] * inverse - a[2, s] * inverse_root
        slope[s] = falling + a[3, s] * third + a[4, s] * 1e-9 + a[5, s] * five_thirds


@merged
def evaluate_rates(table: RateTable, temperature: float, scratch: KineticsScratch) -> None:
    """Fill ``scratch.rate`` with weight * rate(T)."""
    _exponents(table, temperature, scratch)
    exponentials(scratch.exponent, scratch.value, scratch.power)
    for r in range(table.prefactor.size):
        total = 0.0
        for s in range(table.set_start[r], table.set_start[r + 1]):
            total += scratch.value[s]
        scratch.rate[r] = total * scratch.weight[r]


@merged
def evaluate_rates_and_slopes(table: RateTable, temperature: float, scratch: KineticsScratch) -> None:
    """As `evaluate_rates`, the same bits, and fill ``scratch.rate_slope`` with the derivative by T [1/K]."""
    evaluate_rates(table, temperature, scratch)
    _exponent_slopes(table, temperature, scratch)
    for r in range(table.prefactor.size):
        total = 0.0
        for s in range(table.set_start[r], table.set_start[r + 1]):
            total += scratch.value[s] * scratch.exponent_slope[s]
        scratch.rate_slope[r] = total * scratch.weight[r]


@merged
def evaluate_fluxes(reactants: Indices, scratch: KineticsScratch) -> None:
    """Fill ``scratch.flux`` from the rates and ``scratch.molar``."""
    y = scratch.molar
    for r in range(scratch.flux.size):
        scratch.flux[r] = scratch.rate[r] * (y[reactants[0, r]] * y[reactants[1, r]] * y[reactants[2, r]])


@merged
def evaluate_slot_slopes(reactants: Indices, scratch: KineticsScratch) -> None:
    """Fill ``scratch.slot_slope``: d(flux)/d(abundance in this slot)."""
    y = scratch.molar
    for r in range(scratch.flux.size):
        a, b, c = y[reactants[0, r]], y[reactants[1, r]], y[reactants[2, r]]
        scratch.slot_slope[3 * r] = scratch.rate[r] * (b * c)
        scratch.slot_slope[3 * r + 1] = scratch.rate[r] * (a * c)
        scratch.slot_slope[3 * r + 2] = scratch.rate[r] * (a * b)


@merged
def abundance_change(stoichiometry: Stoichiometry, flux: Floats, change: Floats) -> None:
    """Add up dY/dt [mol/g/s] of all species from the fluxes, into the first entries of ``change``."""
    start = stoichiometry.change_start
    for k in range(start.size - 1):
        total = 0.0
        for term in range(start[k], start[k + 1]):
            total += stoichiometry.change_coefficient[term] * flux[stoichiometry.change_reaction[term]]
        change[k] = total


@merged
def heat_release(stoichiometry: Stoichiometry, energy_per_nuclei: float, flux: Floats) -> float:
    """Sum over reactions of flux * (binding energy set free - energy_per_nuclei * nuclei made) [erg/g/s].

    ``energy_per_nuclei`` is what the gas needs to hold one more mole of nuclei at its temperature; zero
    gives the nuclear energy generation itself.
    """
    total = 0.0
    for r in range(flux.size):
        total += (stoichiometry.heat[r] - energy_per_nuclei * stoichiometry.nuclei_made[r]) * flux[r]
    return total


@merged
def abundance_jacobian(stoichiometry: Stoichiometry, slot_slope: Floats, jacobian: Floats) -> None:
    """Set the packed entries d(dY_i/dt)/dY_j; all others become zero."""
    jacobian[:] = 0.0
    start = stoichiometry.entry_start
    for e in range(stoichiometry.entry.size):
        total = 0.0
        for term in range(start[e], start[e + 1]):
            total += stoichiometry.entry_coefficient[term] * slot_slope[stoichiometry.entry_slot[term]]
        jacobian[stoichiometry.entry[e]] = total


@merged
def heat_gradient(stoichiometry: Stoichiometry, energy_per_nuclei: float, slot_slope: Floats, species: int) -> float:
    """Derivative of `heat_release` by one species' molar abundance."""
    total = 0.0
    for term in range(stoichiometry.slot_start[species], stoichiometry.slot_start[species + 1]):
        slot = stoichiometry.slot[term]
        r = slot // np.uint32(MAX_REACTANTS)
        heat = stoichiometry.heat[r] - energy_per_nuclei * stoichiometry.nuclei_made[r]
        total += heat * slot_slope[slot]
    return total

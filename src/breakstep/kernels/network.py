"""Reaction networks: read and checked as data, laid out as flat arrays for the compiled kernels.

Knows species, reactions and where their figures come from. Refuses to know how a network is integrated
and what a zone is. :func:`load_network` reads the packaged networks; :func:`build_network` takes any
mass-action kinetics, so published stiff problems test the very code that burns zones.
"""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from importlib import resources
from typing import Any

from breakstep.kernels.compiled import compiled  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

from breakstep.errors import DeclarationError
from breakstep.kernels.constants import N_A
from breakstep.kernels.reactions import (
    MAX_REACTANTS,
    NetworkArrays,
    RateTable,
    Stoichiometry,
    abundance_change,
    evaluate_fluxes,
    evaluate_rates,
    heat_release,
    kinetics_scratch,
    weigh_by_density,
)
from breakstep.kernels.sparse_lu import Indices, analyse

Floats = NDArray[np.float64]

MEV = 1.602176634e-6
"""Erg in a mega-electronvolt, exact by the 2019 definition of the ampere."""

PACKAGED_NETWORKS = ("alpha13",)


@dataclass(frozen=True)
class Species:
    """A nucleus: mass number, charge, and the energy that binds it [MeV]."""

    name: str
    mass_number: float
    charge: float
    binding_energy: float = 0.0


@dataclass(frozen=True)
class Reaction:
    """One direction of a reaction, with its rate.

    ``sets`` are REACLIB's seven coefficients each; ``((0,) * 7,)`` is the constant 1, so a constant rate
    belongs in ``prefactor``. ``source`` names the publication.
    """

    reactants: tuple[str, ...]
    products: tuple[str, ...]
    prefactor: float = 1.0
    density_exponent: int = 0
    sets: tuple[tuple[float, ...], ...] = ((0.0,) * 7,)
    source: str = ""

    def __str__(self) -> str:
        return f"{' + '.join(self.reactants)} -> {' + '.join(self.products)}"

    def net_change(self) -> dict[str, int]:
        """How many of each species one reaction makes (negative: uses up); zeros left out."""
        change = Counter(self.products)
        change.subtract(self.reactants)
        return {name: number for name, number in change.items() if number}


@dataclass(frozen=True, eq=False)
class Network:
    """A reaction network, immutable.

    ``arrays`` is what compiled functions take. ``positions``, shape (n_species + 1, n_species + 1), tells
    where in the packed Jacobian of abundances and temperature an entry lies, -1 where it is always zero.
    """

    name: str
    species: tuple[Species, ...]
    reactions: tuple[Reaction, ...]
    arrays: NetworkArrays
    positions: NDArray[np.int64]

    @property
    def names(self) -> tuple[str, ...]:
        """Species names in the order of all arrays."""
        return tuple(species.name for species in self.species)

    @property
    def mass_numbers(self) -> Floats:
        """Mass numbers, shape (n_species,)."""
        return self.arrays.mass_numbers

    @property
    def charges(self) -> Floats:
        """Charges, shape (n_species,)."""
        return self.arrays.charges

    @property
    def binding_energies(self) -> Floats:
        """Binding energies [MeV], shape (n_species,)."""
        return np.array([species.binding_energy for species in self.species])

    def rates(self, temperature: float) -> Floats:
        """Every reaction's rate(T), without density factor or prefactor, shape (n_reactions,)."""
        return _rates(self.arrays, temperature)

    def ydot(self, density: float, temperature: float, molar: Floats) -> Floats:
        """dY/dt [mol/g/s] at density [g/cm^3], temperature [K], molar abundances [mol/g]."""
        return _ydot(self.arrays, density, temperature, molar)

    def energy_rate(self, density: float, temperature: float, molar: Floats) -> float:
        """Nuclear energy generation [erg/g/s]; arguments as for `ydot`."""
        return _energy_rate(self.arrays, density, temperature, molar)


@compiled
def _rates(network: NetworkArrays, temperature: float) -> Floats:
    scratch = kinetics_scratch(network)
    scratch.weight[:] = 1.0
    evaluate_rates(network.table, temperature, scratch)
    return scratch.rate


@compiled
def _fluxes(network: NetworkArrays, density: float, temperature: float, molar: Floats) -> Floats:
    scratch = kinetics_scratch(network)
    weigh_by_density(network.table, density, scratch)
    scratch.molar[: molar.size] = molar
    evaluate_rates(network.table, temperature, scratch)
    evaluate_fluxes(network.stoichiometry.reactants, scratch)
    return scratch.flux


@compiled
def _ydot(network: NetworkArrays, density: float, temperature: float, molar: Floats) -> Floats:
    change = np.empty(molar.size)
    abundance_change(network.stoichiometry, _fluxes(network, density, temperature, molar), change)
    return change


@compiled
def _energy_rate(network: NetworkArrays, density: float, temperature: float, molar: Floats) -> float:
    return heat_release(network.stoichiometry, 0.0, _fluxes(network, density, temperature, molar))


def load_network(name: str) -> Network:
    """Read a packaged network.

    Raises
    ------
    DeclarationError
        No such network, or its file breaks mass or charge conservation; ``details["faults"]``.
    """
    if name not in PACKAGED_NETWORKS:
        known = ", ".join(PACKAGED_NETWORKS)
        raise DeclarationError(f"network {name!r} is not known; packaged networks: {known}", network=name)
    data = json.loads(resources.files("breakstep.kernels").joinpath(f"{name}.json").read_text("utf-8"))
    species = tuple(_species(entry) for entry in data["species"])
    reactions = tuple(_reaction(entry, data["references"]) for entry in data["reactions"])
    return build_network(name, species, reactions, conserving=True)


def _species(entry: dict[str, Any]) -> Species:
    return Species(entry["name"], entry["mass_number"], entry["charge"], entry["binding_energy_MeV"])


def _reaction(entry: dict[str, Any], references: dict[str, str]) -> Reaction:
    return Reaction(
        tuple(entry["reactants"]),
        tuple(entry["products"]),
        entry["prefactor"],
        entry["density_exponent"],
        tuple(tuple(coefficients) for coefficients in entry["sets"]),
        references[entry["reference"]],
    )


def build_network(
    name: str, species: Sequence[Species], reactions: Sequence[Reaction], *, conserving: bool = False
) -> Network:
    """Check a network and lay it out.

    Parameters
    ----------
    conserving : bool
        Require of every reaction that mass number and charge balance (not so for abstract kinetics).

    Raises
    ------
    DeclarationError
        With all faults found, one sentence each, in ``details["faults"]``.
    """
    faults = _faults(species, reactions, conserving)
    if faults:
        raise DeclarationError(f"network {name!r} cannot be used: " + "; ".join(faults), faults=faults)
    arrays, positions = _arrays(species, reactions)
    return Network(name, tuple(species), tuple(reactions), arrays, positions)


def _faults(species: Sequence[Species], reactions: Sequence[Reaction], conserving: bool) -> list[str]:
    known = {one.name: one for one in species}
    faults = [] if len(known) == len(species) else ["a species is named twice"]
    faults += [f"{one.name}: mass number must be positive" for one in species if not one.mass_number > 0.0]
    for reaction in reactions:
        unknown = sorted({*reaction.reactants, *reaction.products} - known.keys())
        if unknown:
            faults.append(f"{reaction}: unknown species {', '.join(unknown)}")
        elif conserving and not _balances(reaction, known):
            faults.append(f"{reaction}: mass number or charge does not balance")
        if len(reaction.reactants) > MAX_REACTANTS:
            faults.append(f"{reaction}: more than {MAX_REACTANTS} reactants")
        if not reaction.sets or any(len(coefficients) != 7 for coefficients in reaction.sets):
            faults.append(f"{reaction}: a rate needs sets of 7 coefficients")
        if reaction.density_exponent < 0:
            faults.append(f"{reaction}: the density exponent must not be negative")
    return faults


def _balances(reaction: Reaction, known: dict[str, Species]) -> bool:
    change = reaction.net_change()
    mass = sum(number * known[name].mass_number for name, number in change.items())
    return mass == 0.0 and sum(number * known[name].charge for name, number in change.items()) == 0.0


def _arrays(
    species: Sequence[Species], reactions: Sequence[Reaction]
) -> tuple[NetworkArrays, NDArray[np.int64]]:
    binding = np.array([one.binding_energy * MEV * N_A for one in species])
    reactants, changes = _reactant_slots(species, reactions), _net_changes(species, reactions)
    positions, elimination = analyse(_pattern(reactants, changes))
    arrays = NetworkArrays(
        np.array([one.mass_number for one in species], dtype=np.float64),
        np.array([one.charge for one in species], dtype=np.float64),
        binding,
        _rate_table(reactions),
        _stoichiometry(reactants, changes, binding, positions),
        elimination,
    )
    return arrays, positions


def _rate_table(reactions: Sequence[Reaction]) -> RateTable:
    sets = [coefficients for reaction in reactions for coefficients in reaction.sets]
    return RateTable(
        np.ascontiguousarray(np.array(sets, dtype=np.float64).T),
        np.cumsum([0] + [len(reaction.sets) for reaction in reactions]).astype(np.uint32),
        np.array([reaction.prefactor for reaction in reactions], dtype=np.float64),
        np.array([reaction.density_exponent for reaction in reactions], dtype=np.int64),
    )


def _reactant_slots(species: Sequence[Species], reactions: Sequence[Reaction]) -> Indices:
    number = {one.name: k for k, one in enumerate(species)}
    slots = np.full((MAX_REACTANTS, len(reactions)), len(species), dtype=np.uint32)
    for r, reaction in enumerate(reactions):
        slots[: len(reaction.reactants), r] = [number[name] for name in reaction.reactants]
    return slots


def _net_changes(species: Sequence[Species], reactions: Sequence[Reaction]) -> Floats:
    """Net number of species k made by reaction r, shape (n_species, n_reactions)."""
    number = {one.name: k for k, one in enumerate(species)}
    changes = np.zeros((len(species), len(reactions)))
    for r, reaction in enumerate(reactions):
        for name, amount in reaction.net_change().items():
            changes[number[name], r] = amount
    return changes


def _pattern(reactants: Indices, changes: Floats) -> NDArray[np.bool_]:
    """Nonzeros of the Jacobian, temperature last; its row and column are taken as full."""
    n = changes.shape[0]
    pattern = np.zeros((n + 1, n + 1), dtype=bool)
    pattern[n, :] = pattern[:, n] = True
    for r, slots in enumerate(reactants.T):
        for j in slots[slots < n]:
            pattern[:n, j] |= changes[:, r] != 0.0
    return pattern


def _compressed(rows: Sequence[Sequence[int]]) -> tuple[Indices, Indices]:
    start = np.cumsum([0] + [len(row) for row in rows]).astype(np.uint32)
    return start, np.array([item for row in rows for item in row], dtype=np.uint32)


def _stoichiometry(
    reactants: Indices, changes: Floats, binding: Floats, positions: NDArray[np.int64]
) -> Stoichiometry:
    n = changes.shape[0]
    per_species = [np.flatnonzero(changes[k]).tolist() for k in range(n)]
    change_start, change_reaction = _compressed(per_species)
    slots = [np.flatnonzero(reactants.T.ravel() == j).tolist() for j in range(n)]
    slot_start, slot = _compressed(slots)
    terms = {
        (i, j): [s for s in slots[j] if changes[i, s // MAX_REACTANTS]] for i in range(n) for j in range(n)
    }
    terms = {pair: found for pair, found in terms.items() if found}
    entry_start, entry_slot = _compressed(list(terms.values()))
    coefficients = [changes[i, s // MAX_REACTANTS] for (i, _), found in terms.items() for s in found]
    return Stoichiometry(
        reactants,
        change_start,
        change_reaction,
        np.array([changes[k, r] for k in range(n) for r in per_species[k]], dtype=np.float64),
        np.array([positions[pair] for pair in terms], dtype=np.uint32),
        entry_start,
        entry_slot,
        np.array(coefficients, dtype=np.float64),
        slot_start,
        slot,
        binding @ changes,
        changes.sum(axis=0),
        positions[n, :n].astype(np.uint32),
        positions[:n, n].astype(np.uint32),
    )

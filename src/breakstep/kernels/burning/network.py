"""Reaction networks: read and checked as data, laid out as flat arrays for the compiled kernels.

Knows species, reactions and where their figures come from. Refuses to know how a network is integrated
and what a zone is. :func:`load_network` reads the packaged networks; :func:`build_network` takes any
mass-action kinetics, so published stiff problems test the very code that burns zones.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from importlib import resources
from pathlib import Path
from typing import Any

from breakstep.kernels.unmanaged import unmanaged  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

from breakstep.errors import DeclarationError
from breakstep.kernels.burning.network_layout import Reaction, Species, lay_out
from breakstep.kernels.burning.reactions import (
    MAX_REACTANTS,
    KineticsScratch,
    NetworkArrays,
    RateTable,
    abundance_change,
    evaluate_fluxes,
    evaluate_rates,
    heat_release,
    kinetics_scratch,
    weigh_by_density,
)

Floats = NDArray[np.float64]

__all__ = [
    "PACKAGED_NETWORKS",
    "Network",
    "Reaction",
    "Species",
    "build_network",
    "load_network",
    "read_network",
]

PACKAGED_NETWORKS = ("alpha13",)


@dataclass(frozen=True, eq=False)
class Network:
    """A reaction network, immutable: its arrays are read-only.

    ``arrays`` is what compiled functions take. ``positions``, shape (n_species + 1, n_species + 1), tells
    where in the packed Jacobian of abundances and temperature an entry lies, -1 where it is always zero.
    """

    name: str
    species: tuple[Species, ...]
    reactions: tuple[Reaction, ...]
    arrays: NetworkArrays
    positions: NDArray[np.int64]

    def __reduce__(self) -> tuple[Any, ...]:
        return build_network, (self.name, self.species, self.reactions)

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
        scratch = kinetics_scratch(self.arrays)
        _rates(self.arrays.table, float(temperature), scratch)
        return scratch.rate

    def ydot(self, density: float, temperature: float, molar: Floats) -> Floats:
        """dY/dt [mol/g/s] at density [g/cm^3], temperature [K], molar abundances [mol/g]."""
        return self._evaluate(density, temperature, molar)[0]

    def energy_rate(self, density: float, temperature: float, molar: Floats) -> float:
        """Nuclear energy generation [erg/g/s]; arguments as for `ydot`."""
        return self._evaluate(density, temperature, molar)[1]

    def _evaluate(self, density: float, temperature: float, molar: Floats) -> tuple[Floats, float]:
        scratch, change = kinetics_scratch(self.arrays), np.empty(len(self.species))
        scratch.molar[:-1] = molar
        energy = _ydot(self.arrays, float(density), float(temperature), scratch, change)
        return change, energy


@unmanaged
def _rates(table: RateTable, temperature: float, scratch: KineticsScratch) -> None:
    for r in range(scratch.weight.size):
        scratch.weight[r] = 1.0
    evaluate_rates(table, temperature, scratch)


@unmanaged
def _ydot(
    network: NetworkArrays, density: float, temperature: float, scratch: KineticsScratch, change: Floats
) -> float:
    """Fill ``change`` from ``scratch.molar``; the energy generation."""
    weigh_by_density(network.table, density, scratch)
    evaluate_rates(network.table, temperature, scratch)
    evaluate_fluxes(network.stoichiometry.reactants, scratch)
    abundance_change(network.stoichiometry, scratch.flux, change)
    return heat_release(network.stoichiometry, 0.0, scratch.flux)


@cache
def load_network(name: str) -> Network:
    """Read a packaged network.

    Raises
    ------
    DeclarationError
        There is no such network.
    """
    if name not in PACKAGED_NETWORKS:
        known = ", ".join(PACKAGED_NETWORKS)
        raise DeclarationError(f"network {name!r} is not known; packaged networks: {known}", network=name)
    return _parse(name, resources.files("breakstep.kernels.burning").joinpath(f"{name}.json").read_text("utf-8"))


def read_network(path: Path) -> Network:
    """Read a network from a file laid out as the packaged ones are.

    Raises
    ------
    DeclarationError
        The file is not such a network, or its reactions do not conserve mass number and charge.
    """
    return _parse(path.stem, path.read_text("utf-8"))


def _parse(name: str, text: str) -> Network:
    try:
        data = json.loads(text)
        species = [_species(entry) for entry in data["species"]]
        reactions = [_reaction(entry, data["references"]) for entry in data["reactions"]]
    except (ValueError, TypeError, KeyError) as fault:
        message = f"network {name!r} is not laid out as expected: {type(fault).__name__} {fault}"
        raise DeclarationError(message, network=name) from fault
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
        entry["q_value_MeV"],
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
    arrays, positions = lay_out(species, reactions)
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

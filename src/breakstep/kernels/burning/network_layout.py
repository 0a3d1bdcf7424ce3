"""From declared species and reactions to the flat arrays that compiled kinetics follow.

Knows how :mod:`breakstep.kernels.burning.reactions` wants its index lists. Refuses to know files, and does not
check: the declarations are taken to be consistent.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.burning.reactions import MAX_REACTANTS, NetworkArrays, RateTable, Stoichiometry
from breakstep.kernels.burning.sparse_lu import Indices, analyse
from breakstep.kernels.constants import N_A

Floats = NDArray[np.float64]

MEV = 1.602176634e-6
"""Erg in a mega-electronvolt, exact by the 2019 definition of the ampere."""


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
    belongs in ``prefactor``. ``source`` names the publication; ``q_value`` [MeV] came with the rate and is
    not used by the kernels, which take binding energies.
    """

    reactants: tuple[str, ...]
    products: tuple[str, ...]
    prefactor: float = 1.0
    density_exponent: int = 0
    sets: tuple[tuple[float, ...], ...] = ((0.0,) * 7,)
    source: str = ""
    q_value: float | None = None

    def __str__(self) -> str:
        return f"{' + '.join(self.reactants)} -> {' + '.join(self.products)}"

    def net_change(self) -> dict[str, int]:
        """How many of each species one reaction makes (negative: uses up); zeros left out."""
        change = Counter(self.products)
        change.subtract(self.reactants)
        return {name: number for name, number in change.items() if number}


def read_only(array: NDArray[Any]) -> NDArray[Any]:
    """A view of the array that cannot be written to."""
    view = array.view()
    view.flags.writeable = False
    return view


def _freeze(group: Any) -> Any:
    """A tuple of arrays, possibly nested, with all arrays read-only."""
    members = (read_only(one) if isinstance(one, np.ndarray) else _freeze(one) for one in group)
    return type(group)(*members)


def lay_out(species: Sequence[Species], reactions: Sequence[Reaction]) -> tuple[NetworkArrays, NDArray[np.int64]]:
    """The arrays of a network, and the packed positions of its Jacobian (`analyse`)."""
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
    return _freeze(arrays), positions


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


def _stoichiometry(reactants: Indices, changes: Floats, binding: Floats, positions: NDArray[np.int64]) -> Stoichiometry:
    n = changes.shape[0]
    per_species = [np.flatnonzero(changes[k]).tolist() for k in range(n)]
    change_start, change_reaction = _compressed(per_species)
    slots = [np.flatnonzero(reactants.T.ravel() == j).tolist() for j in range(n)]
    slot_start, slot = _compressed(slots)
    terms = {(i, j): [s for s in slots[j] if changes[i, s // MAX_REACTANTS]] for i in range(n) for j in range(n)}
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

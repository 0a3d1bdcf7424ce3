"""Hydrodynamics of one tile: a directional sweep, and the rate that limits its time step.

This module knows arrays of zones with a halo on one axis, and refuses to know tiles, neighbours, boundary
conditions and the order of sweeps. It cuts a padded array into chunks that stay in the second-level cache
and runs the loops of ``gas`` and ``species`` over each.

Scheme: finite volumes, MUSCL-Hancock (van Leer 1979; Toro, Riemann Solvers and Numerical Methods for Fluid
Dynamics, section 14.4) with limited primitive variables and the HLLC Riemann solver. The equation of
state is evaluated once a zone; density, velocity, pressure and internal energy density are reconstructed each
in its own right, so that faces need no equation of state beyond the zone's gamma1.

A zone's new state depends on the two neighbours on each side and on nothing else, and the flux through a
face is computed from the same numbers by the same operations whichever tile asks, so results do not depend
on the tiling to the last bit.

Components of a ``gas`` array: 0 density [g/cm^3]; 1 to 3 momentum density along x, y, z [g/(cm^2 s)];
4 total energy density, internal plus kinetic [erg/cm^3]; 5 and up partial densities of the species [g/cm^3].
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import numpy.typing as npt

from breakstep.errors import KernelError
from breakstep.kernels.compiled import compiled, inlined
from breakstep.kernels.eos import STELLAR
from breakstep.kernels.hydro.chunks import (
    NONE,
    Plan,
    add,
    chunk_plan,
    first_bad,
    first_unsound,
    largest_of,
    largest_speed,
    load,
    store,
)
from breakstep.kernels.hydro.gas import (
    crossing_rates,
    differences,
    face_states,
    fluxes,
    judge,
    pressures,
    primitives,
    signal_speeds,
    transverse_face_states,
    update,
    weights,
)
from breakstep.kernels.hydro.rows import (
    DENSITY,
    ENERGY,
    HALO,
    MOMENTUM,
    ROW,
    SOUND_AFTER,
    SOUND_BEFORE,
    SPECIES,
    SPEED,
    part,
    scratch_for,
)
from breakstep.kernels.hydro.species import face_fractions, fractions, mean_nuclei, species_changes

Array = npt.NDArray[np.float64]

GAS_COMPONENTS = 5
"""Components before the species."""


@compiled
def _prepare(source: Array, axis: int, s: Array, chunk: Any, eos: Array, mass_numbers: Array, charges: Array) -> None:
    """Load a chunk; primitive variables, equation of state, fractions."""
    count = chunk.load_pieces * chunk.load_length
    species = mass_numbers.size
    load(source[0], s, DENSITY, chunk)
    load(source[4], s, ENERGY, chunk)
    for k in range(3):
        load(source[1 + (axis + k) % 3], s, MOMENTUM + k, chunk)
    for k in range(species):
        load(source[GAS_COMPONENTS + k], s, SPECIES + k, chunk)
    primitives(s, count)
    if eos[0] == STELLAR:
        mean_nuclei(s, count, mass_numbers, charges)
    pressures(s, count, eos)
    signal_speeds(s, count)
    fractions(s, count, species)


@compiled
def _advance(s: Array, step: int, count: int, courant: float, species: int) -> None:
    """Advance a prepared chunk by one time step."""
    differences(s, step, count)
    weights(s, count, 0.5 * courant)
    face_states(s, count, 0.5 * courant)
    transverse_face_states(s, count)
    fluxes(s, step, count)
    if species > 0:
        face_fractions(s, step, count, species)
        species_changes(s, step, count, species, courant)
    update(s, step, count, courant)
    judge(s, count)


@compiled
def _deliver(source: Array, axis: int, s: Array, chunk: Any, species: int, new: Array) -> None:
    """Write a chunk's interior to the new array."""
    store(s, DENSITY, new[0], chunk)
    store(s, ENERGY, new[4], chunk)
    for k in range(3):
        store(s, MOMENTUM + k, new[1 + (axis + k) % 3], chunk)
    for k in range(species):
        add(source[GAS_COMPONENTS + k], s, SPECIES + k, new[GAS_COMPONENTS + k], chunk)


@compiled
def _sweep(
    source: Array,
    axis: int,
    courant: float,
    plan: Plan,
    eos: Array,
    mass_numbers: Array,
    charges: Array,
    new: Array,
) -> tuple[float, int]:
    s = scratch_for(mass_numbers.size)
    speed = 0.0
    bad_before = bad_after = NONE
    for index in range(plan.size):
        chunk = plan[index]
        _prepare(source, axis, s, chunk, eos, mass_numbers, charges)
        _advance(s, chunk.step, chunk.load_pieces * chunk.load_length, courant, mass_numbers.size)
        _deliver(source, axis, s, chunk, mass_numbers.size, new)
        speed = max(speed, largest_speed(s, chunk))
        bad_before = min(bad_before, first_bad(s, SOUND_BEFORE, chunk))
        bad_after = min(bad_after, first_bad(s, SOUND_AFTER, chunk))
    # A bad zone spoils its neighbours in the same step; it, not they, is to be reported.
    bad_zone = bad_before if bad_before < NONE else bad_after
    return speed * courant, bad_zone if bad_zone < NONE else -1


def _constant(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """A read-only view, so that numba compiles once whether or not the caller protects its arrays."""
    view = np.ascontiguousarray(values).view()
    view.flags.writeable = False
    return view


def sweep(
    gas: Array, axis: int, dt: float, spacing: float, eos: Array, mass_numbers: Array, charges: Array
) -> tuple[Array, float, int]:
    """Advance a tile by one directional sweep.

    Conserves the sum of each component but for what flows through the two outermost faces, to round-off.
    The sums of the species fluxes equal the mass flux to round-off where the fractions sum to 1.
    Stable for a Courant number of at most 1.

    Parameters
    ----------
    gas : ndarray, shape (5 + n_species, nx, ny, nz), C-contiguous
        The tile, wider by ``HALO`` zones on both sides along ``axis`` and only there.
    axis : int
        0, 1 or 2: the direction of the sweep.
    dt : float
        Time step [s].
    spacing : float
        Zone width along ``axis`` [cm].
    eos : ndarray, shape (3,)
        ``GammaLaw(...).vector`` or ``Stellar(...).vector``.
    mass_numbers, charges : ndarray, shape (n_species,)

    Returns
    -------
    new_gas : ndarray, shape (5 + n_species, nx, ny, nz)
        The interior after the time step, a new array.
    courant : float
        Largest (|u| + c) dt / spacing of the interior before the step. Zones without a sound speed
        do not count; they are bad.
    bad_zone : int
        -1, or the flat index into one component of ``new_gas`` of the first zone whose density or
        pressure was not positive or not finite before the step; if there is none, of the first whose
        density or internal energy is not so after it. ``new_gas`` then means nothing.

    Raises
    ------
    KernelError
        The array does not have the shape described.
    """
    species = mass_numbers.size
    if gas.ndim != 4 or gas.shape[0] != GAS_COMPONENTS + species or gas.shape[1 + axis] <= 2 * HALO:
        raise KernelError(
            f"expected gas of {GAS_COMPONENTS + species} components in 3 dimensions with more than "
            f"{2 * HALO} zones along axis {axis}, got shape {gas.shape}; pad the tile along the sweep axis",
            shape=gas.shape,
            axis=axis,
        )
    shape = list(gas.shape)
    shape[1 + axis] -= 2 * HALO
    new = np.empty(shape)
    plan = chunk_plan(math.prod(shape[1 : 1 + axis]), shape[1 + axis], math.prod(shape[2 + axis :]))
    courant, bad_zone = _sweep(
        _constant(gas).reshape(shape[0], -1),
        axis,
        dt / spacing,
        plan,
        _constant(eos),
        _constant(mass_numbers),
        _constant(charges),
        new.reshape(shape[0], -1),
    )
    return new, courant, bad_zone


@inlined
def _load_block(gas: Array, s: Array, start: int, count: int, species: int) -> None:
    """Load consecutive zones without halo; momentum stays in the order x, y, z."""
    for k in range(GAS_COMPONENTS):
        part(s, DENSITY + k, 0, count)[:] = gas[k, start : start + count]
    for k in range(species):
        part(s, SPECIES + k, 0, count)[:] = gas[GAS_COMPONENTS + k, start : start + count]


@compiled
def _signal_rate(gas: Array, widths: Array, eos: Array, mass_numbers: Array, charges: Array) -> tuple[float, int]:
    s = scratch_for(mass_numbers.size)
    largest = 0.0
    bad_zone = NONE
    for start in range(0, gas.shape[1], ROW):
        count = min(ROW, gas.shape[1] - start)
        stellar = eos[0] == STELLAR
        _load_block(gas, s, start, count, mass_numbers.size if stellar else 0)
        primitives(s, count)
        if stellar:
            mean_nuclei(s, count, mass_numbers, charges)
        pressures(s, count, eos)
        crossing_rates(s, count, widths)
        largest = max(largest, largest_of(part(s, SPEED, 0, count)))
        bad_zone = min(bad_zone, start + first_unsound(part(s, SOUND_BEFORE, 0, count)))
    return largest, bad_zone if bad_zone < NONE else -1


def signal_rate(
    gas: Array, spacing: Array, active: npt.NDArray[np.bool_], eos: Array, mass_numbers: Array, charges: Array
) -> tuple[float, int]:
    """Largest rate at which a signal crosses a zone; sweeps are one-dimensional, so the limit is per axis.

    Parameters
    ----------
    gas : ndarray, shape (5 + n_species, nx, ny, nz)
        A tile without halo.
    spacing : ndarray, shape (3,)
        Zone widths [cm].
    active : ndarray of bool, shape (3,)
        The axes that are swept.
    eos, mass_numbers, charges
        As for ``sweep``.

    Returns
    -------
    rate : float
        Maximum over zones and active axes of (|u| + c) / spacing [1/s]; times dt it is the Courant number.
    bad_zone : int
        -1, or the first flat index of a zone whose density, internal energy or sound speed is not
        positive or not finite; the rate then leaves it out.
    """
    rate, bad_zone = _signal_rate(
        _constant(gas).reshape(gas.shape[0], -1),
        _constant(np.where(active, spacing, np.inf)),
        _constant(eos),
        _constant(mass_numbers),
        _constant(charges),
    )
    return rate, bad_zone

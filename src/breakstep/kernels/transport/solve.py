"""Implicit multi-group radiation transport on one tile: assemble, relax, exchange.

This module is what a step calls: arrays in, new arrays out, inputs unchanged. It knows tiles as arrays with
a halo of one zone; it refuses to know how halos are filled, when to stop iterating and who computes where.

Method: flux-limited diffusion in G photon groups, backward Euler, matter linearised in theta = a T^4 and
eliminated zone by zone (``assembly`` gives the equations), block relaxation by colour
(``relaxation``). One time step is

1. :func:`assemble_gas` (or :func:`assemble`) from the old radiation and gas, each with halo;
2. :func:`relax` until the largest correction is small against the largest energy density, the halo
   filled anew before each call;
3. :func:`exchange` from the last iterate with halo: the gas receives what the radiation lost.

**Halos.** Only face neighbours are read; edge and corner zones of a halo may hold anything. Periodic: the
zones across. Reflecting or open: a copy of the zone at the boundary, whose flux is then exactly zero. Fixed
value: that value, at the centre of the halo zone.

**Bits.** Every number depends on the zone and its six neighbours only, computed by the same operations
whichever tile it lies in. With ``passes=1`` between halo exchanges the iterates are the same bits for every
tiling; with more passes they agree to the solver's tolerance, for the halo is then stale during some passes.

**Conservation.** :func:`exchange` gives the gas, zone by zone, the radiation lost plus the net inflow by the
new radiation; flows through a face have the same bits with opposite signs on both sides. So the sum of gas
and radiation energy is conserved to round-off however well the system was solved.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from breakstep.kernels.constants import C_LIGHT
from breakstep.kernels.transport.assembly import Spacing, assemble_flat
from breakstep.kernels.transport.exchange import first_not_positive, gain_flat
from breakstep.kernels.transport.layout import (
    Axes,
    Floats,
    flat,
    frozen,
    in_extent_order,
    inner_shape,
    tile_extent,
)
from breakstep.kernels.transport.matter import TOTAL_ENERGY, Matter, matter_flat
from breakstep.kernels.transport.relaxation import inner_zones, relax_flat


class Material(NamedTuple):
    """What :func:`assemble` needs of the matter, as plain fields of shape (., nx, ny, nz)."""

    total: Floats
    """Absorption plus scattering [1/cm], with halo; G components, positive."""
    absorption: Floats
    """[1/cm]; G components."""
    emission: Floats
    """Share of black-body radiation in each group; G components."""
    theta: Floats
    """a T^4 [erg/cm^3]; 1 component."""
    beta: Floats
    """d theta / d (material energy density), 4 a T^3 / (rho c_v); 1 component, not negative."""
    scattering: Floats
    """What ``redistribution`` is a share of [1/cm]; 1 component."""
    deposit: Floats
    """Energy that sources give to the radiation during the step [erg/cm^3]; G components."""


class Assembly(NamedTuple):
    """The linear system of one tile and one time step."""

    bands: Floats
    """Couplings c dt D / dx^2 to the neighbours, shape (2 n_axes G, nx, ny, nz): by axis, low face then high
    face, group. The two zones at a face hold the same bits."""
    system: Floats
    """Factored blocks, right-hand sides and couplings, shape (G (G + 1 + 2 n_axes), nx, ny, nz).

    Only :func:`relax` reads it: within the tile its numbers are in panel order (``layout``), so it
    can be sent and stored whole, but not be cut, joined or compared between tilings."""
    bad_zone: int
    """Flat index of a zone whose block has a pivot that is not positive and finite (NaN input, negative
    opacity or temperature), or -1."""


def assemble(
    radiation: Floats,
    material: Material,
    redistribution: Floats,
    *,
    light_path: float,
    spacing: Spacing,
    axes: Axes,
    limited: bool = True,
    balanced: bool = True,
) -> Assembly:
    """Build and factor the system from plain fields.

    Parameters
    ----------
    radiation : ndarray, shape (G, nx, ny, nz) with halo
        Energy densities at the start of the step [erg/cm^3].
    material : Material
    redistribution : ndarray, shape (G, G)
        ``[to, from]``: shares of the scattering that change the group; the diagonal is ignored.
    light_path : float
        c dt [cm].
    spacing : tuple of 3 floats
        Zone widths along x, y, z [cm].
    axes : tuple of int
        The axes present, ascending, of 0, 1, 2: those along which arrays have a halo.
    limited : bool
        Levermore-Pomraning flux limiter, or pure diffusion (lambda = 1/3).
    balanced : bool
        Weigh redistribution by the emission shares, so that a symmetric ``redistribution`` leaves
        black-body radiation at the matter's temperature alone.
    """
    extent, _ = tile_extent(material.absorption.shape[1:], axes)
    bands, system, bad = assemble_flat(
        flat(radiation),
        flat(material.total),
        flat(material.absorption),
        flat(material.emission),
        flat(material.theta),
        flat(material.beta),
        flat(material.deposit),
        flat(material.scattering),
        frozen(redistribution),
        balanced,
        light_path,
        in_extent_order(spacing, axes),
        1.0 if limited else 0.0,
        extent,
        len(axes),
    )
    shape = material.absorption.shape[1:]
    return Assembly(bands.reshape(-1, *shape), system.reshape(-1, *shape), bad)


def assemble_gas(
    radiation: Floats,
    gas: Floats,
    matter: Matter,
    *,
    dt: float,
    spacing: Spacing,
    axes: Axes,
    deposit: Floats | None = None,
    limited: bool = True,
) -> Assembly:
    """Build and factor the system from the gas, by its equation of state and opacity.

    Parameters
    ----------
    radiation : ndarray, shape (G, nx, ny, nz) with halo
    gas : ndarray, shape (5 + n_species, nx, ny, nz) with halo
        Density, momentum density, total energy density, partial densities, at the start of the step.
    matter : Matter
    dt : float
        [s]
    spacing, axes, limited
        As in :func:`assemble`.
    deposit : ndarray, shape (G, nx, ny, nz), optional
        Energy that sources give to the radiation during the step [erg/cm^3]; none by default.
    """
    inner = inner_shape(gas.shape[1:], axes)
    extent, n_axes = tile_extent(inner, axes)
    fields = matter_flat(
        flat(gas),
        frozen(matter.eos),
        frozen(matter.mass_numbers),
        frozen(matter.charges),
        frozen(matter.edges),
        frozen(matter.absorption_factors),
        frozen(matter.power_law),
        extent,
        n_axes,
    )
    total, absorption, emission, theta, beta, scattering = fields
    if deposit is None:
        deposit = np.zeros(absorption.shape)
    material = Material(
        total=total,
        absorption=absorption.reshape(-1, *inner),
        emission=emission,
        theta=theta,
        beta=beta,
        scattering=scattering,
        deposit=deposit,
    )
    return assemble(
        radiation,
        material,
        matter.redistribution,
        light_path=C_LIGHT * dt,
        spacing=spacing,
        axes=axes,
        limited=limited,
    )


def relax(
    radiation: Floats,
    system: Floats,
    *,
    axes: Axes,
    first_colour: int,
    passes: int,
    origin_parity: int,
    omega: float = 1.0,
) -> tuple[Floats, Floats]:
    """Relax block by block for some colour passes, the halo frozen.

    Parameters
    ----------
    radiation : ndarray, shape (G, nx, ny, nz) with halo
        The last iterate.
    system : ndarray
        From :func:`assemble`.
    first_colour : int
        Which zones the first pass updates: 0 those whose global indices sum to an even number, 1 the
        others. Colours alternate from pass to pass.
    passes : int
        Number of passes, at least 1. For the same bits on every tiling: 1, ``first_colour`` alternating
        from call to call.
    origin_parity : int
        Parity of the sum of the global indices of the tile's first inner zone.
    omega : float
        Over-relaxation, in (0, 2); 1 is block Gauss-Seidel.

    Returns
    -------
    radiation : ndarray, shape (G, nx, ny, nz)
        The next iterate, without halo.
    norm : ndarray, shape (2,)
        Largest absolute correction that a block solve asked for, before over-relaxation and over all passes,
        and largest absolute energy density of the tile [erg/cm^3]. Both combine over tiles by their maximum
        (a NaN must win there as well); stop when the first is not above a tolerance times the second,
        for both colours: with ``passes=1`` that takes two successive iterations. NaN where the iterate
        is not finite, so test ``not (first <= tolerance * second)``.
    """
    inner = inner_shape(radiation.shape[1:], axes)
    extent, n_axes = tile_extent(inner, axes)
    state = flat(radiation).copy()
    odd_first = (first_colour + origin_parity) % 2
    correction = relax_flat(state, frozen(system).reshape(-1), extent, n_axes, odd_first, passes, omega)
    updated, largest = inner_zones(state, extent, n_axes)
    if np.isnan(largest):
        correction = largest
    return updated.reshape(-1, *inner), np.array([correction, largest])


def energy_gain(
    radiation: Floats, old_radiation: Floats, bands: Floats, *, axes: Axes, deposit: Floats | None = None
) -> Floats:
    """Energy that the matter receives from the radiation during the step.

    Parameters
    ----------
    radiation : ndarray, shape (G, nx, ny, nz) with halo
        At the end of the step.
    old_radiation : ndarray, shape (G, nx, ny, nz)
        At its start.
    bands : ndarray
        From :func:`assemble`.
    deposit : ndarray, shape (G, nx, ny, nz), optional
        As given to the assembly.

    Returns
    -------
    ndarray, shape (1, nx, ny, nz)
        sum over groups of old - new + net inflow + deposit [erg/cm^3].
    """
    inner = old_radiation.shape[1:]
    extent, n_axes = tile_extent(inner, axes)
    if deposit is None:
        deposit = np.zeros(old_radiation.shape)
    gain = gain_flat(flat(radiation), flat(old_radiation), flat(bands), flat(deposit), extent, n_axes)
    return gain.reshape(1, *inner)


def exchange(
    radiation: Floats,
    old_radiation: Floats,
    bands: Floats,
    gas: Floats,
    *,
    axes: Axes,
    deposit: Floats | None = None,
) -> tuple[Floats, int]:
    """Give the gas the energy that the radiation lost; parameters as in :func:`energy_gain`.

    Parameters
    ----------
    gas : ndarray, shape (5 + n_species, nx, ny, nz)
        At the start of the step, without halo.

    Returns
    -------
    gas : ndarray, shape (5 + n_species, nx, ny, nz)
        With the new total energy density; density, momentum and composition are the old ones.
    bad_zone : int
        The first zone whose internal energy is not positive, or -1.
    """
    gain = energy_gain(radiation, old_radiation, bands, axes=axes, deposit=deposit)
    new_gas = np.array(gas)
    new_gas[TOTAL_ENERGY] += gain[0]
    return new_gas, first_not_positive(new_gas.reshape(new_gas.shape[0], -1))

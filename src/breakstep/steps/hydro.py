"""The hydrodynamics steps: one directional sweep an axis, declared like any user's step."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from breakstep.errors import KernelError
from breakstep.kernels.eos import GammaLaw, Stellar
from breakstep.kernels.hydro import sweep as hydro
from breakstep.kernels.hydro.rows import HALO
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import AXIS_NAMES, Triple
from breakstep.steps.step import Array, Call, Read, Step

COURANT_LIMIT = 1.0  # MUSCL-Hancock is stable up to 1 along each sweep (Toro, section 14.4)
ADVECTED = ("density", "momentum_x", "momentum_y", "momentum_z", "total_energy")


@dataclass(frozen=True)
class Gas:
    """What the gas is made of and how it answers.

    Parameters
    ----------
    eos : GammaLaw or Stellar
    species : tuple of str
    mass_numbers, charges : tuple of float
        One a species.
    """

    eos: GammaLaw | Stellar
    species: tuple[str, ...] = ()
    mass_numbers: tuple[float, ...] = ()
    charges: tuple[float, ...] = ()

    @cached_property
    def arrays(self) -> tuple[Array, Array, Array]:
        """Equation of state, mass numbers and charges as kernels take them."""
        return self.eos.vector, np.array(self.mass_numbers), np.array(self.charges)


def gas_field(gas: Gas, fixed: Mapping[tuple[int, int], tuple[float, ...]] | None = None) -> Field:
    """The field ``gas``: densities of mass, momentum, total energy and each species."""
    return Field(
        name="gas",
        components=(*ADVECTED, *(f"rho_{name}" for name in gas.species)),
        units=("g/cm^3", *("g/cm^2/s",) * 3, "erg/cm^3", *("g/cm^3",) * len(gas.species)),
        normal={axis: (1 + axis,) for axis in range(3)},
        fixed=dict(fixed or {}),
    )


def describe_zone(gas: Array, flat: int, call: Call) -> tuple[Triple, str]:
    """Where a zone lies in the mesh, and its state in words."""
    place = np.unravel_index(flat, gas.shape[1:])
    zone = tuple(int(p) + o for p, o in zip(place, call.origin, strict=True))
    state = gas.reshape(gas.shape[0], -1)[:, flat]
    words = ", ".join(f"{name} {value:.6g}" for name, value in zip(ADVECTED, state, strict=False))
    return zone, words  # type: ignore[return-value]


def interior(padded: Array, shape: Triple) -> Array:
    """The zones of a padded array without its halo."""
    cuts = [slice((p - n) // 2, (p - n) // 2 + n) for p, n in zip(padded.shape[1:], shape, strict=True)]
    return padded[(slice(None), *cuts)]


@dataclass(frozen=True)
class SweepKernel:
    """One MUSCL-Hancock sweep along an axis.

    Raises
    ------
    CourantError
        The time step is too large for the state it meets: the price of a lagged time step, never silent.
    KernelError
        A zone's density, pressure or energy is not positive, before or after.
    """

    gas: Gas
    axis: int

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        width = call.widths[self.axis]
        new, courant, bad = hydro.sweep(arrays["gas"], self.axis, call.dt, width, *self.gas.arrays)
        # A step that is too large may well spoil a zone too: then the cause is named, not the effect.
        if not courant <= COURANT_LIMIT:
            raise call.courant_error(
                f"has a CFL number of {courant:.3g} in the state it is applied to, above the limit of"
                f" {COURANT_LIMIT:g}",
                limit=call.dt * COURANT_LIMIT / courant,
                courant=courant,
            )
        if bad >= 0:
            zone, before = describe_zone(interior(arrays["gas"], call.shape), bad, call)
            _, after = describe_zone(new, bad, call)
            raise KernelError(
                f"{call.where()}: zone {zone} has or gets a density, energy or pressure that is not positive;"
                f" before: {before}; after: {after}; dt {call.dt:.4g} s; lower the CFL factor or look at the state",
                zone=zone,
            )
        call.count("zones", int(np.prod(call.shape)))
        return {"gas": new}


def sweep(gas: Gas, axis: int) -> Step:
    """The step ``sweep_x``, ``sweep_y`` or ``sweep_z``: halo 2 along its own axis only."""
    halo = [0, 0, 0]
    halo[axis] = HALO
    return Step(
        name=f"sweep_{AXIS_NAMES[axis]}",
        kernel=SweepKernel(gas, axis),
        reads=(Read("gas", (halo[0], halo[1], halo[2])),),
        writes=("gas",),
        uses=("dt",),
    )

"""The radiation steps: assemble, relax until converged, exchange energy with the gas.

The Jacobian of the whole mesh is never stored: each tile keeps the dense blocks of its own zones for one
cycle, as a scratch field that no other tile reads.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from breakstep.errors import DeclarationError, KernelError
from breakstep.kernels.transport import solve as transport
from breakstep.kernels.transport.matter import Matter, describe_matter
from breakstep.kernels.transport.opacity import PhotonGroups, PowerLawOpacity
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Triple
from breakstep.steps.hydro import Gas, describe_zone, interior
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Item, Repeat
from breakstep.steps.step import Array, Call, Read, Step


@dataclass(frozen=True)
class Transport:
    """How to transport radiation.

    Parameters
    ----------
    groups : PhotonGroups
    opacity : PowerLawOpacity
    tolerance : float
        Largest correction at which the iteration stops, relative to the largest energy density.
    at_most : int
        Iterations allowed.
    lag : int
        Iterations by which the verdict is late.
    sweeps_per_exchange : int
        Colour passes between two exchanges of rims; with 1 the bits do not depend on the tiling.
    omega : float
        Over-relaxation factor, between 0 and 2.
    """

    groups: PhotonGroups = field(default_factory=PhotonGroups)
    opacity: PowerLawOpacity = field(default_factory=PowerLawOpacity)
    tolerance: float = 1e-8
    at_most: int = 200
    lag: int = 0
    sweeps_per_exchange: int = 4
    omega: float = 1.2

    def __post_init__(self) -> None:
        if not 0.0 < self.omega < 2.0:
            raise DeclarationError(f"transport: omega must lie between 0 and 2, not {self.omega}")
        if self.sweeps_per_exchange < 1:
            raise DeclarationError(f"transport: sweeps_per_exchange must be at least 1, not {self.sweeps_per_exchange}")


@dataclass(frozen=True)
class _Radiating:
    """What the radiation kernels share."""

    gas: Gas
    how: Transport

    @cached_property
    def matter(self) -> Matter:
        """Everything about the matter, as arrays for the kernels."""
        return describe_matter(*self.gas.arrays, self.how.groups, self.how.opacity)


def _axes(call: Call) -> tuple[int, ...]:
    return tuple(axis for axis in range(3) if call.active[axis])


class AssembleKernel(_Radiating):
    """Builds and factors each zone's dense block, and the couplings to its neighbours."""

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        axes = _axes(call)
        made = transport.assemble_gas(
            arrays["radiation"], arrays["gas"], self.matter, dt=call.dt, spacing=call.widths, axes=axes
        )
        if made.bad_zone >= 0:
            zone, state = describe_zone(interior(arrays["gas"], call.shape), made.bad_zone, call)
            raise KernelError(
                f"{call.where()}: the transport block of zone {zone} cannot be factored; its gas: {state}; dt"
                f" {call.dt:.4g} s; look for a temperature that is not positive",
                zone=zone,
            )
        old = interior(arrays["radiation"], call.shape).copy()
        call.count("blocks", int(np.prod(call.shape)))
        return {"bands": made.bands, "system": made.system, "old_radiation": old}


class RelaxKernel(_Radiating):
    """Some colour passes of block relaxation with the rim frozen."""

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        passes = self.how.sweeps_per_exchange
        radiation, norm = transport.relax(
            arrays["radiation"],
            arrays["system"],
            axes=_axes(call),
            first_colour=call.iteration * passes % 2,
            passes=passes,
            origin_parity=sum(call.origin) % 2,
            omega=self.how.omega,
        )
        call.count("passes", passes)
        return {"radiation": radiation, "correction": norm.reshape(2, 1, 1, 1)}


class ExchangeKernel(_Radiating):
    """Gives the gas what the radiation lost: conserves their sum to round-off, converged or not."""

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        gas, bad = transport.exchange(
            arrays["radiation"], arrays["old_radiation"], arrays["bands"], arrays["gas"], axes=_axes(call)
        )
        if bad >= 0:
            zone, state = describe_zone(arrays["gas"], bad, call)
            raise KernelError(
                f"{call.where()}: zone {zone} loses more energy to the radiation than it has; its gas before:"
                f" {state}; dt {call.dt:.4g} s; lower the time step",
                zone=zone,
            )
        return {"gas": gas}


def correction_of_tile(arrays: Mapping[str, Array], call: Call) -> Array:
    """A tile's contribution to the residual: largest correction and largest energy density."""
    return arrays["correction"].reshape(2)


@dataclass(frozen=True)
class Residual:
    """Largest correction over largest energy density, of both colours.

    The result is (residual, this iteration's ratio). With a single colour pass an iteration, the residual
    is that of the last two iterations, and infinite after the first.
    """

    passes: int

    def __call__(self, combined: Array, previous: Array | None) -> Array:
        ratio = combined[0] / combined[1] if combined[1] > 0.0 else combined[0]
        if self.passes > 1:
            return np.array([ratio, ratio])
        before = np.inf if previous is None else previous[1]
        return np.array([np.maximum(ratio, before), ratio])


@dataclass(frozen=True)
class Converged:
    """Whether the residual is small; never for NaN."""

    tolerance: float

    def __call__(self, residual: Array) -> bool:
        return bool(residual[0] <= self.tolerance)


def transport_fields(
    how: Transport, dimensions: int, fixed: Mapping[tuple[int, int], tuple[float, ...]] | None = None
) -> tuple[Field, ...]:
    """The radiation and the scratch fields of its solve."""
    n = how.groups.count
    return (
        Field("radiation", _numbered("group", n), ("erg/cm^3",), fixed=dict(fixed or {})),
        Field("old_radiation", _numbered("group", n), ("erg/cm^3",), scratch=True),
        Field("bands", _numbered("band", 2 * dimensions * n), scratch=True),
        Field("system", _numbered("entry", n * (n + 1 + 2 * dimensions)), scratch=True),
        Field("correction", ("largest_correction", "largest_energy"), ("erg/cm^3",), scratch=True, per_tile=True),
    )


def _numbered(name: str, count: int) -> tuple[str, ...]:
    return tuple(f"{name}_{i}" for i in range(count))


def transport_items(gas: Gas, how: Transport, dimensions: int) -> list[Item]:
    """Assemble, solve, exchange: to be kept in this order."""
    halo: Triple = (1, int(dimensions > 1), int(dimensions > 2))
    assemble = Step(
        "assemble",
        AssembleKernel(gas, how),
        (Read("gas", halo), Read("radiation", halo)),
        ("bands", "system", "old_radiation"),
        uses=("dt",),
    )
    relax = Step("relax", RelaxKernel(gas, how), (Read("radiation", halo), Read("system")), ("radiation", "correction"))
    residual = Reduction(
        "residual",
        correction_of_tile,
        (Read("correction"),),
        Combine.MAX,
        Residual(how.sweeps_per_exchange),
        how.lag,
    )
    solve = Repeat("solve", (relax,), residual, Converged(how.tolerance), how.at_most)
    exchange = Step(
        "exchange",
        ExchangeKernel(gas, how),
        (Read("radiation", halo), Read("old_radiation"), Read("bands"), Read("gas")),
        ("gas",),
        uses=("dt",),
    )
    return [assemble, solve, exchange]

"""Small coupled problems, built from the public steps, and how to run them in this process.

The states are invented: they are chosen to move, burn and shine within a few cycles, and describe no star.
Initial states are pure functions of where a tile lies, so that every tiling starts from the same bits.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions, RunResult, whole_field
from breakstep.engine.serial import SerialDispatch
from breakstep.kernels.burning.network import Network
from breakstep.kernels.constants import A_RAD
from breakstep.kernels.eos import GammaLaw, Stellar, state_from_temperature
from breakstep.kernels.transport.opacity import PhotonGroups, PowerLawOpacity, planck_fractions
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.mesh.tiling import Tile
from breakstep.steps.burning import Burning, burn
from breakstep.steps.hydro import Gas, gas_field, sweep
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import Item, Splitting, lie
from breakstep.steps.step import Step
from breakstep.steps.timestep import time_is_up, time_step
from breakstep.steps.transport import Transport, transport_fields, transport_items

Array = npt.NDArray[np.float64]

PERIODIC = (Edge.PERIODIC, Edge.PERIODIC)


def attempt(problem: Problem, tile_shape: tuple[int, ...]) -> RunResult:
    """Run to the end or to an error."""
    return SerialDispatch().run(Program(problem, tile_shape), RunOptions(record=False))


def run(problem: Problem, tile_shape: tuple[int, ...] | None = None) -> dict[str, Array]:
    """Run, in one tile if not told otherwise; the whole fields, shape (components, nx, ny, nz)."""
    program = Program(problem, tile_shape or problem.mesh.shape)
    result = SerialDispatch().run(program, RunOptions(record=False))
    if result.failure is not None:
        raise result.failure
    return {name: whole_field(program, tiles) for name, tiles in result.fields.items()}


def initial(problem: Problem) -> dict[str, Array]:
    """The whole fields that a run starts from."""
    return Program(problem, problem.mesh.shape).initial(0)


def places(tile: Tile, mesh: Mesh) -> list[Array]:
    """Zone centres along x, y, z [cm], as arrays of the tile's shape."""
    axes = zip(tile.origin, tile.shape, mesh.widths, strict=True)
    return list(np.meshgrid(*[(np.arange(o, o + n) + 0.5) * w for o, n, w in axes], indexing="ij"))


def gamma_law_gas(rho: Array, velocity: Array, p: Array, gamma: float, fractions: Array) -> Array:
    """Components of field ``gas``, shape (5 + n_species, nx, ny, nz)."""
    total = p / (gamma - 1.0) + 0.5 * rho * (velocity**2).sum(axis=0)
    return np.concatenate([rho[None], rho * velocity, total[None], rho * fractions])


def gas_of(network: Network, eos: GammaLaw | Stellar) -> Gas:
    """A gas made of a network's species."""
    return Gas(eos, network.names, tuple(network.mass_numbers), tuple(network.charges))


def stellar_gas(gas: Gas, rho: Array, velocity: Array, temperature: Array) -> Array:
    """Components of field ``gas`` made of the first three species in parts of 3, 5 and 2."""
    eos, mass_numbers, charges = gas.arrays
    fractions = np.zeros(len(gas.species))
    fractions[:3] = 0.3, 0.5, 0.2
    abar = 1.0 / np.sum(fractions / mass_numbers)
    zbar = abar * np.sum(fractions * charges / mass_numbers)
    pairs = zip(rho.ravel(), temperature.ravel(), strict=True)
    energy = np.array([state_from_temperature(eos, d, t, abar, zbar)[0] for d, t in pairs])
    total = rho * energy.reshape(rho.shape) + 0.5 * rho * (velocity**2).sum(axis=0)
    return np.concatenate([rho[None], rho * velocity, total[None], np.multiply.outer(fractions, rho)])


def black_body(groups: PhotonGroups, temperature: Array) -> Array:
    """Field ``radiation`` in equilibrium with matter of this temperature."""
    shares = np.empty((groups.count, temperature.size))
    planck_fractions(temperature.ravel(), groups.edges, shares)
    return shares.reshape(-1, *temperature.shape) * (A_RAD * temperature**4)


@dataclass(frozen=True)
class HotSpots:
    """Helium, carbon and oxygen that drift and turn, with Gaussian hot spots; radiation in equilibrium.

    Parameters
    ----------
    spots : tuple of (x, y, radius, excess temperature)
        Lengths in parts of the box.
    """

    gas: Gas
    groups: PhotonGroups
    spots: tuple[tuple[float, float, float, float], ...]

    def __call__(self, tile: Tile, mesh: Mesh) -> Mapping[str, Array]:
        x, y = (z / (n * w) for z, n, w in zip(places(tile, mesh)[:2], mesh.zones, mesh.widths, strict=False))
        temperature = np.full(tile.shape, 4e8)
        for centre_x, centre_y, radius, excess in self.spots:
            temperature += excess * np.exp(-((x - centre_x) ** 2 + (y - centre_y) ** 2) / radius**2)
        rho = 1e6 * (1.0 + 0.1 * np.cos(2.0 * np.pi * x))
        velocity = 2e7 * np.stack([0.4 + np.sin(2.0 * np.pi * y), np.sin(2.0 * np.pi * x) - 0.3, 0.0 * x])
        gas = stellar_gas(self.gas, rho, velocity, temperature)
        return {"gas": gas, "radiation": black_body(self.groups, temperature)}


@dataclass(frozen=True)
class Layers:
    """The same matter in layers across one axis: a hot one, and a step in density; uniform along the others."""

    gas: Gas
    groups: PhotonGroups
    axis: int = 0

    def __call__(self, tile: Tile, mesh: Mesh) -> Mapping[str, Array]:
        depth = places(tile, mesh)[self.axis] / (mesh.zones[self.axis] * mesh.widths[self.axis])
        temperature = 4e8 + 2.4e9 * np.exp(-(((depth - 0.4) / 0.1) ** 2))
        velocity = np.zeros((3, *tile.shape))
        velocity[self.axis] = 2e7 * np.sin(2.0 * np.pi * depth)
        gas = stellar_gas(self.gas, np.where(depth < 0.6, 1e6, 3e5), velocity, temperature)
        return {"gas": gas, "radiation": black_body(self.groups, temperature)}


GROUPS = PhotonGroups(4, 1e8, 1e11)
# Mean free paths of 1 to 100 zones at 1e6 g/cm^3 and 1e9 K: photons cross zones, and matter feels it.
OPACITY = PowerLawOpacity(absorption=1e-8, temperature=1e9, photon=3e9, scattering=1e-9)
# Three hot spots none of which is like another, so that no symmetry hides a mistake.
SPOTS = ((0.3, 0.3, 0.10, 2.4e9), (0.7, 0.62, 0.12, 2.1e9), (0.2, 0.8, 0.08, 2.6e9))


def transport(**options: Any) -> Transport:
    """The radiation of the embers; options override."""
    return Transport(GROUPS, OPACITY, **{"tolerance": 1e-8, "sweeps_per_exchange": 1, **options})


@dataclass(frozen=True)
class Embers:
    """A periodic box of 24 by 20 zones in which everything happens at once: gas, radiation, burning.

    Parameters
    ----------
    how : Transport or None
        None leaves the radiation out of the splitting (it then just stands there).
    first, last : tuple of Step
        Further steps, run at the beginning and the end of each cycle.
    """

    cycles: int = 6
    cfl: float = 0.4
    lag: int = 0
    end_time: float | None = None
    maximum: float | None = None
    how: Transport | None = field(default_factory=transport)
    burning: Burning = field(default_factory=Burning)
    spots: tuple[tuple[float, float, float, float], ...] = SPOTS
    first: tuple[Step, ...] = ()
    last: tuple[Step, ...] = ()

    @property
    def gas(self) -> Gas:
        return gas_of(self.burning.load(), Stellar(radiation=False))

    def splitting(self) -> Splitting:
        gas = self.gas
        radiation = [] if self.how is None else transport_items(gas, self.how, 2)
        physics: list[Item] = [sweep(gas, 0), sweep(gas, 1), *radiation, burn(gas, self.burning)]
        dt = time_step(gas, cfl=self.cfl, lag=self.lag, maximum=self.maximum, end_time=self.end_time)
        return lie([*self.first, *physics, *self.last], [dt])

    def problem(self) -> Problem:
        return Problem(
            name="embers",
            title="Embers in a periodic box",
            mesh=Mesh((24, 20), (2e4, 2e4), (PERIODIC, PERIODIC)),
            fields=(gas_field(self.gas), *transport_fields(self.how or transport(), 2)),
            splitting=self.splitting(),
            initial=HotSpots(self.gas, GROUPS, self.spots),
            cycles=self.cycles,
            ended=None if self.end_time is None else time_is_up,
        )

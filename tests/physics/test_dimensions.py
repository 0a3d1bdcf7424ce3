"""One, two and three dimensions through the same steps: what is exact, and what holds as well as the splitting.

Exact to the last bit: exchanging the axes of the state and the order of the sweeps exchanges the axes of the answer;
a problem that varies along one axis gives the same numbers on a mesh of one, two or three axes. Exact
to round-off: the mirror symmetry of each sweep. Not exact: the symmetry of x and y within one run, for one of
the axes is swept first. Orders that alternate leave a difference of second order in the time step.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pytest

from breakstep.kernels.burning.network import load_network
from breakstep.kernels.eos import GammaLaw, Stellar
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.mesh.tiling import Tile
from breakstep.steps.burning import Burning, burn
from breakstep.steps.hydro import Gas, gas_field, sweep
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Reduction
from breakstep.steps.splitting import Item, Splitting, alternating, lie
from breakstep.steps.timestep import time_is_up, time_step
from breakstep.steps.transport import transport_fields, transport_items
from tests.physics.problems import (
    GROUPS,
    PERIODIC,
    Array,
    Layers,
    gamma_law_gas,
    gas_of,
    places,
    run,
    transport,
)

pytestmark = pytest.mark.physics

Constructor = Callable[[Sequence[Item], Sequence[Reduction]], Splitting]

GAMMA = 1.4
WALLS = (Edge.REFLECTING, Edge.REFLECTING)


@dataclass(frozen=True)
class Blast:
    """Gas at rest with more pressure around the centre of a unit square: a sharp disc, or a gentle hill."""

    sharp: bool

    def __call__(self, tile: Tile, mesh: Mesh) -> Mapping[str, Array]:
        x, y, _ = places(tile, mesh)
        radius = np.sqrt((x - 0.5) ** 2 + (y - 0.5) ** 2)
        one = np.ones(tile.shape)
        hill = np.where(radius < 0.15, 9.0, 0.0) if self.sharp else 0.1 * np.exp(-((radius / 0.15) ** 2))
        no_species = np.zeros((0, *tile.shape))
        return {"gas": gamma_law_gas(one, np.zeros((3, *tile.shape)), 1.0 + hill, GAMMA, no_species)}


def blast(make: Constructor, axes: Sequence[int], *, sharp: bool = True, dt: float | None = None) -> Array:
    """The gas at t = 0.16, when the wave is near the walls, after sweeps in this order of axes."""
    gas = Gas(GammaLaw(GAMMA))
    clock = time_step(gas, cfl=0.8, maximum=dt, end_time=0.16)
    problem = Problem(
        name="blast",
        title="Blast in a square",
        mesh=Mesh((48, 48), (1.0 / 48, 1.0 / 48), (WALLS, WALLS)),
        fields=(gas_field(gas),),
        splitting=make([sweep(gas, axis) for axis in axes], [clock]),
        initial=Blast(sharp),
        cycles=1000,
        ended=time_is_up,
    )
    return run(problem, (16, 24))["gas"]


def exchanged(gas: Array) -> Array:
    """The same gas with x for y."""
    return np.swapaxes(gas, 1, 2)[[0, 2, 1, 3, 4]]


def mirrored(gas: Array, axis: int) -> Array:
    """The same gas seen in a mirror."""
    turned = np.flip(gas, 1 + axis).copy()
    turned[1 + axis] *= -1.0
    return turned


def asymmetry(gas: Array) -> float:
    """Mean difference of the density from that with x for y."""
    return float(np.abs(exchanged(gas) - gas)[0].mean())


@pytest.mark.parametrize("make", [lie, alternating])
def test_exchanging_axes_and_sweeps_exchanges_the_answer_to_the_bit(make: Constructor) -> None:
    assert np.array_equal(exchanged(blast(make, (0, 1))), blast(make, (1, 0)))


@pytest.mark.parametrize("axis", [0, 1])
def test_mirror_symmetry_to_round_off(axis: int) -> None:
    gas = blast(alternating, (0, 1))
    # Left and right waves of the Riemann solver are different expressions, so each of some 50 sweeps rounds
    # the two halves differently, numbers up to 25 by 3e-15. Measured: 1e-14.
    assert mirrored(gas, axis) == pytest.approx(gas, rel=0.0, abs=1e-12)


def test_symmetry_of_the_axes_is_of_the_order_of_the_splitting() -> None:
    """From a state that is symmetric in x and y, with time steps that differ by a factor of eight."""
    steps = (0.004, 0.0005)
    orders = {}
    for make in (lie, alternating):
        coarse, fine = (asymmetry(blast(make, (0, 1), sharp=False, dt=dt)) for dt in steps)
        orders[make] = np.log2(coarse / fine) / 3.0
    # The limiter's switches disturb the second order by 0.3 between two step sizes; over three, measured 2.08.
    assert orders[lie] == pytest.approx(1.0, abs=0.1)
    assert orders[alternating] == pytest.approx(2.0, abs=0.2)


def test_alternating_sweeps_leave_a_blast_nearly_symmetric() -> None:
    one_way, alternate = (asymmetry(blast(make, (0, 1))) for make in (lie, alternating))
    assert 0.0 < alternate < 0.01  # parts of the density ahead; measured 0.004
    assert alternate < 0.5 * one_way  # measured: a sixth


def layers(dimensions: int, axis: int, *, radiating: bool = False) -> Array:
    """Hot layers across one axis on a mesh of so many; the result along that axis, as if it were x.

    Four zones along the other axes, all of them swept in the usual order.
    """
    network = load_network("alpha13")
    gas = gas_of(network, Stellar(radiation=False))
    how = transport(tolerance=1e-11)
    shape = tuple(48 if a == axis else 4 for a in range(dimensions))
    edges = tuple(WALLS if a == axis else PERIODIC for a in range(dimensions))
    steps: list[Item] = [sweep(gas, a) for a in range(dimensions)]
    steps += transport_items(gas, how, dimensions) if radiating else []
    problem = Problem(
        name="layers",
        title="Layers",
        mesh=Mesh(shape, (2e4,) * dimensions, edges),
        fields=(gas_field(gas), *transport_fields(how, dimensions)),
        splitting=lie([*steps, burn(gas, Burning())], [time_step(gas, cfl=0.4)]),
        initial=Layers(gas, GROUPS, axis),
        cycles=8,
    )
    found = np.moveaxis(run(problem, tuple(min(n, 20) for n in shape))["gas"], 1 + axis, 1)
    momenta = [1 + (axis + k) % 3 for k in range(3)]
    return found[[0, *momenta, *range(4, found.shape[0])]]


EMBEDDINGS = [(2, 0), (2, 1), (3, 0), (3, 1), (3, 2)]


@pytest.mark.parametrize(("dimensions", "axis"), EMBEDDINGS)
def test_gas_and_burning_give_the_same_bits_in_more_dimensions(dimensions: int, axis: int) -> None:
    line, solid = layers(1, 0), layers(dimensions, axis)
    assert np.ptp(line[0]) > 1e5  # something happens: densities between 3e5 and 1e6 move
    assert np.array_equal(solid, np.broadcast_to(line, solid.shape))


@pytest.mark.parametrize(("dimensions", "axis"), EMBEDDINGS)
def test_radiation_gives_the_same_numbers_in_more_dimensions(dimensions: int, axis: int) -> None:
    """Exchange across the layers adds and takes the same, so only rounding and the unfinished solve differ."""
    line, solid = layers(1, 0, radiating=True), layers(dimensions, axis, radiating=True)
    # A correction below 1e-11 leaves an error of perhaps ten times that in each of eight cycles, of the largest
    # value of each component; burning magnifies it in places. Measured: 1.2e-10.
    scale = np.abs(line).max(axis=(1, 2, 3))
    assert (np.abs(solid - line).max(axis=(1, 2, 3)) <= 1e-9 * scale).all()

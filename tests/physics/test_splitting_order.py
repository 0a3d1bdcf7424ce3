"""Order of the splittings in time: exact sub-flows, so that all that is left is the error of the splitting.

Two species drift with speeds a, diffuse with D and react with the matrix K:
u_t = -a u_x + D u_xx + K u. One Fourier mode exp(i k x), k = 2 pi, stays one; each operator's flow on its
amplitudes is a matrix exponential. The steps are a user's own, in plain numpy.

All figures were computed with matrix exponentials, not published as such; that Strang's splitting loses its second
order where a sub-flow is stiff is described by Sportisse (2000, J. Comput. Phys. 161, 140; from memory).
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cache

import numpy as np
import pytest
import scipy.linalg

from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Mesh
from breakstep.mesh.tiling import Tile
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Reduction
from breakstep.steps.splitting import Item, Splitting, alternating, lie, strang
from breakstep.steps.step import Call, Read, Step
from breakstep.steps.timestep import time_is_up, time_step
from tests.physics.problems import PERIODIC, Array, run

pytestmark = pytest.mark.physics

Complexes = np.ndarray[tuple[int, ...], np.dtype[np.complex128]]
Constructor = Callable[[Sequence[Item], Sequence[Reduction]], Splitting]
Matrix = tuple[tuple[complex, ...], ...]

K_MILD: Matrix = ((-1.0, 2.0), (1.0, -3.0))
WAVENUMBER = 2.0 * np.pi
SPEEDS, DIFFUSIVITIES = (1.0, 0.25), (0.01, 0.002)


def stiff(eps: float) -> Matrix:
    """Reactions that settle within eps / 2."""
    return ((-1.0 / eps, 1.0 / eps), (1.0 / eps, -1.0 / eps))


def diagonal(first: complex, second: complex) -> Matrix:
    return ((first, 0.0), (0.0, second))


@cache
def exponential(matrix: Matrix, time: float) -> Complexes:
    """exp(time matrix); kept, for nearly all cycles of a run take the same step."""
    return np.asarray(scipy.linalg.expm(time * np.array(matrix)), dtype=np.complex128)


@dataclass(frozen=True)
class Flow:
    """The exact flow of y' = matrix y; a zone holds both real parts, then both imaginary parts."""

    matrix: Matrix

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        mode = arrays["mode"]
        new = np.einsum("ij,jxyz->ixyz", exponential(self.matrix, call.dt), mode[:2] + 1j * mode[2:])
        return {"mode": np.concatenate([new.real, new.imag])}


def start(tile: Tile, mesh: Mesh) -> Mapping[str, Array]:
    """Amplitudes 1 and 1/2."""
    values = np.array([1.0, 0.5, 0.0, 0.0]).reshape(4, 1, 1, 1)
    return {"mode": np.broadcast_to(values, (4, *tile.shape)).copy()}


@dataclass(frozen=True)
class Operators:
    """Drift A, diffusion D and reactions R as steps."""

    reactions: Matrix
    speeds: tuple[float, float] = SPEEDS
    diffusivities: tuple[float, float] = DIFFUSIVITIES

    def matrices(self) -> dict[str, Matrix]:
        a, d, k = self.speeds, self.diffusivities, WAVENUMBER
        drift = diagonal(-1j * k * a[0], -1j * k * a[1])
        return {"A": drift, "D": diagonal(-k * k * d[0], -k * k * d[1]), "R": self.reactions}

    def steps(self, order: str) -> list[Item]:
        matrices = self.matrices()
        reads, writes = (Read("mode"),), ("mode",)
        return [Step(f"step_{name}", Flow(matrices[name]), reads, writes, ("dt",)) for name in order]

    def exact(self) -> Complexes:
        whole = np.sum([np.array(matrix) for matrix in self.matrices().values()], axis=0)
        return np.asarray(scipy.linalg.expm(whole) @ np.array([1.0, 0.5]))


def error(operators: Operators, splitting: Splitting) -> float:
    """Largest absolute error of both amplitudes at t = 1."""
    problem = Problem(
        name="mode",
        title="One Fourier mode",
        mesh=Mesh((1,), (1.0,), (PERIODIC,)),
        fields=(Field("mode", ("re_0", "re_1", "im_0", "im_1")),),
        splitting=splitting,
        initial=start,
        cycles=10_000,
        ended=time_is_up,
    )
    mode = run(problem)["mode"][:, 0, 0, 0]
    return float(np.abs(mode[:2] + 1j * mode[2:] - operators.exact()).max())


def errors(operators: Operators, make: Constructor, order: str, cycles: Sequence[int]) -> list[float]:
    """Errors with so many equal time steps."""
    steps = operators.steps(order)
    clocks = (time_step(None, cfl=1.0, maximum=1.0 / n, end_time=1.0) for n in cycles)
    return [error(operators, make(steps, [clock])) for clock in clocks]


def orders(found: Sequence[float]) -> list[float]:
    """Observed order between runs with n and 2 n cycles."""
    return [float(np.log2(a / b)) for a, b in itertools.pairwise(found)]


# Errors with 10, 20, 40, 80 and 160 cycles, computed with the same splittings written out by hand.
MILD = {
    "Lie, A D R": (
        lie,
        "ADR",
        [0.018007538204361365, 0.008760527902990265, 0.004334085823406511, 0.002157427201359521, 0.001076555895498021],
    ),
    "Lie, R D A": (
        lie,
        "RDA",
        [0.017838746400582296, 0.00875603372467863, 0.004337821002405853, 0.0021589748614782934, 0.0010770198631848648],
    ),
    "Strang, R/2 D/2 A D/2 R/2": (
        strang,
        "RDA",
        [
            0.0041441073609833085,
            0.0010383889897344872,
            0.000259746139467919,
            6.494586022650629e-05,
            1.6237048199112562e-05,
        ],
    ),
    "Strang, A/2 D/2 R D/2 A/2": (
        strang,
        "ADR",
        [
            0.0019312637998811074,
            0.0004842419462710777,
            0.00012114998564864642,
            3.0293095998231916e-05,
            7.573624065773803e-06,
        ],
    ),
}
ORDER = {lie: 1.0, strang: 2.0}


def test_the_exact_amplitudes_are_the_reference_ones() -> None:
    expected = [0.29930705055257306 + 0.1723840597022826j, -0.02183327778471745 + 0.06088569422055901j]
    assert Operators(K_MILD).exact() == pytest.approx(expected, rel=1e-12)  # one matrix exponential, rounded


@pytest.mark.parametrize("name", MILD)
def test_errors_and_order(name: str) -> None:
    make, order, expected = MILD[name]
    found = errors(Operators(K_MILD), make, order, (10, 20, 40, 80, 160))
    # The smallest error is 8e-6 and carries the rounding of 480 matrix products, 1e-13: 1e-8 relative.
    assert found == pytest.approx(expected, rel=1e-6)
    assert orders(found) == pytest.approx([ORDER[make]] * 4, abs=0.1)  # the first step sizes are not yet small


def test_alternating_orders_are_strang_splitting_over_pairs_of_cycles() -> None:
    """A D R R D A with steps h is A/2 D/2 R D/2 A/2 with a step 2 h, for flows that are exact."""
    found = errors(Operators(K_MILD), alternating, "ADR", (20, 40, 80, 160, 320))
    assert found == pytest.approx(MILD["Strang, A/2 D/2 R D/2 A/2"][2], rel=1e-6)  # rounding, as above
    assert orders(found) == pytest.approx([2.0] * 4, abs=0.1)


def test_a_last_cycle_without_its_partner_costs_accuracy_but_not_the_order() -> None:
    """Its own error is of second order in the step, and made once."""
    even = errors(Operators(K_MILD), alternating, "ADR", (40, 80, 160))
    odd = errors(Operators(K_MILD), alternating, "ADR", (41, 81, 161))
    assert all(more > less for more, less in zip(odd, even, strict=True))
    assert orders(odd) == pytest.approx([2.0] * 2, abs=0.1)


@pytest.mark.parametrize("make", [lie, strang, alternating])
def test_operators_that_commute_leave_no_error(make: Constructor) -> None:
    """Equal speeds and diffusivities are multiples of the identity."""
    alike = Operators(K_MILD, speeds=(1.0, 1.0), diffusivities=(0.01, 0.01))
    assert errors(alike, make, "ADR", (10,))[0] < 1e-13  # 30 matrix products of numbers below 1, rounded


# Errors with 20, 40, 80, 160 and 320 cycles where the reactions are stiff, computed likewise.
STIFF = {
    "Lie, A D R": (
        lie,
        "ADR",
        [0.07835479548686014, 0.04058228416096636, 0.02066402873482819, 0.010427662564539222, 0.005237572434784289],
    ),
    "Lie, R D A": (
        lie,
        "RDA",
        [0.10206964635560743, 0.053312911683291525, 0.02726618186895951, 0.013790432388439466, 0.006934667027421635],
    ),
    "Strang, R outside": (
        strang,
        "RDA",
        [0.077225686730539, 0.03988193584337891, 0.020276187131845928, 0.010223776330357414, 0.005133033043513142],
    ),
    "Strang, R inside": (
        strang,
        "ADR",
        [0.08347056493467586, 0.04376570954361844, 0.022426511963581912, 0.011353448621537338, 0.005711728972050204],
    ),
}
EASING = {
    "Strang, R outside": (
        "RDA",
        [0.06209663330319252, 0.025105912588926776, 0.007977468817506463, 0.0021598488715846007, 0.0005518184358282313],
    ),
    "Strang, R inside": (
        "ADR",
        [0.06544710013789663, 0.026299391030157195, 0.008290183096596586, 0.0022375736176499677, 0.0005711793328567259],
    ),
}
STIFF_CYCLES = (20, 40, 80, 160, 320)


@pytest.mark.parametrize("name", STIFF)
def test_strang_falls_to_first_order_where_reactions_are_stiff(name: str) -> None:
    """A caution: with time steps far above the reactions' own time, Strang is no better than Lie."""
    make, order, expected = STIFF[name]
    found = errors(Operators(stiff(1e-6)), make, order, STIFF_CYCLES)
    assert found == pytest.approx(expected, rel=1e-6)  # the exponential of 1e5 squares some 17 times: 1e-11
    # The order approaches 1 from below and differs by up to 0.07 at these step sizes.
    assert orders(found) == pytest.approx([1.0] * 4, abs=0.1)


@pytest.mark.parametrize("name", EASING)
def test_strang_regains_its_order_once_steps_resolve_the_reactions(name: str) -> None:
    order, expected = EASING[name]
    found = errors(Operators(stiff(1e-2)), strang, order, STIFF_CYCLES)
    assert found == pytest.approx(expected, rel=1e-6)
    assert orders(found)[0] == pytest.approx(1.3, abs=0.1)  # steps of 0.05 and 0.025: above eps
    assert orders(found)[-1] == pytest.approx(2.0, abs=0.1)  # steps of 0.006 and 0.003: below it

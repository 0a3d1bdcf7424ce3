"""Implicit radiation transport against published solutions and exact discrete ones."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.linalg import expm

from breakstep.kernels.transport import solve as transport
from breakstep.kernels.transport.assembly import face_row
from tests.physics import transport_tables as tables
from tests.unit.kernels.transport_driver import Mesh, assemble, linear_steps, solve

pytestmark = pytest.mark.physics

Floats = NDArray[np.float64]


def half_space(zones: int, dx: float) -> tuple[Mesh, Floats]:
    """A mesh from the plane of symmetry outwards, and the zone centres."""
    return Mesh((zones, 1, 1), (0,), spacing=(dx, 1.0, 1.0)), (np.arange(zones) + 0.5) * dx


def at_positions(centres: Floats, field: Floats, x: list[float]) -> Floats:
    """Interpolate linearly, the field being even in x."""
    return np.interp(x, np.concatenate([[-centres[0]], centres]), np.concatenate([[field[0]], field]))


def misfit(ours: Floats, published: Floats, absolute: float) -> float:
    """Largest error over its allowance, 1 % or ``absolute``, whichever is larger."""
    allowed = np.maximum(0.01 * np.abs(published), absolute)
    return float(np.nanmax(np.abs(ours - published) / allowed))


# The allowances below (1 %, and absolutely 2e-3 and 1e-3) are for the discretization: zones of 1/20 mean free
# path and steps of about 2 % of the time make errors of up to half of that.


def test_su_olson_diffusion() -> None:
    """Su & Olson (1997), Ann. Nucl. Energy 24, 1035, tables of the diffusion solution."""
    mesh, x = half_space(zones=300, dx=0.05)
    ones = np.ones((1, *mesh.shape))
    inside = np.where(x < 0.5, 1.0, 0.0).reshape(1, -1, 1, 1)

    def fields(_: Floats, theta: Floats, start: float, dt: float) -> transport.Material:
        source = inside * (dt if start < 10.0 - 1e-9 else 0.0)
        return transport.Material(ones, ones, ones, theta, ones, 0.0 * ones, source)

    u = v = 0.0 * ones
    marks = [0.0, *tables.SU_OLSON_TAU]
    for column, (start, stop) in enumerate(itertools.pairwise(marks)):
        times = start + (stop - start) * np.linspace(0.0, 1.0, 61) ** 1.5
        u, v = linear_steps(mesh, u, v, times, fields, omega=1.7, tolerance=1e-9)
        for ours, table in ((u, tables.SU_OLSON_U), (v, tables.SU_OLSON_V)):
            published = np.array(table)[:, column]
            assert misfit(at_positions(x, ours.ravel(), tables.SU_OLSON_X), published, 2e-3) < 1.0


def test_picket_fence() -> None:
    """Su & Olson (1999), JQSRT 62, 279, the two-group picket fence; all three fields."""
    mesh, x = half_space(zones=400, dx=0.05)
    sigma = np.array([2.0 / 11.0, 20.0 / 11.0]).reshape(2, 1, 1, 1) * np.ones((1, *mesh.shape))
    halves = np.full((2, *mesh.shape), 0.5)
    ones = np.ones((1, *mesh.shape))
    inside = np.where(x < 0.5, 0.5, 0.0).reshape(1, -1, 1, 1) * np.ones((2, 1, 1, 1))

    def fields(_: Floats, theta: Floats, __: float, dt: float) -> transport.Material:
        return transport.Material(sigma, sigma, halves, theta, ones, 0.0 * ones, inside * dt)

    u, v = 0.0 * halves, 0.0 * ones
    marks = [0.0, *tables.FENCE_TAU]
    for column, (start, stop) in enumerate(itertools.pairwise(marks)):
        times = np.linspace(start, stop, 61)
        u, v = linear_steps(mesh, u, v, times, fields, omega=1.7, tolerance=1e-9)
        for ours, table in ((u[0], tables.FENCE_U1), (u[1], tables.FENCE_U2), (v, tables.FENCE_V)):
            published = np.array(table)[:, column]
            assert misfit(at_positions(x, ours.ravel(), tables.FENCE_X), published, 1e-3) < 1.0


MODE_D = np.array([1.0, 0.3, 0.05])
MODE_A = np.array([[0.5, -0.1, 0.0], [-0.3, 0.4, -0.2], [-0.1, -0.2, 0.6]])
MODE_START = np.array([1.0, 0.0, 0.5])
MODE_TIME = 0.05


def mode_amplitudes(steps: int, zones: int = 16) -> Floats:
    """March u_t = D u_xx - A u from one cosine over the periodic unit interval; the amplitudes after."""
    mesh = Mesh((zones, 1, 1), (0,), spacing=(1.0 / zones, 1.0, 1.0), boundary="periodic")
    cosine = np.cos(2.0 * np.pi * (np.arange(zones) + 0.5) / zones).reshape(1, -1, 1, 1)
    size = (3, *mesh.shape)
    zero, one = np.zeros((1, *mesh.shape)), np.ones((1, *mesh.shape))
    material = transport.Material(
        total=np.broadcast_to((1.0 / (3.0 * MODE_D)).reshape(3, 1, 1, 1), size),
        absorption=np.broadcast_to(MODE_A.sum(axis=0).reshape(3, 1, 1, 1), size),
        emission=np.zeros(size),
        theta=zero,
        beta=zero,
        scattering=one,
        deposit=np.zeros(size),
    )
    redistribution = -(MODE_A - np.diag(np.diag(MODE_A)))
    u = MODE_START.reshape(3, 1, 1, 1) * cosine
    for _ in range(steps):
        assemblies = assemble(
            mesh, u, material, redistribution, light_path=MODE_TIME / steps, limited=False, balanced=False
        )
        u = solve(mesh, u, assemblies, passes=2, omega=1.1, tolerance=1e-15, max_calls=400).radiation
    return np.asarray(np.sum(u * cosine, axis=(1, 2, 3)) / np.sum(cosine**2))


def mode_rate(zones: int | None = 16) -> Floats:
    """The matrix of the mode's decay, for the three-point Laplacian or (None) the exact one."""
    k2 = (2.0 * np.pi) ** 2 if zones is None else (2.0 * zones * np.sin(np.pi / zones)) ** 2
    return np.diag(MODE_D * k2) + MODE_A


def test_three_group_mode_is_the_exact_discrete_solution() -> None:
    """One Fourier mode: space differences and backward Euler are known in closed form."""
    # the continuous solution, computed independently by a matrix exponential
    continuous = [0.13549535183102485, 0.007895963369955357, 0.441660309786073]
    assert expm(-mode_rate(None) * MODE_TIME) @ MODE_START == pytest.approx(continuous, rel=1e-12)
    steps = 5
    euler = np.linalg.inv(np.eye(3) + mode_rate() * (MODE_TIME / steps))
    expected = np.linalg.matrix_power(euler, steps) @ MODE_START
    # solved to a correction of 1e-15; iteration contracts by about 2 a call, and there are 5 steps
    assert mode_amplitudes(steps) == pytest.approx(expected, abs=1e-13)


def test_first_order_in_time() -> None:
    exact = expm(-mode_rate() * MODE_TIME) @ MODE_START
    errors = [np.abs(mode_amplitudes(steps) - exact).max() for steps in (10, 20, 40)]
    orders = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    # the second-order term is D k^2 dt / 2 < 0.1 of the first at ten steps
    assert orders == pytest.approx(1.0, abs=0.1)


def coupling_limiter(r: float) -> float:
    """The limiter that a face applies when abs(grad E) / (chi E) is ``r``."""
    # energies 1 and 3: jump over mean is 1; zones of width 1 and opacity 1 / r
    faces = np.empty(1)
    total = np.full(2, 1.0 / r)
    face_row(np.array([1.0, 3.0]), total, 0, 1, 1.0, 1.0, 1.0, faces)
    return float(faces[0] / r)


LIMITER = {
    0.01: 0.3333278055090297,
    0.1: 0.33280507131537246,
    0.5: 0.3225806451612903,
    1.0: 0.3,
    2.0: 0.25,
    3.0: 0.20833333333333334,
    5.0: 0.15217391304347827,
    10.0: 0.08823529411764706,
    30.0: 0.0321285140562249,
    100.0: 0.009897147292839123,
    1000.0: 0.0009989970149729911,
}
"""(2 + R) / (6 + 3 R + R^2): Levermore & Pomraning (1981), ApJ 248, 321 (formula from memory, computed)."""


@pytest.mark.parametrize("r", list(LIMITER))
def test_flux_limiter(r: float) -> None:
    assert coupling_limiter(r) == pytest.approx(LIMITER[r], rel=1e-12)
    # their exact form (coth R - 1/R) / R; the rational one is documented as within 7.2 % of it
    exact = (1.0 / np.tanh(r) - 1.0 / r) / r
    assert coupling_limiter(r) == pytest.approx(exact, rel=0.072)


def test_flux_is_never_faster_than_light() -> None:
    """An empty zone beside a bright one, hardly any opacity: the flux is c E / 2 by upwinding, not more."""
    faces = np.empty(1)
    face_row(np.array([0.0, 1.0]), np.full(2, 1e-9), 0, 1, 1.0, 0.1, 1.0, faces)
    flow = faces[0] * 0.1 / 1.0  # energy through the face over c dt
    assert flow == pytest.approx(0.5, rel=1e-6)


def test_no_energy_no_flux_no_nan() -> None:
    faces = np.empty(1)
    face_row(np.zeros(2), np.full(2, 2.0), 0, 1, 1.0, 1.0, 1.0, faces)
    assert faces[0] == pytest.approx(1.0 / 6.0, rel=1e-14)

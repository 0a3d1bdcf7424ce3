"""Implicit radiation transport: the algebra, the tilings, the balance."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
import scipy.sparse as sp
import scipy.sparse.linalg as spla
from numpy.typing import NDArray

from breakstep.errors import KernelError
from breakstep.kernels.constants import A_RAD, C_LIGHT, GAS_CONSTANT
from breakstep.kernels.eos import GammaLaw
from breakstep.kernels.transport import solve as transport
from breakstep.kernels.transport.matter import Matter, describe_matter
from breakstep.kernels.transport.opacity import PhotonGroups, PowerLawOpacity, planck_fractions
from tests.unit.kernels.transport_driver import Mesh, assemble, gain, protected, solve

Floats = NDArray[np.float64]
EPS = float(np.finfo(float).eps)

MESHES = {
    "1-D": Mesh((41, 1, 1), (0,), spacing=(0.7, 1.0, 1.0)),
    "2-D": Mesh((9, 7, 1), (0, 1), spacing=(0.7, 1.1, 1.0)),
    "3-D": Mesh((5, 4, 3), (0, 1, 2), spacing=(0.7, 1.1, 0.9)),
}


def random_material(mesh: Mesh, groups: int, seed: int) -> transport.Material:
    """Opacities over two decades, any emission, any heat capacity."""
    rng = np.random.default_rng(seed)
    size = (groups, *mesh.shape)
    absorption = 10.0 ** rng.uniform(-1.0, 1.0, size)
    emission = rng.random(size)
    return transport.Material(
        total=absorption + 0.3,
        absorption=absorption,
        emission=emission / emission.sum(axis=0),
        theta=10.0 ** rng.uniform(-2.0, 0.0, (1, *mesh.shape)),
        beta=10.0 ** rng.uniform(-2.0, 2.0, (1, *mesh.shape)),
        scattering=rng.random((1, *mesh.shape)),
        deposit=0.1 * rng.random(size),
    )


def random_radiation(mesh: Mesh, groups: int, seed: int) -> Floats:
    return np.asarray(10.0 ** np.random.default_rng(seed).uniform(-2.0, 0.0, (groups, *mesh.shape)))


def random_redistribution(groups: int, seed: int) -> Floats:
    return np.random.default_rng(seed).random((groups, groups)) / groups


def neighbours(mesh: Mesh) -> list[tuple[int, int, float]]:
    """Pairs of flat zone numbers that share a face, reflecting boundary, and the width across it."""
    number = np.arange(math.prod(mesh.shape)).reshape(mesh.shape)
    pairs = []
    for axis in mesh.axes:
        low = np.take(number, range(mesh.shape[axis] - 1), axis).ravel()
        high = np.take(number, range(1, mesh.shape[axis]), axis).ravel()
        pairs += [(int(a), int(b), mesh.spacing[axis]) for a, b in zip(low, high, strict=True)]
    return pairs


def limiter(r: float) -> float:
    """Levermore & Pomraning (1981), rational form."""
    return (2.0 + r) / (6.0 + 3.0 * r + r * r)


def reference_system(
    mesh: Mesh, radiation: Floats, m: transport.Material, redistribution: Floats, path: float, balanced: bool
) -> tuple[sp.csc_matrix, Floats]:
    """The same equations written down zone by zone from the module's documentation; unknowns zone-major."""
    groups = radiation.shape[0]
    n = math.prod(mesh.shape)
    e, total, absorption, emission, deposit = (
        field.reshape(groups, n) for field in (radiation, m.total, m.absorption, m.emission, m.deposit)
    )
    theta, beta, sigma = (field.reshape(n) for field in (m.theta, m.beta, m.scattering))
    matrix = sp.lil_matrix((n * groups, n * groups))
    rhs = np.zeros((n, groups))
    for z in range(n):
        k = path * absorption[:, z]
        b = emission[:, z]
        f = 1.0 / (1.0 + beta[z] * np.sum(k * b))
        block = np.diag(1.0 + k) - np.outer(k * b, k) * (f * beta[z])
        for to, source in itertools.permutations(range(groups), 2):
            rate = path * sigma[z] * redistribution[to, source]
            if balanced:
                rate *= 2.0 * b[to] / (b[to] + b[source])
            block[to, source] -= rate
            block[source, source] += rate
        here = slice(z * groups, (z + 1) * groups)
        matrix[here, here] = block
        rhs[z] = e[:, z] + deposit[:, z] + k * b * f * theta[z]
    for a, c, dx in neighbours(mesh):
        for g in range(groups):
            chi = (total[g, a] + total[g, c]) / 2.0
            r = abs(e[g, c] - e[g, a]) / dx / (chi * (e[g, a] + e[g, c]) / 2.0)
            coupling = path * limiter(r) / chi / dx**2
            i, j = a * groups + g, c * groups + g
            matrix[i, i] += coupling
            matrix[j, j] += coupling
            matrix[i, j] -= coupling
            matrix[j, i] -= coupling
    return matrix.tocsc(), rhs.reshape(-1)


@pytest.mark.parametrize("name", list(MESHES))
@pytest.mark.parametrize("balanced", [False, True])
def test_equals_a_sparse_direct_solve(name: str, balanced: bool) -> None:
    mesh, groups, path = MESHES[name], 16, 1.5
    material = random_material(mesh, groups, seed=1)
    radiation = random_radiation(mesh, groups, seed=2)
    redistribution = random_redistribution(groups, seed=3)
    matrix, rhs = reference_system(mesh, radiation, material, redistribution, path, balanced)
    expected = spla.spsolve(matrix, rhs)
    assemblies = assemble(mesh, radiation, material, redistribution, light_path=path, balanced=balanced)
    solution = solve(mesh, radiation, assemblies, omega=1.2, tolerance=1e-13)
    ours = solution.radiation.reshape(groups, -1).T.reshape(-1)
    # All column sums of the matrix are at least 1, so errors sum to at most what residuals sum to; the
    # residual itself is only known to the rounding of its own terms.
    assert np.min(matrix.sum(axis=0)) >= 1.0 - 1e-12
    residual = np.abs(rhs - matrix @ ours).sum()
    rounding = 10.0 * EPS * (np.abs(matrix) @ np.abs(ours)).sum()
    assert np.abs(ours - expected).sum() <= residual + rounding
    # A last correction of 1e-13 leaves a residual of at most the diagonal block (norm below 1e4) times it.
    assert residual <= 1e4 * 1e-13 * np.abs(ours).sum()


def test_energy_stays_positive() -> None:
    """Block Gauss-Seidel on an M-matrix with a non-negative right-hand side never leaves E >= 0."""
    mesh = MESHES["2-D"]
    material = random_material(mesh, 16, seed=5)
    radiation = random_radiation(mesh, 16, seed=6) * (np.random.default_rng(7).random((16, *mesh.shape)) > 0.7)
    assemblies = assemble(mesh, radiation, material, random_redistribution(16, 8), light_path=3.0)
    for calls in (1, 2, 50):
        assert solve(mesh, radiation, assemblies, passes=1, max_calls=calls).radiation.min() >= 0.0


def test_over_relaxation_needs_fewer_passes() -> None:
    mesh = Mesh((24, 24, 1), (0, 1))
    material = random_material(mesh, 4, seed=9)._replace(beta=np.full((1, *mesh.shape), 100.0))
    radiation = random_radiation(mesh, 4, seed=10)
    assemblies = assemble(mesh, radiation, material, np.zeros((4, 4)), light_path=30.0)
    calls = {w: solve(mesh, radiation, assemblies, omega=w, tolerance=1e-10).calls for w in (1.0, 1.6)}
    # Block Gauss-Seidel converges like a diffusion; the factor is several at this diffusion number.
    assert calls[1.6] < 0.5 * calls[1.0]


# ---------------------------------------------------------------------------------------------- gas


GROUPS = PhotonGroups(count=16)
GAS = {
    "1-D": Mesh((37, 1, 1), (0,), spacing=(1e3, 1e3, 1e3), boundary="periodic"),
    "2-D": Mesh((12, 11, 1), (0, 1), spacing=(1e3, 2e3, 1e3), boundary="reflecting"),
    "3-D": Mesh((6, 5, 7), (0, 1, 2), spacing=(1e3, 2e3, 1.5e3), boundary="periodic"),
}
CUTS: dict[str, list[tuple[tuple[int, ...], ...]]] = {
    "1-D": [((), (), ()), ((17,), (), ()), ((1, 2, 20), (), ()), ((5, 6, 13, 30), (), ())],
    "2-D": [((), (), ()), ((6,), (4,), ()), ((1, 5), (), ()), ((3, 4, 9), (1, 2, 7), ())],
    "3-D": [((), (), ()), ((3,), (2,), (4,)), ((1,), (), (1, 2, 6)), ((2, 5), (1, 4), ())],
}
DT = 3e-8  # c dt = 900 cm, about a zone


def matter() -> Matter:
    species = np.array([4.0, 12.0]), np.array([2.0, 6.0])
    return describe_matter(GammaLaw(5.0 / 3.0, 1.3).vector, *species, GROUPS, PowerLawOpacity())


def hot_spot(mesh: Mesh, seed: int = 11) -> tuple[Floats, Floats]:
    """Invented: warm moving gas with random densities, and a hot corner full of radiation."""
    rng = np.random.default_rng(seed)
    density = 10.0 ** rng.uniform(0.0, 1.0, mesh.shape)
    temperature = 3e7 * 10.0 ** rng.uniform(0.0, 0.3, mesh.shape)
    temperature[:3, :3, :3] = 1.5e8
    gas = np.zeros((7, *mesh.shape))
    gas[0] = density
    gas[1:4] = density * 1e7 * rng.standard_normal((3, *mesh.shape))
    gas[4] = 1.5 * GAS_CONSTANT / 1.3 * density * temperature + 0.5 * np.sum(gas[1:4] ** 2, axis=0) / density
    gas[5], gas[6] = 0.3 * density, 0.7 * density
    fractions = np.empty((GROUPS.count, temperature.size))
    planck_fractions(temperature.ravel(), GROUPS.edges, fractions)
    radiation = 0.9 * fractions.reshape(-1, *mesh.shape) * A_RAD * temperature**4
    return radiation, gas


def assemble_gas(mesh: Mesh, radiation: Floats, gas: Floats, dt: float = DT) -> list[transport.Assembly]:
    return [
        transport.assemble_gas(e, g, matter(), dt=dt, spacing=mesh.spacing, axes=mesh.axes)
        for e, g in zip(mesh.halos(radiation), mesh.halos(gas), strict=True)
    ]


def step(mesh: Mesh, passes: int, tolerance: float, max_calls: int = 5000) -> tuple[Floats, Floats]:
    """One transport step of the hot spot; the new radiation and gas."""
    old, gas = hot_spot(mesh)
    assemblies = assemble_gas(mesh, old, gas)
    assert all(a.bad_zone == -1 for a in assemblies)
    new = solve(mesh, old, assemblies, passes=passes, omega=1.2, tolerance=tolerance, max_calls=max_calls).radiation
    parts = []
    for halo, before, assembly, piece in zip(mesh.halos(new), mesh.cut(old), assemblies, mesh.cut(gas), strict=True):
        part, bad = transport.exchange(halo, before, assembly.bands, piece, axes=mesh.axes)
        assert bad == -1
        parts.append(part)
    return new, mesh.join(parts)


def tiled(name: str, cuts: tuple[tuple[int, ...], ...]) -> Mesh:
    base = GAS[name]
    return Mesh(base.shape, base.axes, base.spacing, base.boundary, cuts)


@pytest.mark.parametrize("name", list(GAS))
def test_one_pass_between_exchanges_gives_the_same_bits_for_every_tiling(name: str) -> None:
    results = [step(tiled(name, cuts), passes=1, tolerance=1e-10) for cuts in CUTS[name]]
    old, gas = hot_spot(GAS[name])
    assert not np.array_equal(results[0][0], old)
    assert not np.array_equal(results[0][1], gas)
    for radiation, new_gas in results[1:]:
        assert np.array_equal(radiation, results[0][0])
        assert np.array_equal(new_gas, results[0][1])


@pytest.mark.parametrize("name", list(GAS))
def test_several_passes_between_exchanges_agree_to_the_tolerance(name: str) -> None:
    results = [step(tiled(name, cuts), passes=6, tolerance=1e-12) for cuts in CUTS[name]]
    reference = results[0][0]
    for radiation, _ in results[1:]:
        # The contraction per call is far from 1 here, so errors are of the order of the last correction.
        assert np.abs(radiation - reference).max() <= 1e-10 * reference.max()


@pytest.mark.parametrize("name", list(GAS))
@pytest.mark.parametrize("max_calls", [1, 2, 5000])
def test_energy_is_conserved_however_well_the_system_is_solved(name: str, max_calls: int) -> None:
    mesh = tiled(name, CUTS[name][3])
    old, gas = hot_spot(mesh)
    new, new_gas = step(mesh, passes=1, tolerance=1e-12, max_calls=max_calls)
    before = math.fsum(old.ravel()) + math.fsum(gas[4].ravel())
    after = math.fsum(new.ravel()) + math.fsum(new_gas[4].ravel())
    moved = abs(math.fsum(new.ravel()) - math.fsum(old.ravel()))
    # Every zone adds about 16 (2 + 2 * 3 * 2) terms; each rounding is at most eps of a partial sum, which
    # is bounded by the energies and flows of the zone. 100 eps of the total leaves a factor of ten or so.
    assert abs(after - before) <= 100.0 * EPS * before
    assert moved > 1e6 * abs(after - before), "nothing was exchanged, so nothing was tested"


def test_deposit_is_accounted_for() -> None:
    mesh = MESHES["2-D"]
    material = random_material(mesh, 5, seed=12)
    old = random_radiation(mesh, 5, seed=13)
    assemblies = assemble(mesh, old, material, random_redistribution(5, 14), light_path=2.0)
    new = solve(mesh, old, assemblies, max_calls=3).radiation
    received = gain(mesh, new, old, assemblies, material.deposit)
    balance = math.fsum(received.ravel()) + math.fsum(new.ravel()) - math.fsum(old.ravel())
    given = math.fsum(material.deposit.ravel())
    assert balance == pytest.approx(given, rel=100.0 * EPS * (1.0 + old.sum() / given))


def test_converged_gain_is_absorption_less_emission() -> None:
    mesh, path = MESHES["2-D"], 2.0
    m = random_material(mesh, 5, seed=15)
    old = random_radiation(mesh, 5, seed=16)
    assemblies = assemble(mesh, old, m, random_redistribution(5, 17), light_path=path)
    new = solve(mesh, old, assemblies, omega=1.2, tolerance=1e-15).radiation
    received = gain(mesh, new, old, assemblies, m.deposit)[0]
    theta = m.theta[0] + m.beta[0] * received
    expected = path * np.sum(m.absorption * (new - m.emission * theta), axis=0)
    # iterated to the last bits; the difference is of terms up to `path * absorption * theta`, below 1e4
    assert np.abs(received - expected).max() <= 1e-11


def test_thermal_equilibrium_is_a_steady_state() -> None:
    """Black-body radiation at the gas temperature: no term moves energy, inelastic scattering included."""
    mesh = GAS["3-D"]
    gas = np.zeros((7, *mesh.shape))
    gas[0], gas[5], gas[6] = 10.0, 3.0, 7.0
    gas[4] = 1.5 * GAS_CONSTANT / 1.3 * 10.0 * 1e8
    fractions = np.empty((GROUPS.count, 1))
    planck_fractions(np.array([1e8]), GROUPS.edges, fractions)
    radiation = np.broadcast_to((fractions * A_RAD * 1e32).reshape(-1, 1, 1, 1), (16, *mesh.shape)).copy()
    dt = 1e-8
    strongest = C_LIGHT * dt * 10.0 * PowerLawOpacity().absorption_factors(GROUPS).max()
    assert strongest > 1e5
    assemblies = assemble_gas(mesh, radiation, gas, dt=dt)
    new = solve(mesh, radiation, assemblies, max_calls=20).radiation
    # Only rounding is at work; absorption and emission, `strongest` times larger than what they would
    # change, are each rounded.
    assert np.abs(new - radiation).max() <= EPS * strongest * radiation.max()


def test_gas_and_radiation_reach_equilibrium() -> None:
    """A closed box relaxes to black-body radiation at the temperature that energy conservation gives."""
    mesh = Mesh((2, 1, 1), (0,), spacing=(1e10, 1.0, 1.0), boundary="periodic")
    density, heat = 1e-2, 1.5 * GAS_CONSTANT / 1.3 * 1e-2
    gas = np.zeros((7, *mesh.shape))
    gas[0], gas[5], gas[6] = density, 0.3 * density, 0.7 * density
    gas[4] = heat * 2e7
    radiation = np.full((GROUPS.count, *mesh.shape), A_RAD * 4e7**4 / GROUPS.count)
    for dt in np.repeat(np.geomspace(1e-12, 1e-5, 8), 20):
        assemblies = assemble_gas(mesh, radiation, gas, dt=float(dt))
        new = solve(mesh, radiation, assemblies).radiation
        gas, bad = transport.exchange(mesh.halos(new)[0], radiation, assemblies[0].bands, gas, axes=(0,))
        assert bad == -1
        radiation = new
    temperature = float(gas[4, 0, 0, 0] / heat)
    energy = heat * 2e7 + A_RAD * 4e7**4
    root = np.roots([A_RAD, 0.0, 0.0, heat, -energy])
    expected = float(root[(abs(root.imag) < 1e-6 * abs(root)) & (root.real > 0.0)].real[0])
    fractions = np.empty((GROUPS.count, 1))
    planck_fractions(np.array([expected]), GROUPS.edges, fractions)
    # Steps much longer than the exchange time contract by orders of magnitude each: only rounding remains,
    # amplified by the ratio of total to gas energy (about 7) and the fourth power.
    assert temperature == pytest.approx(expected, rel=1e-9)
    assert radiation[:, 0, 0, 0] == pytest.approx(fractions[:, 0] * A_RAD * expected**4, rel=1e-7, abs=1.0)


# ------------------------------------------------------------------------------------- bad input


def test_nan_reaches_the_norm() -> None:
    mesh = GAS["2-D"]
    old, gas = hot_spot(mesh)
    assembly = assemble_gas(mesh, old, gas)[0]
    poisoned = np.array(mesh.halos(old)[0])
    poisoned[3, 0, 4, 0] = np.nan  # in the halo
    _, norm = transport.relax(
        protected(poisoned), assembly.system, axes=mesh.axes, first_colour=0, passes=2, origin_parity=0
    )
    assert not norm[0] <= 1e300
    assert not norm[1] <= 1e300


@pytest.mark.parametrize("component", [0, 4])
@pytest.mark.parametrize("value", [np.nan, -1.0])
def test_assembly_reports_a_zone_it_cannot_use(component: int, value: float) -> None:
    mesh = GAS["2-D"]
    old, gas = hot_spot(mesh)
    gas[component, 7, 5, 0] = value
    bad = assemble_gas(mesh, old, gas)[0].bad_zone
    at = {7 * 11 + 5, 6 * 11 + 5, 8 * 11 + 5, 7 * 11 + 4, 7 * 11 + 6}  # the zone, or a neighbour of it
    assert bad in at


def test_exchange_reports_a_zone_without_internal_energy() -> None:
    mesh = GAS["2-D"]
    old, gas = hot_spot(mesh)
    assembly = assemble_gas(mesh, old, gas)[0]
    new = old.copy()
    new[0, 4, 6, 0] += 2.0 * gas[4, 4, 6, 0]
    untouched, bad = transport.exchange(mesh.halos(new)[0], old, 0.0 * assembly.bands, gas, axes=mesh.axes)
    assert bad == 4 * 11 + 6
    assert np.array_equal(np.delete(untouched, 4, axis=0), np.delete(gas, 4, axis=0))


@pytest.mark.parametrize("axes", [(), (1, 0), (0, 0), (0,)])
def test_axes_must_name_the_mesh(axes: tuple[int, ...]) -> None:
    zones = np.ones((2, 5, 4, 1))
    with pytest.raises(KernelError, match="axes"):
        transport.energy_gain(zones, zones, zones, axes=axes)


def test_a_mesh_may_lie_along_any_axis() -> None:
    """The same problem along x, y and z gives the same bits."""
    results = []
    for axis in range(3):
        shape = [1, 1, 1]
        shape[axis] = 23
        mesh = Mesh((shape[0], shape[1], shape[2]), (axis,))
        material = random_material(mesh, 6, seed=18)
        radiation = random_radiation(mesh, 6, seed=19)
        assemblies = assemble(mesh, radiation, material, random_redistribution(6, 20), light_path=C_LIGHT * 1e-10)
        results.append(solve(mesh, radiation, assemblies).radiation.ravel())
    assert np.array_equal(results[0], results[1])
    assert np.array_equal(results[0], results[2])

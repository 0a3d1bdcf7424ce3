"""The compiled sweep: bits of the oracle, independent of tiles, conservative, honest about bad zones."""

from __future__ import annotations

import math
from concurrent.futures import ThreadPoolExecutor
from itertools import pairwise

import numpy as np
import numpy.typing as npt
import pytest

from breakstep.errors import KernelError
from breakstep.kernels.eos import GammaLaw, Stellar
from breakstep.kernels.hydro import numpy_form as hydro_numpy
from breakstep.kernels.hydro import sweep as hydro
from breakstep.kernels.hydro.chunks import chunk_plan
from breakstep.kernels.hydro.rows import ROW
from tests.physics.marching import periodic

Array = npt.NDArray[np.float64]

GAMMA_LAW = GammaLaw(1.4).vector
STELLAR = Stellar().vector
EPS = np.finfo(float).eps

# Isotopes to choose from; the first n serve as n species.
MASSES = np.array([4.0, 12.0, 16.0, 20.0, 24.0, 28.0, 32.0, 36.0, 40.0, 44.0, 48.0, 52.0, 56.0])


def isotopes(species: int) -> tuple[Array, Array]:
    return MASSES[:species].copy(), 0.5 * MASSES[:species]


def rough_gas(shape: tuple[int, int, int], species: int, *, stellar: bool = False, seed: int = 1) -> Array:
    """Random zones with jumps everywhere: density and pressure within factors 2, speeds up to sonic.

    The units of the stellar gas make electrons, ions and radiation all matter (1e6 g/cm^3, some 1e9 K).
    """
    random = np.random.default_rng(seed)
    rho_unit, e_unit = (1e6, 2e17) if stellar else (1.0, 1.0)
    gas = np.empty((5 + species, *shape))
    gas[0] = rho_unit * random.uniform(1.0, 2.0, shape)
    velocity = np.sqrt(e_unit) * random.uniform(-0.5, 0.5, (3, *shape))
    gas[1:4] = gas[0] * velocity
    gas[4] = gas[0] * (e_unit * random.uniform(1.0, 2.0, shape) + 0.5 * (velocity**2).sum(axis=0))
    fractions = random.uniform(0.0, 1.0, (species, *shape))
    gas[5:] = gas[0] * fractions / fractions.sum(axis=0) if species else 0.0
    return gas


def stable_step(gas: Array, vector: Array, species: int) -> float:
    """Time step of CFL number 0.6 for zones of width 1."""
    rate, bad = hydro.signal_rate(gas, np.ones(3), np.ones(3, bool), vector, *isotopes(species))
    assert bad == -1
    return 0.6 / rate


@pytest.mark.parametrize("stellar", [False, True], ids=["gamma law", "stellar"])
@pytest.mark.parametrize(
    ("shape", "species"),
    [
        pytest.param((97, 1, 1), 3, id="1-D"),
        pytest.param((1, 1, 2 * ROW), 0, id="1-D along z, longer than a scratch row"),
        pytest.param((34, 46, 1), 5, id="2-D"),
        pytest.param((1, 9, 40), 1, id="2-D in y and z"),
        pytest.param((11, 8, 13), 13, id="3-D"),
    ],
)
def test_equals_the_oracle_to_the_last_bit(shape: tuple[int, int, int], species: int, stellar: bool) -> None:
    vector = STELLAR if stellar else GAMMA_LAW
    gas = rough_gas(shape, species, stellar=stellar)
    axes = [axis for axis in range(3) if shape[axis] > 1]
    for step in range(10):
        dt = stable_step(gas, vector, species)
        for axis in axes if step % 2 == 0 else axes[::-1]:
            padded = periodic(gas, axis)
            gas, courant, bad = hydro.sweep(padded, axis, dt, 1.0, vector, *isotopes(species))
            expected, expected_courant = hydro_numpy.sweep(padded, axis, dt, 1.0, vector, *isotopes(species))
            assert bad == -1
            assert courant == expected_courant
            np.testing.assert_array_equal(gas, expected)


def test_rough_supersonic_zones_stay_positive_and_equal_the_oracle() -> None:
    """Zones drawn at random: density and pressure over two decades, Mach numbers up to 30."""
    random = np.random.default_rng(7)
    shape = (400, 3, 1)
    gas = np.empty((7, *shape))
    gas[0], pressure = 10.0 ** random.uniform(-1.0, 1.0, (2, *shape))
    velocity = np.sqrt(1.4 * pressure / gas[0]) * random.uniform(-30.0, 30.0, (3, *shape))
    gas[1:4] = gas[0] * velocity
    gas[4] = pressure / 0.4 + 0.5 * gas[0] * (velocity**2).sum(axis=0)
    gas[5], gas[6] = 0.25 * gas[0], 0.75 * gas[0]
    difference = hydro_numpy.limited_differences(velocity[0])
    # Where this holds, the zone must fall back to its mean: the branch is taken, often.
    assert (0.1 * gas[0, 1:-1] * difference**2 > pressure[1:-1]).mean() > 0.2
    dt = stable_step(gas, GAMMA_LAW, 2)
    expected, _ = hydro_numpy.sweep(gas, 0, dt, 1.0, GAMMA_LAW, *isotopes(2))
    new, _, bad = hydro.sweep(gas, 0, dt, 1.0, GAMMA_LAW, *isotopes(2))
    assert bad == -1
    np.testing.assert_array_equal(new, expected)


def tiled_sweep(gas: Array, axis: int, dt: float, vector: Array, cuts: list[list[int]], species: int) -> Array:
    """One periodic sweep, tile by tile; ``cuts`` are the tile boundaries along x and y."""
    padded = periodic(gas, axis)
    new = np.empty_like(gas)
    for x in pairwise(cuts[0]):
        for y in pairwise(cuts[1]):
            window = [slice(*x), slice(*y)]
            window[axis] = slice(window[axis].start, window[axis].stop + 4)
            tile = np.ascontiguousarray(padded[:, window[0], window[1]])
            result, _, bad = hydro.sweep(tile, axis, dt, 1.0, vector, *isotopes(species))
            assert bad == -1
            new[:, slice(*x), slice(*y)] = result
    return new


@pytest.mark.parametrize("stellar", [False, True], ids=["gamma law", "stellar"])
def test_bits_do_not_depend_on_the_tiling(stellar: bool) -> None:
    vector, species = (STELLAR, 5) if stellar else (GAMMA_LAW, 5)
    start = rough_gas((51, 69, 1), species, stellar=stellar)
    tilings = [
        [[0, 51], [0, 69]],
        [[0, 17, 34, 51], [0, 23, 46, 69]],
        [[0, 5, 37, 51], [0, 1, 31, 69]],
        [[0, 51], [*range(0, 69, 8), 69]],
        [[*range(52)], [0, 69]],
    ]
    results = []
    for cuts in tilings:
        gas = start
        for step in range(3):
            dt = stable_step(gas, vector, species)
            for axis in (0, 1) if step % 2 == 0 else (1, 0):
                gas = tiled_sweep(gas, axis, dt, vector, cuts, species)
        results.append(gas)
    for other in results[1:]:
        np.testing.assert_array_equal(other, results[0])


@pytest.mark.parametrize("axis", [1, 2])
def test_axes_are_equivalent_to_the_last_bit(axis: int) -> None:
    """A sweep along y or z is the sweep along x of the cyclically turned gas."""
    species = 3
    padded = periodic(rough_gas((7, 19, 12), species), axis)
    along, *_ = hydro.sweep(padded, axis, 0.1, 1.0, GAMMA_LAW, *isotopes(species))
    components = [0, *(1 + (axis + k) % 3 for k in range(3)), *range(4, 5 + species)]
    places = (0, *(1 + (axis + k) % 3 for k in range(3)))
    turned = np.ascontiguousarray(padded[components].transpose(places))
    expected, *_ = hydro.sweep(turned, 0, 0.1, 1.0, GAMMA_LAW, *isotopes(species))
    np.testing.assert_array_equal(along[components].transpose(places), expected)


def test_mirror_image() -> None:
    """Left and right are treated alike, but for the order of two additions: hence round-off, not bits."""
    gas = periodic(rough_gas((40, 1, 1), 2), 0)
    mirrored = np.ascontiguousarray(gas[:, ::-1])
    mirrored[1] *= -1.0
    new, *_ = hydro.sweep(gas, 0, 0.2, 1.0, GAMMA_LAW, *isotopes(2))
    image, *_ = hydro.sweep(mirrored, 0, 0.2, 1.0, GAMMA_LAW, *isotopes(2))
    image[1] *= -1.0
    np.testing.assert_allclose(image[:, ::-1], new, rtol=0.0, atol=1e-14)  # values are of order 1 to 6


@pytest.mark.parametrize("stellar", [False, True], ids=["gamma law", "stellar"])
def test_conserves_to_round_off(stellar: bool) -> None:
    vector, species = (STELLAR, 4) if stellar else (GAMMA_LAW, 4)
    start = gas = rough_gas((24, 18, 5), species, stellar=stellar)
    steps = 8
    for _ in range(steps):
        dt = stable_step(gas, vector, species)
        for axis in range(3):
            gas, *_ = hydro.sweep(periodic(gas, axis), axis, dt, 1.0, vector, *isotopes(species))
    for component in range(5 + species):
        before, after = math.fsum(start[component].flat), math.fsum(gas[component].flat)
        # Each zone rounds its new value once a sweep, by half an ulp, and the sum of two fluxes, by less;
        # errors are random, so a bound of one ulp of the sum of magnitudes for all sweeps is generous.
        assert abs(after - before) <= EPS * np.abs(start[component]).sum()
    assert np.abs(gas - start).max() > 0.1 * np.abs(start).max()  # the gas did move


def test_species_add_up_to_the_gas() -> None:
    species, steps = 7, 20
    gas = rough_gas((30, 30, 1), species)
    for _ in range(steps):
        dt = stable_step(gas, GAMMA_LAW, species)
        for axis in (0, 1):
            gas, *_ = hydro.sweep(periodic(gas, axis), axis, dt, 1.0, GAMMA_LAW, *isotopes(species))
    # Every sweep rounds each of the seven partial densities a few times; without scaling the fractions
    # the sum is off by some per cent after the first sweep.
    np.testing.assert_allclose(gas[5:].sum(axis=0), gas[0], rtol=2 * steps * species * EPS)
    assert (gas[5:] >= 0.0).all()


def test_uniform_composition_stays_uniform() -> None:
    gas = rough_gas((60, 1, 1), 3)
    composition = np.array([0.5, 0.3, 0.2])
    gas[5:] = composition[:, None, None, None] * gas[0]
    for _ in range(10):
        dt = stable_step(gas, GAMMA_LAW, 3)
        gas, *_ = hydro.sweep(periodic(gas, 0), 0, dt, 1.0, GAMMA_LAW, *isotopes(3))
    expected = np.broadcast_to(composition[:, None, None, None], gas[5:].shape)
    np.testing.assert_allclose(gas[5:] / gas[0], expected, rtol=40 * EPS)  # four roundings a sweep


def test_uniform_flow_keeps_its_bits() -> None:
    gas = np.ones((6, 12, 9, 1)) * np.array([1.3, 0.7, -0.4, 0.2, 3.1, 1.3])[:, None, None, None]
    new, _, bad = hydro.sweep(gas, 0, 0.1, 1.0, GAMMA_LAW, *isotopes(1))
    assert bad == -1
    np.testing.assert_array_equal(new, gas[:, 2:-2])


def test_contact_keeps_pressure_and_velocity() -> None:
    gas = np.zeros((5, 50, 1, 1))
    gas[0] = 1.0
    gas[0, 20:35] = 10.0
    gas[1] = 0.75 * gas[0]
    gas[4] = 1.0 / 0.4 + 0.5 * 0.75**2 * gas[0]
    for _ in range(20):
        gas, *_ = hydro.sweep(periodic(gas, 0), 0, 0.3, 1.0, GAMMA_LAW, *isotopes(0))
    velocity = gas[1] / gas[0]
    pressure = 0.4 * (gas[4] - 0.5 * gas[1] * velocity)
    np.testing.assert_allclose(velocity, 0.75, rtol=1e-13)  # round-off of 20 steps
    np.testing.assert_allclose(pressure, 1.0, rtol=1e-13)


def test_courant_number_is_that_of_the_interior() -> None:
    gas = rough_gas((30, 14, 1), 0)
    padded = periodic(gas, 1)
    padded[4, :, [0, 1, -2, -1]] *= 100.0  # a fast halo must not count
    _, courant, _ = hydro.sweep(padded, 1, 0.02, 0.5, GAMMA_LAW, *isotopes(0))
    velocity = gas[1:4] / gas[0]
    pressure = 0.4 * (gas[4] - 0.5 * gas[0] * (velocity**2).sum(axis=0))
    speed = np.abs(velocity[1]) + np.sqrt(1.4 * pressure / gas[0])
    assert courant == pytest.approx(speed.max() * 0.02 / 0.5, rel=10 * EPS)  # other order of operations


@pytest.mark.parametrize("vector", [GAMMA_LAW, STELLAR], ids=["gamma law", "stellar"])
def test_signal_rate_is_the_largest_courant_number(vector: Array) -> None:
    """Over the active axes, by the Courant numbers of the sweeps; the tile is longer than a scratch row."""
    gas = rough_gas((50, 7, 3), 2, stellar=vector is STELLAR)
    spacing = np.array([0.5, 0.1, 0.2])
    rates = [
        hydro.sweep(periodic(gas, axis), axis, 1e-10, spacing[axis], vector, *isotopes(2))[1] / 1e-10
        for axis in range(3)
    ]
    for active in ([True, True, True], [True, False, True], [True, False, False]):
        rate, bad = hydro.signal_rate(gas, spacing, np.array(active), vector, *isotopes(2))
        assert bad == -1
        assert rate == pytest.approx(np.max(np.array(rates)[active]), rel=10 * EPS)


SPOILS = {
    "negative density": (0, -1.0),
    "no density": (0, 0.0),
    "energy less than kinetic": (4, -1.0),
    "energy nan": (4, np.nan),
    "density infinite": (0, np.inf),
    "transverse momentum nan": (2, np.nan),
}


@pytest.mark.parametrize(("component", "value"), SPOILS.values(), ids=SPOILS)
@pytest.mark.parametrize("vector", [GAMMA_LAW, STELLAR], ids=["gamma law", "stellar"])
@pytest.mark.parametrize("axis", [0, 1])
def test_bad_zone_before_the_step(component: int, value: float, vector: Array, axis: int) -> None:
    gas = rough_gas((40, 33, 1), 1, stellar=vector is STELLAR)
    gas[component, 21, 30, 0] = value
    gas[component, 25, 3, 0] = value
    flat = 21 * 33 + 30
    _, _, bad = hydro.sweep(periodic(gas, axis), axis, 0.0, 1.0, vector, *isotopes(1))
    assert bad == flat
    _, bad = hydro.signal_rate(gas, np.ones(3), np.ones(3, bool), vector, *isotopes(1))
    assert bad == flat


@pytest.mark.parametrize("dt", [1.5, 5.0], ids=["energy", "energy and density"])
def test_bad_zone_after_the_step(dt: float) -> None:
    """A time step far too large empties zones; the sweep says so and returns."""
    gas = periodic(rough_gas((30, 1, 1), 0), 0)
    new, courant, bad = hydro.sweep(gas, 0, dt, 1.0, GAMMA_LAW, *isotopes(0))
    internal = new[4] - 0.5 * (new[1:4] ** 2).sum(axis=0) / new[0]
    assert courant > 1.0
    assert (new[0] <= 0.0).any() == (dt == 5.0)
    assert bad == np.nonzero(((new[0] <= 0.0) | (internal <= 0.0)).ravel())[0][0]


def test_bad_halo_is_reported_where_it_arrives() -> None:
    gas = periodic(rough_gas((30, 1, 1), 0), 0)
    gas[4, 1] = np.nan
    _, _, bad = hydro.sweep(gas, 0, 0.1, 1.0, GAMMA_LAW, *isotopes(0))
    assert bad == 0


def test_write_protected_input_is_left_alone_and_gives_the_same_bits() -> None:
    gas = periodic(rough_gas((20, 20, 1), 2), 0)
    copy = gas.copy()
    expected, *_ = hydro.sweep(gas, 0, 0.1, 1.0, GAMMA_LAW, *isotopes(2))
    gas.flags.writeable = False
    new, *_ = hydro.sweep(gas, 0, 0.1, 1.0, GAMMA_LAW, *isotopes(2))
    np.testing.assert_array_equal(new, expected)
    np.testing.assert_array_equal(gas, copy)


def test_threads_do_not_share_scratch() -> None:
    tiles = [periodic(rough_gas((32, 32, 1), 5, seed=seed), 0) for seed in range(8)]

    def sweep(tile: Array) -> Array:
        return hydro.sweep(tile, 0, 0.1, 1.0, GAMMA_LAW, *isotopes(5))[0]

    expected = [sweep(tile) for tile in tiles]
    with ThreadPoolExecutor(4) as pool:
        for _ in range(5):
            for new, right in zip(pool.map(sweep, tiles), expected, strict=True):
                np.testing.assert_array_equal(new, right)


@pytest.mark.parametrize("shape", [(5, 10, 1, 1), (6, 4, 10, 1), (6, 10, 10)])
def test_wrong_shape_is_an_error(shape: tuple[int, ...]) -> None:
    with pytest.raises(KernelError, match="pad the tile"):
        hydro.sweep(np.ones(shape), 0, 0.1, 1.0, GAMMA_LAW, *isotopes(1))


@pytest.mark.parametrize(
    ("blocks", "lines", "columns"),
    [
        (1, 64, 64),
        (64, 64, 1),
        (16, 16, 16),
        (1, 5000, 1),
        (3, 700, 7),
        (1, 17, 391),
        (40, 1, 1),
        (2, 1, 3000),
    ],
)
def test_chunks_cover_every_zone_once(blocks: int, lines: int, columns: int) -> None:
    """Each interior zone is stored once, from the place in scratch where that zone was loaded."""
    padded = np.arange(blocks * (lines + 4) * columns)
    inside = padded.reshape(blocks, lines + 4, columns)[:, 2:-2].ravel()
    result = np.full(inside.size, -1)
    for chunk in chunk_plan(blocks, lines, columns):
        row = np.full(ROW, -1)
        for piece in range(chunk["load_pieces"]):
            start = chunk["padded_start"] + piece * chunk["padded_stride"]
            length = chunk["load_length"]
            row[piece * length : (piece + 1) * length] = padded[start : start + length]
        for piece in range(chunk["store_pieces"]):
            target = chunk["result_start"] + piece * chunk["result_stride"]
            place = chunk["row_start"] + piece * chunk["row_stride"]
            source = chunk["interior_start"] + piece * chunk["padded_stride"]
            length = chunk["store_length"]
            assert (result[target : target + length] == -1).all()
            np.testing.assert_array_equal(row[place : place + length], padded[source : source + length])
            # Neighbours along the axis lie ``step`` positions away in the row.
            for offset in (-2, -1, 1, 2):
                near = row[place + offset * chunk["step"] :][:length]
                np.testing.assert_array_equal(near, row[place : place + length] + offset * columns)
            result[target : target + length] = row[place : place + length]
    np.testing.assert_array_equal(result, inside)

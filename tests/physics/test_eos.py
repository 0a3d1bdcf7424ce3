"""Equations of state against published and computed values, and against their own derivatives."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pytest

from breakstep.kernels import constants, eos

pytestmark = pytest.mark.physics

Array = npt.NDArray[np.float64]

STELLAR = eos.Stellar().vector
NO_RADIATION = eos.Stellar(radiation=False).vector
CARBON_OXYGEN = (13.714285714285715, 6.857142857142858)  # half of each by mass; ye is 1/2

# Paczynski (1983) form at (density, temperature, mu_e), computed with the gas constant 8.31446e7:
# P_end, P_ed, P_e, f, dlnP/dlnrho, dlnP/dlnT, and P_e from exact Fermi-Dirac integrals without pairs.
PACZYNSKI = {
    (1.0, 1e6, 1.0): (
        83144626181532.39,
        9909678890057.268,
        83733091418929.52,
        1.6666450652714206,
        1.0093372627797372,
        0.9859936519954052,
        84972315727525.52,
    ),
    (1e4, 1e8, 2.0): (
        4.15723130907662e19,
        1.435314943238272e19,
        4.398033781526694e19,
        1.6604674467868794,
        1.070344266890707,
        0.8934932111598742,
        4.587758771650677e19,
    ),
    (1e6, 1e8, 2.0): (
        4.1572313090766196e21,
        2.6303555438165967e22,
        2.6630050710538223e22,
        1.570030831098066,
        1.556138896252212,
        0.024370497327475267,
        2.6641638041425973e22,
    ),
    (1e6, 1e9, 2.0): (
        4.157231309076619e22,
        2.6303555438165967e22,
        4.919485993887329e22,
        1.570030831098066,
        1.1629625458144648,
        0.7141162601669364,
        5.008655740774678e22,
    ),
}

# Density at mu_e = 2: exact pressure of cold electrons (Chandrasekhar) and Paczynski's form at T = 0.
COLD = {
    1e2: (6807088055954384.0, 6722014003167640.0),
    1e4: (1.451936525707229e19, 1.4353149432382726e19),
    1e6: (2.627275501959249e22, 2.6303555438165967e22),
    1e8: (2.1508639272241103e25, 2.1486676198118054e25),
    1e9: (4.861812215660973e26, 4.8264750621289394e26),
}

# Densities and temperatures over which the mixture is used; every ratio of ion, electron and radiation
# pressure and both ends of degeneracy and relativity occur.
PLANE = [(10.0**a, 10.0**b) for a in range(-6, 11, 2) for b in (3.0, 5.0, 7.0, 8.0, 9.0, 9.5)]


def derivative(function: object, x: float, step: float = 1e-4) -> float:
    """Derivative with respect to ln x by the fourth-order difference; error of order 1e-12 relative."""
    f = [function(x * np.exp(k * step)) for k in (-2, -1, 1, 2)]  # type: ignore[operator]
    return float((f[0] - 8.0 * f[1] + 8.0 * f[2] - f[3]) / (12.0 * step))


def test_constants_give_the_published_degenerate_pressures() -> None:
    """Chandrasekhar's K1 = 1.0036e13 and K2 = 1.2435e15 (as quoted from Shapiro & Teukolsky)."""
    electron_mass = 9.1093837139e-28  # CODATA 2022 [g]
    h, m_u = constants.H_PLANCK, constants.M_U
    k1 = (3.0 / np.pi) ** (2.0 / 3.0) / 20.0 * h**2 / (electron_mass * m_u ** (5.0 / 3.0))
    k2 = (3.0 / np.pi) ** (1.0 / 3.0) / 8.0 * h * constants.C_LIGHT / m_u ** (4.0 / 3.0)
    assert k1 == pytest.approx(1.0036e13, rel=5e-5)  # five digits printed
    assert k2 == pytest.approx(1.2435e15, rel=5e-5)
    # Paczynski's numbers are those with the hydrogen atom's mass in place of the atomic mass unit.
    hydrogen = 1.00782503 * m_u
    assert k1 * (m_u / hydrogen) ** (5.0 / 3.0) == pytest.approx(eos.K_NONRELATIVISTIC, rel=5e-4)  # 3 digits
    assert k2 * (m_u / hydrogen) ** (4.0 / 3.0) == pytest.approx(eos.K_RELATIVISTIC, rel=5e-4)


def test_constants_agree_with_each_other() -> None:
    radiation, gas, boltzmann = constants.A_RAD, constants.GAS_CONSTANT, constants.K_B
    assert radiation == pytest.approx(7.565733250e-15, rel=1e-9)  # CODATA, as printed
    assert gas == pytest.approx(8.31446261815324e7, rel=1e-14)  # exact by definition
    assert boltzmann / constants.M_U == pytest.approx(gas, rel=2e-9)  # M_U N_A is 1 + 1.05e-9


@pytest.mark.parametrize(("point", "values"), PACZYNSKI.items())
def test_electron_pressure_is_paczynskis(point: tuple[float, float, float], values: tuple[float, ...]) -> None:
    density, temperature, mu_e = point
    ours = eos.electron_pressures(density, temperature, 1.0 / mu_e)
    assert ours == pytest.approx(values[:4], rel=1e-9)  # the same formula; 1e-9 allows for other constants
    assert ours[2] == pytest.approx(values[6], rel=0.045)  # how good the formula is


@pytest.mark.parametrize(("point", "values"), PACZYNSKI.items())
def test_derivatives_of_the_electron_pressure(point: tuple[float, float, float], values: tuple[float, ...]) -> None:
    density, temperature, mu_e = point
    pressure = values[2]
    along_density = derivative(lambda x: eos.electron_pressures(x, temperature, 1.0 / mu_e)[2], density)
    along_temperature = derivative(lambda x: eos.electron_pressures(density, x, 1.0 / mu_e)[2], temperature)
    assert along_density / pressure == pytest.approx(values[4], rel=1e-8)  # round-off 1e-16 over a step of 1e-4
    assert along_temperature / pressure == pytest.approx(values[5], rel=1e-8)


@pytest.mark.parametrize(("density", "values"), COLD.items())
def test_cold_electrons(density: float, values: tuple[float, float]) -> None:
    exact, paczynski = values
    pressure = eos.electron_pressures(density, 0.0, 0.5)[2]
    assert pressure == pytest.approx(paczynski, rel=1e-8)  # the same formula
    assert pressure == pytest.approx(exact, rel=0.013)  # how good it is


@pytest.mark.parametrize(
    ("beta", "gamma1"),
    [
        (0.9, 1.5627450980392161),
        (0.5, 1.4259259259259258),
        (0.1, 1.3502283105022832),
    ],
)
def test_gamma1_of_gas_and_radiation(beta: float, gamma1: float) -> None:
    """(32 - 24 b - 3 b^2) / (24 - 21 b), b the gas share of P; from memory of Chandrasekhar (1939)."""
    density, mass_number = 1e-3, 4.0
    # rho R T / A = b P and a T^4 / 3 = (1 - b) P fix the temperature; no charge, so no electrons.
    cube = 3.0 * density * constants.GAS_CONSTANT / mass_number * (1.0 - beta) / (beta * constants.A_RAD)
    state = eos.state_from_temperature(STELLAR, density, np.cbrt(cube), mass_number, 0.0)
    assert state[2] == pytest.approx(gamma1, rel=1e-12)


@pytest.mark.parametrize("density", [1e0, 1e2, 1e4, 1e6, 1e8, 1e10])
def test_compressing_cold_matter_costs_its_pressure(density: float) -> None:
    """de = P drho / rho^2 for electrons at T = 0, which P_e / (f - 1) would miss by up to 22 %."""
    cold = 1e-4  # [K]; ions and thermal electrons hold 1e-8 of the energy at most

    def energy(x: float) -> float:
        return float(eos.state_from_temperature(NO_RADIATION, x, cold, *CARBON_OXYGEN)[0])

    pressure = eos.state_from_temperature(NO_RADIATION, density, cold, *CARBON_OXYGEN)[1]
    assert derivative(energy, density) == pytest.approx(pressure / density, rel=1e-8)


@pytest.mark.parametrize(("density", "temperature"), PLANE)
def test_maxwell_relation_holds_within_an_eighth_of_the_electron_pressure(density: float, temperature: float) -> None:
    """P - rho^2 de/drho - T dP/dT, the inconsistency that the module admits, is what it says."""

    def state(rho: float, t: float) -> Array:
        return np.array(eos.state_from_temperature(STELLAR, rho, t, *CARBON_OXYGEN))

    _, p_ed, p_e, f = eos.electron_pressures(density, temperature, 0.5)
    energy_slope = derivative(lambda x: state(x, temperature)[0], density)
    pressure_slope = derivative(lambda x: state(density, x)[1], temperature)
    pressure = state(density, temperature)[1]
    residual = pressure - density * energy_slope - pressure_slope
    scale = pressure + density * state(density, temperature)[0]
    admitted = -p_ed * (1.0 - p_ed / p_e) * (1.0 - 1.5 * (f - 1.0))
    assert residual == pytest.approx(admitted, rel=0, abs=1e-9 * scale)  # differences of 1e-16 over 1e-4
    assert abs(admitted) <= p_e / 8.0


@pytest.mark.parametrize("vector", [STELLAR, NO_RADIATION], ids=["radiation", "matter alone"])
@pytest.mark.parametrize(("density", "temperature"), PLANE)
def test_gamma1_and_heat_capacity_are_derivatives(density: float, temperature: float, vector: Array) -> None:
    """gamma1 P/rho = (dP/drho)_e + P/rho^2 (dP/de)_rho, by differences in density and in temperature."""

    def state(rho: float, t: float) -> Array:
        return np.array(eos.state_from_temperature(vector, rho, t, *CARBON_OXYGEN))

    e_t = derivative(lambda x: state(density, x)[0], temperature) / temperature
    p_t = derivative(lambda x: state(density, x)[1], temperature) / temperature
    e_rho = derivative(lambda x: state(x, temperature)[0], density) / density
    p_rho = derivative(lambda x: state(x, temperature)[1], density) / density
    energy, pressure, gamma1, heat_capacity = state(density, temperature)
    # The thermal energy of cold matter is a small part of a large sum, whose rounding the difference sees.
    noise = 1e-15 * energy / 1e-4 / temperature
    assert heat_capacity == pytest.approx(e_t, rel=1e-8, abs=10.0 * noise)
    sound2 = p_rho + p_t / heat_capacity * (pressure / density**2 - e_rho)
    p_noise = 1e-15 * pressure / 1e-4 / temperature / heat_capacity * pressure / density**2
    assert gamma1 * pressure / density == pytest.approx(sound2, rel=1e-7, abs=100.0 * p_noise)


def test_adiabatic_compression_heats_degenerate_matter() -> None:
    """From 1e6 to 1e9 g/cm^3 starting at 1e8 K along de = P drho / rho^2, by small midpoint steps."""
    steps = 3000
    density, factor = 1e6, 1000.0 ** (1.0 / steps)
    energy = eos.state_from_temperature(NO_RADIATION, density, 1e8, *CARBON_OXYGEN)[0]
    temperatures = [1e8]
    for _ in range(steps):
        middle, width = density * np.sqrt(factor), np.log(factor)
        pressure = eos.state_from_energy(NO_RADIATION, density, energy, *CARBON_OXYGEN)[1]
        halfway = energy + 0.5 * width * pressure / density
        energy += width * eos.state_from_energy(NO_RADIATION, middle, halfway, *CARBON_OXYGEN)[1] / middle
        density *= factor
        temperatures.append(eos.state_from_energy(NO_RADIATION, density, energy, *CARBON_OXYGEN)[0])
    assert (np.diff(temperatures) > 0.0).all()
    # Ions alone would follow T ~ rho^(2/3), a factor 100; electrons share some of the heat. Measured 58.
    assert 40.0 < temperatures[-1] / temperatures[0] < 100.0


def test_temperature_round_trip() -> None:
    """T to e to T, for any mixture; the error of e that T's error stands for is that of rounding e."""
    random = np.random.default_rng(20240501)
    for _ in range(3000):
        density, temperature = 10.0 ** random.uniform((-8.0, 3.0), (10.0, 10.5))
        abar = random.uniform(1.0, 56.0)
        zbar = abar * random.uniform(0.3, 1.0)
        for vector in (STELLAR, NO_RADIATION):
            energy, *_, heat_capacity = eos.state_from_temperature(vector, density, temperature, abar, zbar)
            back = eos.state_from_energy(vector, density, energy, abar, zbar)[0]
            # A dozen roundings of 1.1e-16 each, of e itself and in the inversion; measured 9e-16.
            assert abs(back - temperature) * heat_capacity <= 2e-15 * energy

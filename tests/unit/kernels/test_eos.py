"""The equations of state as kernels call them: parameters, invalid energies, mean nuclei."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.kernels import eos
from breakstep.kernels.constants import GAS_CONSTANT

CARBON = (12.0, 6.0)


def test_vectors_have_one_shape_and_different_kinds() -> None:
    gamma_law, stellar = eos.GammaLaw(1.4, 0.6).vector, eos.Stellar().vector
    assert gamma_law.shape == stellar.shape == (3,)
    assert gamma_law.dtype == stellar.dtype == np.float64
    assert gamma_law[0] == eos.GAMMA_LAW
    assert stellar[0] == eos.STELLAR


def test_gamma_law() -> None:
    vector = eos.GammaLaw(5.0 / 3.0, mean_molecular_weight=0.5).vector
    temperature, pressure, gamma1, heat_capacity = eos.state_from_energy(vector, 2.0, 3e15, *CARBON)
    assert pressure == pytest.approx(2.0 / 3.0 * 2.0 * 3e15, rel=1e-15)  # a handful of roundings
    assert temperature == pytest.approx(pressure * 0.5 / (2.0 * GAS_CONSTANT), rel=1e-15)
    assert gamma1 == 5.0 / 3.0
    assert heat_capacity * temperature == pytest.approx(3e15, rel=1e-15)
    assert eos.state_from_temperature(vector, 2.0, temperature, *CARBON) == pytest.approx(
        (3e15, pressure, gamma1, heat_capacity), rel=1e-15
    )


@pytest.mark.parametrize("energy", [-1e15, 0.0, np.nan])
@pytest.mark.parametrize("vector", [eos.GammaLaw(1.4).vector, eos.Stellar().vector], ids=["gamma law", "stellar"])
def test_no_temperature_without_energy(vector: np.ndarray, energy: float) -> None:
    assert np.isnan(eos.state_from_energy(vector, 1.0, energy, *CARBON)[0])


def test_no_temperature_below_cold_electrons() -> None:
    vector = eos.Stellar().vector
    floor = eos.state_from_temperature(vector, 1e6, 1e-6, *CARBON)[0]
    below = eos.state_from_energy(vector, 1e6, 0.999 * floor, *CARBON)
    assert np.isnan(below[:3]).all()
    assert eos.state_from_energy(vector, 1e6, 1.001 * floor, *CARBON)[0] > 0.0


def test_temperature_has_no_history() -> None:
    """The same arguments give the same bits whatever was computed between."""
    vector = eos.Stellar().vector
    first = eos.state_from_energy(vector, 1e5, 3e17, *CARBON)
    eos.state_from_energy(vector, 1e-3, 1e19, *CARBON)
    assert eos.state_from_energy(vector, 1e5, 3e17, *CARBON) == first


def test_matter_of_neutrons_alone() -> None:
    """No electrons: an ideal gas of one particle a nucleus, nothing divided by 0."""
    vector = eos.Stellar(radiation=False).vector
    energy, pressure, gamma1, heat_capacity = eos.state_from_temperature(vector, 10.0, 1e9, 1.0, 0.0)
    assert pressure == pytest.approx(10.0 * GAS_CONSTANT * 1e9, rel=1e-15)  # a few roundings
    assert energy == pytest.approx(1.5 * pressure / 10.0, rel=1e-15)
    assert gamma1 == pytest.approx(5.0 / 3.0, rel=1e-15)
    assert eos.state_from_energy(vector, 10.0, energy, 1.0, 0.0)[0] == pytest.approx(1e9, rel=1e-15)
    with_radiation = eos.state_from_temperature(eos.Stellar().vector, 10.0, 1e9, 1.0, 0.0)
    back = eos.state_from_energy(eos.Stellar().vector, 10.0, with_radiation[0], 1.0, 0.0)
    assert back[0] == pytest.approx(1e9, rel=1e-14)  # round trip: see tests/physics/test_eos.py
    assert heat_capacity < with_radiation[3]


def test_mean_nuclear() -> None:
    """Equal masses of carbon and helium: nuclei 1/12 and 1/4 a gram, 6 and 2 charges each."""
    masses, charges = np.array([12.0, 4.0]), np.array([6.0, 2.0])
    abar, zbar = eos.mean_nuclear(np.array([0.5, 0.5]), masses, charges)
    assert abar == pytest.approx(6.0, rel=1e-15)  # 1 / (1/24 + 1/8)
    assert zbar == pytest.approx(3.0, rel=1e-15)
    scaled = eos.mean_nuclear(np.array([3.5e6, 3.5e6]), masses, charges)
    assert scaled == pytest.approx((abar, zbar), rel=1e-15)


def test_mean_nuclear_without_species() -> None:
    assert eos.mean_nuclear(np.zeros(0), np.zeros(0), np.zeros(0)) == (1.0, 1.0)

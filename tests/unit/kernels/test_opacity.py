"""Photon groups, Planck fractions and the invented opacity."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from breakstep.kernels.transport.opacity import (
    SPLIT,
    PhotonGroups,
    PowerLawOpacity,
    bernoulli_coefficients,
    planck_fractions,
    upper_tail,
)

Floats = NDArray[np.float64]

C2 = 14387.768775
"""Second radiation constant h c / k_B [micrometre kelvin], CODATA."""

HANDBOOK = {
    1000: 0.000321,
    1400: 0.00779,
    2000: 0.066728,
    2400: 0.140256,
    3000: 0.273232,
    4000: 0.480877,
    5000: 0.633747,
    6000: 0.737818,
    8000: 0.856288,
    10000: 0.914199,
    12000: 0.945098,
    20000: 0.985602,
    50000: 0.998953,
    100000: 0.999905,
}
"""Fraction of black-body radiation below wavelength times temperature [micrometre kelvin]: the table found in
textbooks of heat transfer. Its last digits are off by up to 5e-5."""

COMPUTED = {
    1000: 0.00032076978405507037,
    1400: 0.007790389273204688,
    2000: 0.06672994018223334,
    2898: 0.25010629365909276,
    4000: 0.4808646435831456,
    6000: 0.7377894180203101,
    10000: 0.9141569709285768,
    20000: 0.9855538386661727,
    100000: 0.9998552102471255,
}
"""The same, computed independently with C2 as above."""


def tail(x: float | Floats) -> Floats:
    x = np.atleast_1d(np.asarray(x, float))
    result = np.empty_like(x)
    upper_tail(x, result, np.empty((3, x.size)))
    return result


@pytest.mark.physics
@pytest.mark.parametrize("product", list(HANDBOOK))
def test_black_body_table(product: int) -> None:
    assert tail(C2 / product)[0] == pytest.approx(HANDBOOK[product], abs=6e-5)


@pytest.mark.physics
@pytest.mark.parametrize("product", list(COMPUTED))
def test_black_body_computed(product: int) -> None:
    assert tail(C2 / product)[0] == pytest.approx(COMPUTED[product], abs=1e-12)


def test_bernoulli_series_begins_as_in_the_textbooks() -> None:
    """x^3 (1/3 - x/8 + x^2/60 - x^4/5040 + x^6/272160 - x^8/13305600 ...), from memory."""
    expected = [1 / 3, -1 / 8, 1 / 60, -1 / 5040, 1 / 272160, -1 / 13305600]
    assert bernoulli_coefficients(17)[:6] == pytest.approx(expected, rel=1e-14)


def test_series_meet() -> None:
    below, above = tail(np.array([np.nextafter(SPLIT, 0.0), SPLIT]))
    # both series are cut at 1e-12
    assert below == pytest.approx(above, abs=2e-12)


def test_an_element_does_not_depend_on_the_others() -> None:
    x = np.geomspace(1e-3, 800.0, 57)
    together = tail(x)
    assert all(tail(value)[0] == together[i] for i, value in enumerate(x))
    assert np.all(np.diff(together) <= 0.0)


@pytest.mark.parametrize("count", [1, 2, 16, 40])
def test_fractions_divide_everything(count: int) -> None:
    groups = PhotonGroups(count)
    temperature = np.geomspace(1e3, 1e12, 91)
    fractions = np.empty((count, temperature.size))
    planck_fractions(temperature, groups.edges, fractions)
    assert fractions.min() >= 0.0
    # a telescoping sum of numbers up to 1: one rounding a group
    assert np.abs(fractions.sum(axis=0) - 1.0).max() <= count * np.finfo(float).eps
    # outside the nominal range everything lies in the end groups
    assert fractions[0, 0] == pytest.approx(1.0)
    assert fractions[-1, -1] == pytest.approx(1.0, abs=1e-3)


def test_nan_temperature_gives_nan() -> None:
    fractions = np.empty((3, 2))
    planck_fractions(np.array([1e8, np.nan]), PhotonGroups(3).edges, fractions)
    assert np.isfinite(fractions[:, 0]).all()
    assert np.isnan(fractions[:, 1]).all()


def test_opacity_follows_its_power_law() -> None:
    groups = PhotonGroups(6)
    opacity = PowerLawOpacity(absorption=2.0, photon_exponent=3.0)
    at_reference = opacity.absorption_factors(groups) * (groups.centres / opacity.photon) ** 3
    assert at_reference == pytest.approx(2.0)
    assert np.all(np.diff(groups.centres) > 0.0)
    assert np.all((groups.centres[:-1] < groups.edges) & (groups.edges < groups.centres[1:]))


def test_redistribution_is_a_symmetric_share() -> None:
    shares = PowerLawOpacity(inelastic=0.25).redistribution(PhotonGroups(16))
    assert np.array_equal(shares, shares.T)
    assert np.all(np.diag(shares) == 0.0)
    assert shares.min() >= 0.0
    assert shares.sum(axis=0).max() == pytest.approx(0.25)
    assert PowerLawOpacity().redistribution(PhotonGroups(1)) == pytest.approx(0.0)

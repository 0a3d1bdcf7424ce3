"""Sedov's blast wave in one, two and three dimensions: shock radius, centre, symmetry of the splitting."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pytest

from tests.physics.marching import gamma_law, gas_from_primitive, march, primitive, reflecting

pytestmark = pytest.mark.physics

Array = npt.NDArray[np.float64]

GAMMA = 1.4

# Dimensions: energy, radius at t = 1 for unit density (Kamm & Timmes 2007, LA-UR-07-2849; planar energy
# counts both sides), similarity constant alpha and pressure at the centre over that behind the shock
# (computed by quadrature and in closed form; alpha agrees with the published one to 4e-4, 4e-5 and 3e-7).
REFERENCE = {
    1: (2.0 * 0.0673185, 0.50, 1.077485584718203, 0.39001571682221803),
    2: (0.311357, 0.75, 0.9840740168800315, 0.3729196807317996),
    3: (0.851072, 1.00, 0.8510718547582286, 0.365463078443507),
}


def blast(dimensions: int, zones: int, size: float) -> tuple[Array, float]:
    """Pressure at t = 1 in the octant (quadrant, half) around the centre, and the zone width.

    The energy starts as pressure in the zones within 3.5 widths of the centre.
    """
    width = size / zones
    shape = [zones if axis < dimensions else 1 for axis in range(3)]
    place = [(np.arange(n) + 0.5) * width if n > 1 else np.zeros(1) for n in shape]
    radius = np.sqrt(sum(x * x for x in np.meshgrid(*place, indexing="ij")))
    hot = radius < 3.5 * width
    pressure = np.full(shape, 1e-6)
    energy = REFERENCE[dimensions][0] / 2**dimensions
    pressure[hot] = (GAMMA - 1.0) * energy / (hot.sum() * width**dimensions)
    gas = gas_from_primitive(np.ones(shape), np.zeros((3, *shape)), pressure, GAMMA)
    gas = march(gas, spacing=width, end=1.0, eos=gamma_law(GAMMA), fill=reflecting, first=1e-5)
    return primitive(gas, GAMMA)[2], width


def radius_of(pressure: Array, threshold: float, width: float, dimensions: int) -> float:
    """Radius of the ball whose volume is that of all zones with a pressure above the threshold."""
    volume = float((pressure > threshold).sum()) * (2.0 * width) ** dimensions
    unit_ball = {1: 2.0, 2: np.pi, 3: 4.0 / 3.0 * np.pi}[dimensions]
    return float((volume / unit_ball) ** (1.0 / dimensions))


@pytest.mark.parametrize(
    ("dimensions", "zones", "size", "tolerance"),
    [
        # Thirty per cent of the pressure behind the shock is less than the cavity's and more than the foot
        # of the smeared shock's, so the ball is too large by a fraction of a zone (a zone is 1, 0.7 and 2.5 %
        # of the radius on these grids). Measured 0.01, 0.6 and 1.7 %.
        pytest.param(1, 200, 1.0, 0.01, id="planar"),
        pytest.param(2, 200, 1.0, 0.01, id="cylindrical", marks=pytest.mark.slow),
        pytest.param(3, 48, 1.2, 0.02, id="spherical", marks=pytest.mark.slow),
    ],
)
def test_shock_radius_and_centre(dimensions: int, zones: int, size: float, tolerance: float) -> None:
    energy, published, alpha, centre = REFERENCE[dimensions]
    radius = (energy / alpha) ** (1.0 / (dimensions + 2))
    assert radius == pytest.approx(published, rel=2e-4)  # the published planar alpha is 3.6e-4 off
    speed = 2.0 / (dimensions + 2) * radius
    behind = 2.0 / (GAMMA + 1.0) * speed**2
    pressure, width = blast(dimensions, zones, size)
    assert radius_of(pressure, 0.3 * behind, width, dimensions) == pytest.approx(radius, rel=tolerance)
    # The cavity's pressure depends on all energy arriving there; measured within 2.5, 0.4 and 3.7 %.
    assert pressure.flat[0] / behind == pytest.approx(centre, rel=0.05)
    for axis in range(1, dimensions):
        # Sweeps in turn do not treat the axes alike; the difference is the splitting error, measured 0.1 %.
        difference = np.abs(pressure - np.swapaxes(pressure, 0, axis)).mean()
        assert difference < 0.01 * np.abs(pressure).mean()

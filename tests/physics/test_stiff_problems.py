"""Published stiff problems through the integrator that burns zones, as mass-action networks."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.kernels.burning.stiff import DONE
from tests.kinetics import hires, oregonator, robertson, run

pytestmark = pytest.mark.physics

# Robertson's problem. t = 40 and 1e11: IVP test set (Mazzia & Magherini), as quoted elsewhere; the others
# computed with scipy's Radau at rtol 1e-13, which agrees with the published ones to all their digits.
ROBERTSON = {
    0.4: (0.9851721138609923, 3.386395378974908e-05, 0.014794022185220431),
    4.0: (0.9055186785842572, 2.240475687560214e-05, 0.09445891665887034),
    40.0: (0.7158270687194, 9.185534764558e-06, 0.28416374574583),
    400.0: (0.45051866847110256, 3.2229014416745983e-06, 0.5494781086274563),
    4e3: (0.18320225777671037, 8.94237125277596e-07, 0.8167968479861654),
    4e4: (0.03898337708548324, 1.6217683159097008e-07, 0.9610164607376843),
    4e5: (0.004938274520979959, 1.984994087954434e-08, 0.9950617056290788),
    1e11: (2.083340149701255e-08, 8.333360770334713e-14, 0.999999979166505),
}

# HIRES at t = 321.8122: IVP test set.
HIRES = (
    0.7371312573325668e-3,
    0.1442485726316185e-3,
    0.5888729740967575e-4,
    0.1175651343283149e-2,
    0.2386356198831331e-2,
    0.6238968252742796e-2,
    0.2849998395185769e-2,
    0.2850001604814231e-2,
)

# OREGO: t = 360 from the IVP test set; the others computed with scipy's Radau, good to 1e-9.
OREGONATOR = {
    30.0: (1.0006614671804968, 1512.7789373482387, 10358.543127672458),
    60.0: (1.0008746251996257, 1144.336972384496, 83.72149966624784),
    120.0: (1.0041180226126456, 243.83260799103476, 1.0088222240486484),
    180.0: (1.0197634725372982, 51.59761322947529, 1.0169857789563745),
    360.0: (1.000814870318523, 1228.178521549917, 132.0554942846706),
}


@pytest.mark.parametrize(("rtol", "expected"), [(1e-6, 1e-4), (1e-8, 1e-6)])
@pytest.mark.parametrize("duration", ROBERTSON)
def test_robertson(duration: float, rtol: float, expected: float) -> None:
    # y2 is tracked below 1e-13, so the absolute tolerance must be far below
    result = run(robertson(), (1.0, 0.0, 0.0), duration, rtol, 1e-6 * rtol)
    assert result.outcome == DONE
    # over eleven decades of time some thousand sub-steps' errors add up: measured a tenth of this
    np.testing.assert_allclose(result.abundances, ROBERTSON[duration], rtol=expected)
    assert result.abundances.sum() == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize(("rtol", "expected"), [(1e-4, 1e-4), (1e-6, 1e-6), (1e-8, 1e-9)])
def test_hires(rtol: float, expected: float) -> None:
    start = (1.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0057)
    result = run(hires(), start, 321.8122, rtol, 1e-4 * rtol)
    assert result.outcome == DONE
    # measured 1.3e-5, 1.1e-7, 1.1e-10
    np.testing.assert_allclose(result.abundances, HIRES, rtol=expected)


@pytest.mark.parametrize("duration", OREGONATOR)
def test_oregonator(duration: float) -> None:
    result = run(oregonator(), (1.0, 2.0, 3.0), duration, 1e-9, 1e-9)
    assert result.outcome == DONE
    # sharp relaxations turn an error in phase into one in value
    np.testing.assert_allclose(result.abundances, OREGONATOR[duration], rtol=1e-6)

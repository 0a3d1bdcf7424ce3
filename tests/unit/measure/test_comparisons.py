"""What the measurements rest on: counted operations, states that kernels accept, brackets of equal error."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.errors import ConvergenceError
from breakstep.kernels.burning.network import load_network
from breakstep.kernels.burning.scipy_form import WorkPrecision
from breakstep.measure.blocks import dominant_blocks, operations
from breakstep.measure.burning import bracket
from breakstep.measure.states import DENSITY, Waves, fuel_fractions


def points(*errors: float) -> list[WorkPrecision]:
    return [WorkPrecision(10.0**-k, error, 0.0, k) for k, error in enumerate(errors)]


def test_bracket_takes_the_first_neighbours_around_an_error() -> None:
    curve = points(1e-3, 1e-4, 1e-6, 1e-5, 1e-7)
    loose, tight = bracket(curve, 2e-5)
    assert (loose.error, tight.error) == (1e-4, 1e-6)


def test_bracket_looks_no_further_than_it_must() -> None:
    curve = iter(points(1e-3, 1e-5, 1e-6))
    bracket(curve, 1e-4)
    assert next(curve).error == 1e-6


@pytest.mark.parametrize("errors", [(1e-6, 1e-7), (1e-3, 1e-4), ()])
def test_an_error_outside_the_curve_is_not_compared(errors: tuple[float, ...]) -> None:
    with pytest.raises(ConvergenceError, match="nothing of equal accuracy"):
        bracket(points(*errors), 1e-5)


def counted_operations(n: int) -> int:
    """Count while eliminating a column at a time and substituting: an independent second way."""
    count = 0
    for j in range(n):
        count += 1  # reciprocal pivot
        for _ in range(j + 1, n):
            count += 1  # multiplier
            count += 2 * (n - j - 1)  # multiply and subtract along the row
    for i in range(n):
        count += 2 * i  # forward substitution
        count += 2 * (n - 1 - i) + 1  # backward, with the stored reciprocal
    return count


@pytest.mark.parametrize("order", [1, 2, 8, 16, 32])
def test_operations_of_an_elimination(order: int) -> None:
    assert operations(order) == counted_operations(order)


def test_blocks_are_column_dominant_m_matrices() -> None:
    blocks = dominant_blocks(8, 5)
    diagonal = np.einsum("iiz->iz", blocks)
    off = blocks.copy()
    off[np.arange(8), np.arange(8)] = 0.0
    assert off.max() <= 0.0
    # the diagonal is 1 more than its column's sum of absolute values, to the rounding of sums below 10
    assert np.allclose(diagonal - np.abs(off).sum(axis=0), 1.0, rtol=0.0, atol=1e-13)


def test_waves_are_a_sound_gas() -> None:
    gas = Waves((6, 5, 1), 13).gas()
    assert gas.shape == (18, 6, 5, 1)
    internal = gas[4] - 0.5 * (gas[1:4] ** 2).sum(axis=0) / gas[0]
    assert min(gas[0].min(), internal.min(), gas[5:].min()) > 0.0
    assert gas[0].std() > 0.1 * DENSITY
    assert np.allclose(gas[5:].sum(axis=0), gas[0], rtol=1e-14)  # a sum of 13 rounded terms


def test_fuel_is_all_of_the_mass() -> None:
    assert fuel_fractions(load_network("alpha13")).sum() == 1.0

"""The vector exponential against numpy's."""

from __future__ import annotations

import numpy as np

from breakstep.kernels.exponential import LIMIT, exponentials


def exponential_of(arguments: np.ndarray) -> np.ndarray:
    values = np.empty_like(arguments)
    exponentials(arguments, values, np.empty_like(arguments))
    return values


def test_agrees_with_numpy_to_two_units_in_the_last_place() -> None:
    arguments = np.random.default_rng(1).uniform(-LIMIT, LIMIT, 20_000)
    expected = np.exp(arguments)  # itself good to one unit
    assert np.all(np.abs(exponential_of(arguments) - expected) <= 2.0 * np.spacing(expected))


def test_exact_at_zero() -> None:
    # constant rates rest on this: a set of zeros must be the constant 1
    assert exponential_of(np.zeros(5)).tolist() == [1.0] * 5


def test_arguments_beyond_the_limit_are_clamped() -> None:
    low, high = exponential_of(np.array([-1e4, 1e4]))
    assert (low, high) == tuple(exponential_of(np.array([-LIMIT, LIMIT])))
    assert 0.0 < low < 1e-300 < 1e300 < high < np.inf


def test_nan_stays_nan() -> None:
    assert np.isnan(exponential_of(np.array([1.0, np.nan, 2.0]))).tolist() == [False, True, False]

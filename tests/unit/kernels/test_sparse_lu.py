"""Static sparse elimination against numpy's dense solver."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.kernels.burning.network import load_network
from breakstep.kernels.burning.sparse_lu import analyse, factorise, solve


def sparse_solve(matrix: np.ndarray, pattern: np.ndarray, vector: np.ndarray) -> np.ndarray:
    positions, elimination = analyse(pattern)
    entries, solution = np.zeros(int(positions.max()) + 1), vector.copy()
    entries[positions[pattern]] = matrix[pattern]
    factorise(elimination, entries)
    solve(elimination, entries, solution)
    return solution


@pytest.mark.parametrize("density", [0.05, 0.3, 1.0])
@pytest.mark.parametrize("n", [1, 2, 14, 40])
def test_solves_as_numpy_does(n: int, density: float) -> None:
    random = np.random.default_rng(n)
    pattern = (random.random((n, n)) < density) | np.eye(n, dtype=bool)
    # diagonally dominant, so elimination without pivoting loses no digits
    matrix = np.where(pattern, random.normal(size=(n, n)), 0.0) + 3.0 * n * np.eye(n)
    vector = random.normal(size=n)
    solution = sparse_solve(matrix, pattern, vector)
    # condition numbers are below 10: some tens of roundings remain
    np.testing.assert_allclose(solution, np.linalg.solve(matrix, vector), rtol=1e-13, atol=1e-14)


def test_order_avoids_fill_in_an_arrow() -> None:
    n = 12
    pattern = np.eye(n, dtype=bool)
    pattern[0, :] = pattern[:, 0] = True  # eliminated first, this row would fill everything
    positions, elimination = analyse(pattern)
    assert int((positions >= 0).sum()) == int(pattern.sum())
    assert elimination.pivot[0] != 0


def test_alpha_chain_eliminates_with_few_operations() -> None:
    elimination = load_network("alpha13").arrays.elimination
    dense_updates = sum(k * k for k in range(14))  # 819
    # 134 when written; a changed pivot order may cost a few more, not a multiple
    assert elimination.update_target.size < dense_updates / 4


def test_zero_pivot_gives_no_number() -> None:
    matrix = np.array([[0.0, 1.0], [1.0, 0.0]])
    solution = sparse_solve(matrix, np.ones((2, 2), dtype=bool), np.array([1.0, 1.0]))
    assert not np.all(np.isfinite(solution))

"""Dense blocks, eight at once, against numpy's one at a time."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from breakstep.kernels.transport.blocks import LANES, factor_and_solve, factor_panel, solve_panel

EPS = float(np.finfo(float).eps)


def dominant_blocks(order: int, zones: int, seed: int) -> NDArray[np.float64]:
    """Random column-dominant M-matrices, as implicit transport makes them, scales spread over columns."""
    rng = np.random.default_rng(seed)
    blocks = -rng.random((order, order, zones)) * 10.0 ** rng.uniform(-3, 3, (1, order, zones))
    for j in range(order):
        blocks[j, j] = 0.0
        blocks[j, j] = 1.0 - blocks[:, j].sum(axis=0)
    return blocks


@pytest.mark.parametrize("order", [1, 2, 3, 5, 8, 16, 33])
@pytest.mark.parametrize("zones", [1, 7, 8, 9, 67])
def test_equals_numpy(order: int, zones: int) -> None:
    blocks = dominant_blocks(order, zones, seed=order * 100 + zones)
    rhs = np.random.default_rng(1).random((order, zones))
    solution, bad = factor_and_solve(blocks, rhs)
    expected = np.linalg.solve(blocks.transpose(2, 0, 1), rhs.T[:, :, None])[:, :, 0].T
    assert bad == -1
    # Both are backward stable with growth below 2; the columns sum to 1, so the inverse's 1-norm is at
    # most 1 and the 1-norm condition number at most that of the matrix. Factor 10 n covers both errors.
    norm = np.abs(blocks).sum(axis=0).max(axis=0)
    bound = 10.0 * order * EPS * norm * np.abs(expected).sum(axis=0)
    assert np.all(np.abs(solution - expected).sum(axis=0) <= bound)


def test_positive_sources_give_positive_solutions() -> None:
    """The inverse of an M-matrix is not negative."""
    solution, _ = factor_and_solve(dominant_blocks(16, 64, seed=3), np.full((16, 64), 1e-8))
    assert solution.min() > 0.0


def test_a_zone_does_not_depend_on_its_lane() -> None:
    blocks = dominant_blocks(16, 40, seed=4)
    rhs = np.random.default_rng(5).random((16, 40))
    whole, _ = factor_and_solve(blocks, rhs)
    for zone in (0, 5, 17, 39):
        alone, _ = factor_and_solve(blocks[:, :, zone : zone + 1].copy(), rhs[:, zone : zone + 1].copy())
        assert np.array_equal(alone[:, 0], whole[:, zone])


@pytest.mark.parametrize("order", [1, 4, 7])
def test_panel_holds_the_factors(order: int) -> None:
    """Multiply the stored factors and find the matrix again."""
    blocks = dominant_blocks(order, LANES, seed=6)
    panel = blocks.transpose(1, 0, 2).reshape(order * order, LANES).copy()
    assert factor_panel(panel, order) == -1
    stored = panel.reshape(order, order, LANES).transpose(2, 1, 0)
    lower = np.tril(stored, -1) + np.eye(order)
    upper = np.triu(stored, 1) + np.eye(order) / np.einsum("zii->zi", stored)[:, :, None]
    # each entry is a sum of at most `order` products, each rounded once or twice
    scale = np.abs(lower) @ np.abs(upper)
    assert np.all(np.abs(lower @ upper - blocks.transpose(2, 0, 1)) <= 3.0 * order * EPS * scale)
    rhs = np.ones((order, LANES))
    solve_panel(panel, rhs, order)
    residual = np.einsum("ijz,jz->iz", blocks, rhs) - 1.0
    magnitude = np.einsum("ijz,jz->iz", np.abs(blocks), np.abs(rhs))
    assert np.all(np.abs(residual) <= 10.0 * order * EPS * (magnitude + 1.0))


@pytest.mark.parametrize("fault", [0.0, -1.0, np.nan, np.inf])
@pytest.mark.parametrize("row", [0, 2, 4])
def test_reports_the_zone_of_a_bad_pivot(fault: float, row: int) -> None:
    blocks = dominant_blocks(5, 30, seed=7)
    blocks[:, :, 21] = np.eye(5)
    blocks[row, row, 21] = fault
    _, bad = factor_and_solve(blocks, np.ones((5, 30)))
    assert bad == 21


@pytest.mark.parametrize("entry", [(0, 4), (4, 0), (1, 2), (3, 1)])
def test_a_nan_anywhere_reaches_a_pivot(entry: tuple[int, int]) -> None:
    blocks = dominant_blocks(5, 11, seed=8)
    blocks[(*entry, 3)] = np.nan
    _, bad = factor_and_solve(blocks, np.ones((5, 11)))
    assert bad == 3

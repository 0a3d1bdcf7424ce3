"""Dense blocks, one small matrix a zone: factored and solved eight zones at once.

This module knows linear algebra on panels and nothing of physics, meshes or time.

A *panel* holds the matrices of eight zones interleaved: shape (N*N, 8), entry (row i, column j) of lane z
at ``panel[j * N + i, z]``, so that each step of the elimination is the same instruction on eight zones. The
right-hand side of a panel has shape (N, 8). A panel of 16 x 16 blocks takes 16 KB, half a first-level cache.

**Why no pivoting.** The blocks of implicit transport are M-matrices: off-diagonal entries are not positive
and each column is strictly dominated by its diagonal (see ``assembly``). Elimination preserves
both properties, partial pivoting would never exchange a row, and the growth factor stays below 2
(Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed., theorem 9.9 on diagonal dominance; from
memory). All pivots of such a matrix are positive, so :func:`factor_panel` reports any pivot that is
not: a zero, a negative number, an infinity or a NaN, which also shows a NaN anywhere in the block.

**Why a factorisation and not the inverse.** Applying either reads N*N numbers a zone. At N = 16 the two
triangular solves took 34-62 ns a zone (512-1024 zones) and the product with a stored inverse 35-47, but
Gauss-Jordan inversion needs three times the operations of the factorisation, which took 170 ns a zone.
"""

from __future__ import annotations

from breakstep.kernels.compiled import compiled, inlined  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Lanes = tuple[float, float, float, float, float, float, float, float]

LANES = 8
"""Zones a panel: two vectors of four doubles, or one of eight."""


@compiled
def load(a: Floats, row: int) -> Lanes:
    """Read the eight lanes of a row. All loads precede all stores, or nothing would vectorise."""
    return a[row, 0], a[row, 1], a[row, 2], a[row, 3], a[row, 4], a[row, 5], a[row, 6], a[row, 7]


@compiled
def store(a: Floats, row: int, v: Lanes) -> None:
    """Write the eight lanes of a row."""
    a[row, 0] = v[0]
    a[row, 1] = v[1]
    a[row, 2] = v[2]
    a[row, 3] = v[3]
    a[row, 4] = v[4]
    a[row, 5] = v[5]
    a[row, 6] = v[6]
    a[row, 7] = v[7]


@compiled
def times(x: Lanes, y: Lanes) -> Lanes:
    """Lanewise product."""
    return (
        x[0] * y[0],
        x[1] * y[1],
        x[2] * y[2],
        x[3] * y[3],
        x[4] * y[4],
        x[5] * y[5],
        x[6] * y[6],
        x[7] * y[7],
    )


@compiled
def minus(t: Lanes, x: Lanes, y: Lanes) -> Lanes:
    """Lanewise t - x * y."""
    return (
        t[0] - x[0] * y[0],
        t[1] - x[1] * y[1],
        t[2] - x[2] * y[2],
        t[3] - x[3] * y[3],
        t[4] - x[4] * y[4],
        t[5] - x[5] * y[5],
        t[6] - x[6] * y[6],
        t[7] - x[7] * y[7],
    )


@compiled
def plus(t: Lanes, x: Lanes, y: Lanes) -> Lanes:
    """Lanewise t + x * y."""
    return (
        t[0] + x[0] * y[0],
        t[1] + x[1] * y[1],
        t[2] + x[2] * y[2],
        t[3] + x[3] * y[3],
        t[4] + x[4] * y[4],
        t[5] + x[5] * y[5],
        t[6] + x[6] * y[6],
        t[7] + x[7] * y[7],
    )


@inlined
def _invert_pivot(panel: Floats, n: int, j: int) -> None:
    """Replace pivot j by its reciprocal and the entries below it by the multipliers."""
    for z in range(LANES):
        panel[j * n + j, z] = 1.0 / panel[j * n + j, z]
    reciprocal = load(panel, j * n + j)
    for i in range(j + 1, n):
        store(panel, j * n + i, times(load(panel, j * n + i), reciprocal))


@inlined
def _eliminate(panel: Floats, n: int, j: int) -> None:
    """Subtract from column j what the columns left of it contribute, two at a time.

    The pairs save loads and stores: 168 against 214 ns a zone at n = 16.
    """
    column = j * n
    for k in range(0, j - 1, 2):
        u = load(panel, column + k)
        v = minus(load(panel, column + k + 1), load(panel, k * n + k + 1), u)
        store(panel, column + k + 1, v)
        for i in range(k + 2, n):
            t = minus(load(panel, column + i), load(panel, k * n + i), u)
            store(panel, column + i, minus(t, load(panel, k * n + n + i), v))
    if j % 2 == 1:
        u = load(panel, column + j - 1)
        for i in range(j, n):
            store(panel, column + i, minus(load(panel, column + i), load(panel, column - n + i), u))


@compiled
def factor_panel(panel: Floats, n: int) -> int:
    """Factor a panel in place as L U, without pivoting; the diagonal then holds reciprocal pivots.

    Parameters
    ----------
    panel : ndarray, shape (n * n, 8)
    n : int
        Order of the blocks.

    Returns
    -------
    int
        The first lane with a pivot that is not positive and finite, or -1.
    """
    for j in range(n):
        _eliminate(panel, n, j)
        _invert_pivot(panel, n, j)
    return _first_bad_lane(panel, n)


@inlined
def _first_bad_lane(panel: Floats, n: int) -> int:
    """Count the good pivots, which has no branches, and look closer only when one is missing."""
    good = 0
    for j in range(n):
        for z in range(LANES):
            good += (panel[j * n + j, z] > 0.0) & (panel[j * n + j, z] < np.inf)
    bad = -1
    if good < n * LANES:
        for z in range(LANES - 1, -1, -1):
            for j in range(n):
                if not 0.0 < panel[j * n + j, z] < np.inf:
                    bad = z
    return bad


@compiled
def solve_panel(panel: Floats, rhs: Floats, n: int) -> None:
    """Solve with a factored panel; ``rhs``, shape (n, 8), becomes the solution."""
    _solve_lower(panel, rhs, n)
    _solve_upper(panel, rhs, n)


@inlined
def _solve_lower(panel: Floats, rhs: Floats, n: int) -> None:
    for h in range(0, n - 1, 2):
        u = load(rhs, h)
        v = minus(load(rhs, h + 1), load(panel, h * n + h + 1), u)
        store(rhs, h + 1, v)
        for g in range(h + 2, n):
            t = minus(load(rhs, g), load(panel, h * n + g), u)
            store(rhs, g, minus(t, load(panel, h * n + n + g), v))


@inlined
def _solve_upper(panel: Floats, rhs: Floats, n: int) -> None:
    for h in range(n - 1, 0, -2):
        u = times(load(rhs, h), load(panel, h * n + h))
        t = minus(load(rhs, h - 1), load(panel, h * n + h - 1), u)
        v = times(t, load(panel, h * n - n + h - 1))
        store(rhs, h, u)
        store(rhs, h - 1, v)
        for g in range(h - 1):
            t = minus(load(rhs, g), load(panel, h * n + g), u)
            store(rhs, g, minus(t, load(panel, h * n - n + g), v))
    if n % 2 == 1:
        store(rhs, 0, times(load(rhs, 0), load(panel, 0)))


@compiled
def factor_and_solve(matrices: Floats, rhs: Floats) -> tuple[Floats, int]:
    """Solve one dense system a zone, zones innermost.

    Parameters
    ----------
    matrices : ndarray, shape (N, N, n_zones)
        ``matrices[i, j, z]`` is entry (i, j) of zone z.
    rhs : ndarray, shape (N, n_zones)

    Returns
    -------
    solution : ndarray, shape (N, n_zones)
    bad_zone : int
        The first zone with a pivot that is not positive and finite, or -1.
    """
    n, n_zones = rhs.shape
    if n_zones < LANES:
        matrices, rhs = _widen(matrices, rhs)
    panel = np.empty((n * n, LANES))
    lanes = np.empty((n, LANES))
    solution = np.empty(rhs.shape)
    bad_zone = -1
    for nominal in range(0, n_zones, LANES):
        # The last panel overlaps its neighbour rather than being narrower: loops of fixed length vectorise.
        start = min(nominal, rhs.shape[1] - LANES)
        _gather(matrices, rhs, start, panel, lanes)
        bad = factor_panel(panel, n)
        if bad >= 0 and bad_zone < 0:
            bad_zone = start + bad
        solve_panel(panel, lanes, n)
        for g in range(n):
            for z in range(LANES):
                solution[g, start + z] = lanes[g, z]
    return solution[:, :n_zones].copy(), bad_zone


@compiled
def _gather(matrices: Floats, rhs: Floats, start: int, panel: Floats, lanes: Floats) -> None:
    """Copy eight zones into a panel."""
    n = rhs.shape[0]
    for j in range(n):
        for z in range(LANES):
            lanes[j, z] = rhs[j, start + z]
        for i in range(n):
            zones = matrices[i, j, start : start + LANES]
            for z in range(LANES):
                panel[j * n + i, z] = zones[z]


@compiled
def _widen(matrices: Floats, rhs: Floats) -> tuple[Floats, Floats]:
    """Fewer zones than lanes: add zones whose matrix is the identity."""
    n, n_zones = rhs.shape
    wide_matrices = np.zeros((n, n, LANES))
    wide_rhs = np.zeros((n, LANES))
    for j in range(n):
        wide_matrices[j, j] = 1.0
    wide_matrices[:, :, :n_zones] = matrices
    wide_rhs[:, :n_zones] = rhs
    return wide_matrices, wide_rhs

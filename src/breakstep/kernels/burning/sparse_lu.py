"""LU elimination of many small matrices that share one sparsity pattern, without pivoting.

The pattern is analysed once, in Python: a pivot order that keeps fill low (Markowitz), the positions of
all entries in one packed vector, and the elimination written out as index lists. The compiled part only
follows those lists, so a factorisation costs its multiplications and nothing else.

Index lists are unsigned: numba tests signed indices for Python's counting from the end, which costs a third
of the whole elimination here (14 x 14: 126 ns unsigned, 228 signed, dense 586).

Refuses to know what the matrix means. No pivoting at run time: the caller's matrix must have usable
diagonal pivots, as ``I/(gamma h) - J`` of a reaction network has for the sub-steps an error control
accepts. A zero pivot gives infinities or NaN, which the caller's error test must reject.
"""

from __future__ import annotations

from typing import NamedTuple

from breakstep.kernels.unmanaged import merged  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

Indices = NDArray[np.uint32]
Floats = NDArray[np.float64]


class Elimination(NamedTuple):
    """Index lists of one pattern's elimination; every index is into the packed vector or a right-hand side.

    ``pivot`` and the ``*_row``/``*_column`` lists hold original row numbers, so nothing is permuted at
    run time. Lists with ``start`` in their name delimit the others in compressed-row fashion.
    """

    pivot: Indices  # (n,) row eliminated at step k
    diagonal: Indices  # (n,) packed position of entry (i, i), by original row i
    lower_start: Indices  # (n + 1,) by step k, into lower_row and lower_entry
    lower_row: Indices  # rows below pivot k
    lower_entry: Indices  # packed position of (row, pivot k)
    update_start: Indices  # (n_lower + 1,) by lower entry, into update_target and update_source
    update_target: Indices  # packed position of (row, j)
    update_source: Indices  # packed position of (pivot k, j)
    upper_start: Indices  # (n + 1,) by step k, into upper_column and upper_entry
    upper_column: Indices
    upper_entry: Indices  # packed position of (pivot k, column)


def _pivot_order(pattern: NDArray[np.bool_]) -> tuple[list[int], NDArray[np.bool_]]:
    """Markowitz order on the diagonal, and the pattern with its fill; ties go to the lowest row."""
    filled = pattern | np.eye(len(pattern), dtype=bool)
    left = list(range(len(pattern)))
    order: list[int] = []
    while left:
        active = filled[np.ix_(left, left)]
        cost = (active.sum(axis=0) - 1) * (active.sum(axis=1) - 1)
        pivot = left.pop(int(np.argmin(cost)))
        order.append(pivot)
        rows = [i for i in left if filled[i, pivot]]
        columns = [j for j in left if filled[pivot, j]]
        filled[np.ix_(rows, columns)] = True
    return order, filled


def _index_list(values: list[int]) -> Indices:
    return np.array(values, dtype=np.uint32)


def analyse(pattern: NDArray[np.bool_]) -> tuple[NDArray[np.int64], Elimination]:
    """Choose the pivot order and write the elimination out.

    Parameters
    ----------
    pattern : ndarray of bool, shape (n, n)
        True where the matrix may be nonzero; the diagonal is always included.

    Returns
    -------
    positions : ndarray of int64, shape (n, n)
        Packed position of each entry of the filled pattern, -1 where there is none.
    elimination : Elimination
    """
    order, filled = _pivot_order(pattern)
    positions = np.full(filled.shape, -1, dtype=np.int64)
    positions[filled] = np.arange(int(filled.sum()))
    lower_start, lower_row, lower_entry = [0], [], []
    update_start, update_target, update_source = [0], [], []
    upper_start, upper_column, upper_entry = [0], [], []
    for step, pivot in enumerate(order):
        rest = order[step + 1 :]
        columns = [j for j in rest if filled[pivot, j]]
        for row in (i for i in rest if filled[i, pivot]):
            lower_row.append(row)
            lower_entry.append(int(positions[row, pivot]))
            update_target += [int(positions[row, j]) for j in columns]
            update_source += [int(positions[pivot, j]) for j in columns]
            update_start.append(len(update_target))
        lower_start.append(len(lower_row))
        upper_column += columns
        upper_entry += [int(positions[pivot, j]) for j in columns]
        upper_start.append(len(upper_column))
    lists = (order, np.diag(positions).tolist(), lower_start, lower_row, lower_entry, update_start)
    more = (update_target, update_source, upper_start, upper_column, upper_entry)
    return positions, Elimination(*map(_index_list, (*lists, *more)))


@merged
def factorise(elimination: Elimination, entries: Floats) -> None:
    """Overwrite the packed matrix by its factors: unit lower, upper, reciprocals on the diagonal."""
    for step in range(elimination.pivot.size):
        diagonal = elimination.diagonal[elimination.pivot[step]]
        reciprocal = 1.0 / entries[diagonal]
        entries[diagonal] = reciprocal
        for lower in range(elimination.lower_start[step], elimination.lower_start[step + 1]):
            position = elimination.lower_entry[lower]
            factor = entries[position] * reciprocal
            entries[position] = factor
            for update in range(elimination.update_start[lower], elimination.update_start[lower + 1]):
                target = elimination.update_target[update]
                entries[target] -= factor * entries[elimination.update_source[update]]


@merged
def solve(elimination: Elimination, factors: Floats, vector: Floats) -> None:
    """Overwrite ``vector``, shape (n,), by the solution, given the factors that `factorise` made."""
    n = elimination.pivot.size
    for step in range(n):
        value = vector[elimination.pivot[step]]
        for lower in range(elimination.lower_start[step], elimination.lower_start[step + 1]):
            vector[elimination.lower_row[lower]] -= factors[elimination.lower_entry[lower]] * value
    for step in range(n - 1, -1, -1):
        row = elimination.pivot[step]
        value = vector[row]
        for upper in range(elimination.upper_start[step], elimination.upper_start[step + 1]):
            value -= factors[elimination.upper_entry[upper]] * vector[elimination.upper_column[upper]]
        vector[row] = value * factors[elimination.diagonal[row]]

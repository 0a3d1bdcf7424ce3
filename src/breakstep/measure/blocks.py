"""Dense blocks, one a zone: the compiled elimination beside numpy's batched solver."""

from __future__ import annotations

import numpy as np

from breakstep.errors import KernelError
from breakstep.kernels.transport.blocks import factor_and_solve
from breakstep.measure.states import Array
from breakstep.measure.timing import Effort, Row, Work, ratio, take_turns

ORDERS = (8, 16, 32)
BLOCKS = 1024  # a tile of 32 x 32 zones
NEEDED = {16: 4.0}  # what elimination of eight zones at once must gain over one at a time
# Columns sum to 1 and the inverse is not negative, so its 1-norm is 1 and the condition number at most 2 N.
# Both solvers are backward stable: 10 N times condition number and unit roundoff is 2e-12 at N = 32.
_AGREEMENT = 1e-11


def dominant_blocks(order: int, count: int) -> Array:
    """Strictly column-dominant M-matrices, as implicit transport makes them, shape (order, order, count)."""
    blocks = -np.random.default_rng(order).random((order, order, count))
    diagonal = np.arange(order)
    blocks[diagonal, diagonal] = 0.0
    blocks[diagonal, diagonal] = 1.0 - blocks.sum(axis=0)
    return blocks


def operations(order: int) -> int:
    """Floating-point operations of one factorisation and the two triangular solves."""
    factor = sum(m + 2 * m * m for m in range(order)) + order
    return factor + 2 * order * order - order


def block_rows(effort: Effort) -> list[Row]:
    """Microseconds a block of order N, and what that is over N^2, the numbers that a block holds."""
    return [_row(order, effort) for order in ORDERS]


def _row(order: int, effort: Effort) -> Row:
    blocks, sources = dominant_blocks(order, BLOCKS), np.ones((order, BLOCKS))
    works = _works(blocks, sources)
    samples = take_turns(works, effort)
    ours, theirs = (1e6 * min(samples[who]) / BLOCKS for who in works)
    details = {
        "order": order,
        "ns_over_order_squared": 1e3 * ours / order**2,
        "operations_over_order_squared": operations(order) / order**2,
        "gflop_s": 1e-3 * operations(order) / ours,
    }
    spread = ratio(samples, "numpy", "ours")
    return Row(f"N = {order}", ours, theirs, spread, NEEDED.get(order), details=details)


def _works(blocks: Array, sources: Array) -> dict[str, Work]:
    """Each in the order of memory that suits it; bringing them there does not count."""
    rows = np.ascontiguousarray(blocks.transpose(2, 0, 1))
    columns = np.ascontiguousarray(sources.T[:, :, None])
    ours, bad = factor_and_solve(blocks, sources)
    theirs = np.linalg.solve(rows, columns)[:, :, 0].T
    if bad >= 0 or not np.allclose(ours, theirs, rtol=_AGREEMENT, atol=0.0):
        raise KernelError("the compiled elimination and numpy's solver differ; run the tests of the blocks")
    return {
        "ours": lambda: factor_and_solve(blocks, sources),
        "numpy": lambda: np.linalg.solve(rows, columns),
    }

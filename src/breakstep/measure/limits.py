"""What the machine itself can do on one thread: how fast memory answers, how fast it multiplies.

Other figures are read against these. Knows no kernel of physics.
"""

from __future__ import annotations

import os

from breakstep.kernels.compiled import compiled  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

from breakstep.measure.timing import Effort, Work, take_turns

Array = NDArray[np.float64]

MEMORY_NUMBERS = 1 << 23  # 64 MB an array, three of them: more than a last-level cache holds
CACHE_NUMBERS = 1 << 14  # 128 KB an array: three fit into most second-level caches
MATRIX_ORDER = 512  # large enough for a matrix product to reach its rate, small enough to take milliseconds


@compiled
def _triad(first: Array, second: Array, factor: float, target: Array) -> None:
    for i in range(target.size):
        target[i] = first[i] + factor * second[i]


def _triad_work(numbers: int) -> Work:
    first, second, target = np.ones(numbers), np.ones(numbers), np.ones(numbers)
    return lambda: _triad(first, second, 3.0, target)


def _product_work(order: int) -> Work:
    left, right = np.random.default_rng(1).random((2, order, order))
    target = np.empty((order, order))
    return lambda: np.matmul(left, right, out=target)


def cores() -> int:
    """How many cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def machine_limits(effort: Effort) -> dict[str, float]:
    """Cores; triad [GB/s], counting two reads and one write a number; matrix product [Gflop/s].

    The caller holds the linear algebra library to one thread.
    """
    works = {"memory": _triad_work(MEMORY_NUMBERS), "cache": _triad_work(CACHE_NUMBERS)}
    samples = take_turns({**works, "product": _product_work(MATRIX_ORDER)}, effort)
    best = {name: min(seconds) for name, seconds in samples.items()}
    return {
        "cores": cores(),
        "triad_memory_gb_s": 24e-9 * MEMORY_NUMBERS / best["memory"],
        "triad_cache_gb_s": 24e-9 * CACHE_NUMBERS / best["cache"],
        "matrix_product_order": MATRIX_ORDER,
        "matrix_product_gflop_s": 2e-9 * MATRIX_ORDER**3 / best["product"],
    }

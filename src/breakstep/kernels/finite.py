"""Finding numbers that are not finite, fast enough to check every array that every kernel makes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.compiled import compiled

_BLOCK = 4096


@compiled
def first_not_finite(flat: NDArray[np.float64]) -> int:
    """Index of the first NaN or infinity in a flat array, or -1.

    Sums blocks of ``x * 0`` (NaN for a number that is not finite, else 0), which vectorises, and looks
    closer only at a block that fails.
    """
    n = flat.size
    for start in range(0, n, _BLOCK):
        stop = min(start + _BLOCK, n)
        s0 = s1 = s2 = s3 = 0.0
        body = start + (stop - start) // 4 * 4
        for i in range(start, body, 4):
            s0 += flat[i] * 0.0
            s1 += flat[i + 1] * 0.0
            s2 += flat[i + 2] * 0.0
            s3 += flat[i + 3] * 0.0
        for i in range(body, stop):
            s0 += flat[i] * 0.0
        if (s0 + s1) + (s2 + s3) != 0.0 or np.isnan((s0 + s1) + (s2 + s3)):
            for i in range(start, stop):
                if not np.isfinite(flat[i]):
                    return i
    return -1

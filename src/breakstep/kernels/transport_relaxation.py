"""Block relaxation by colour: solve each zone's block with its neighbours frozen, red zones then black.

This module knows factored blocks and couplings to neighbours; it refuses to know where they come from and
where the rim of the tile was fetched.
"""

from __future__ import annotations

from breakstep.kernels.compiled import compiled, inlined  # isort: skip  (must precede numba)

import numpy as np

from breakstep.kernels.blocks import LANES, solve_panel
from breakstep.kernels.transport_layout import (
    Extent,
    Floats,
    Integers,
    checkerboard,
    load_last_panel,
    rim_strides,
    whole_panels,
)


@inlined
def _right_side(
    right: Floats, rhs: Floats, bands: Floats, state: Floats, zones: Integers, places: Integers, steps: Integers
) -> None:
    """Right-hand sides of eight zones: what is given plus what flows in from the neighbours."""
    n = rhs.shape[0]
    for g in range(n):
        for z in range(LANES):
            right[g, z] = rhs[g, zones[z]]
        for m in range(steps.size):
            low = 2 * m * n + g
            for z in range(LANES):
                zone = zones[z]
                place = places[z]
                right[g, z] += (
                    bands[low, zone] * state[g, place - steps[m]]
                    + bands[low + n, zone] * state[g, place + steps[m]]
                )


@inlined
def _update(
    state: Floats, solved: Floats, places: Integers, first: int, last: int, omega: float, peaks: Floats
) -> None:
    """Move the zones in lanes first .. last - 1 towards their solution; keep the largest correction."""
    for g in range(solved.shape[0]):
        for z in range(first, last):
            old = state[g, places[z]]
            correction = solved[g, z] - old
            state[g, places[z]] = old + omega * correction
            size = abs(correction)
            peaks[z] = size if size > peaks[z] else peaks[z]


@compiled
def relax_flat(
    state: Floats,
    blocks: Floats,
    bands: Floats,
    rhs: Floats,
    extent: Extent,
    n_axes: int,
    odd_first: int,
    passes: int,
    omega: float,
) -> float:
    """Update ``state`` (with rim, shape (G, n_rim)) in place; return the largest correction."""
    n, n_zones = rhs.shape
    zones, places, n_even = checkerboard(extent, n_axes)
    s0, s1, _, _ = rim_strides(extent, n_axes)
    steps = np.array([s0, s1, 1])[3 - n_axes :]
    panels = whole_panels(blocks, n * n)
    last_panel = load_last_panel(blocks, n * n, n)
    right = np.empty((n, LANES))
    peaks = np.zeros(LANES)
    for p in range(passes):
        start, stop = (n_even, n_zones) if (odd_first + p) % 2 == 1 else (0, n_even)
        for q in range(start // LANES, (stop + LANES - 1) // LANES):
            panel = panels[q] if q < panels.shape[0] else last_panel
            _right_side(right, rhs, bands, state, zones[q], places[q], steps)
            solve_panel(panel, right, n)
            first = max(start - q * LANES, 0)
            last = min(stop - q * LANES, LANES)
            _update(state, right, places[q], first, last, omega, peaks)
    return peaks.max()

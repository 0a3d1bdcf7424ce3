"""Block relaxation by colour: solve each zone's block with its neighbours frozen, red zones then black.

This module knows a factored system in panel order; it refuses to know what the unknowns mean and how the
halo of the tile was filled.
"""

from __future__ import annotations

from breakstep.kernels.compiled import compiled, inlined  # isort: skip  (must precede numba)

import numpy as np

from breakstep.kernels.transport.blocks import LANES, Lanes, load, plus, solve_panel, store
from breakstep.kernels.transport.layout import (
    Extent,
    Floats,
    Integers,
    checkerboard,
    halo_strides,
    load_last_panel,
    panel_rows,
    whole_panels,
)

Places = tuple[int, int, int, int, int, int, int, int]


@inlined
def _shifted(places: Integers, q: int, step: int) -> Places:
    """Places of the neighbours of the eight zones of a panel."""
    return (
        places[q, 0] + step,
        places[q, 1] + step,
        places[q, 2] + step,
        places[q, 3] + step,
        places[q, 4] + step,
        places[q, 5] + step,
        places[q, 6] + step,
        places[q, 7] + step,
    )


@inlined
def _collect(state: Floats, g: int, at: Places) -> Lanes:
    """Read one group at eight places."""
    return (
        state[g, at[0]],
        state[g, at[1]],
        state[g, at[2]],
        state[g, at[3]],
        state[g, at[4]],
        state[g, at[5]],
        state[g, at[6]],
        state[g, at[7]],
    )


@inlined
def _right_side(right: Floats, panel: Floats, state: Floats, places: Integers, q: int, steps: Integers) -> None:
    """Right-hand sides of eight zones: what is given plus what flows in from the neighbours."""
    n = right.shape[0]
    for g in range(n):
        store(right, g, load(panel, n * n + g))
    for m in range(steps.size):
        low = _shifted(places, q, -steps[m])
        high = _shifted(places, q, steps[m])
        row = n * n + n + 2 * m * n
        for g in range(n):
            t = plus(load(right, g), load(panel, row + g), _collect(state, g, low))
            store(right, g, plus(t, load(panel, row + n + g), _collect(state, g, high)))


@inlined
def _update(
    state: Floats,
    solved: Floats,
    places: Integers,
    q: int,
    first: int,
    last: int,
    omega: float,
    peaks: Floats,
) -> None:
    """Move the zones in lanes first .. last - 1 towards their solution; keep the largest correction."""
    for g in range(solved.shape[0]):
        for z in range(first, last):
            old = state[g, places[q, z]]
            correction = solved[g, z] - old
            state[g, places[q, z]] = old + omega * correction
            size = abs(correction)
            peaks[z] = size if size > peaks[z] else peaks[z]


@compiled
def relax_flat(
    state: Floats,
    system: Floats,
    extent: Extent,
    n_axes: int,
    odd_first: int,
    passes: int,
    omega: float,
) -> float:
    """Update ``state``, shape (G, n_with_halo), in place; return the largest correction (NaN is not seen)."""
    n = state.shape[0]
    n_zones = extent[0] * extent[1] * extent[2]
    rows = panel_rows(n, n_axes)
    _, places, n_even = checkerboard(extent, n_axes)
    s0, s1, s2, _ = halo_strides(extent, n_axes)
    steps = np.array([s0, s1, s2])[3 - n_axes :]
    panels = whole_panels(system, rows)
    last_panel = load_last_panel(system, rows, n)
    right = np.empty((n, LANES))
    peaks = np.zeros(LANES)
    for p in range(passes):
        start, stop = (n_even, n_zones) if (odd_first + p) % 2 == 1 else (0, n_even)
        for q in range(start // LANES, (stop + LANES - 1) // LANES):
            panel = panels[q] if q < panels.shape[0] else last_panel
            _right_side(right, panel, state, places, q, steps)
            solve_panel(panel, right, n)
            first = max(start - q * LANES, 0)
            last = min(stop - q * LANES, LANES)
            _update(state, right, places, q, first, last, omega, peaks)
    return float(peaks.max())


@compiled
def inner_zones(state: Floats, extent: Extent, n_axes: int) -> tuple[Floats, float]:
    """Drop the halo; also the largest absolute value, NaN if any value is not finite.

    Maxima and NaN are gathered position by position along a row, so that the loop vectorises.
    """
    s0, s1, _, first = halo_strides(extent, n_axes)
    width = extent[2]
    inner = np.empty((state.shape[0], extent[0] * extent[1] * width))
    largest = np.zeros(width)
    poison = np.zeros(width)
    for g in range(state.shape[0]):
        for i in range(extent[0]):
            for j in range(extent[1]):
                place = first + i * s0 + j * s1
                start = (i * extent[1] + j) * width
                _copy_row(state[g, place : place + width], inner[g, start : start + width], largest, poison)
    return inner, largest.max() + poison.sum()


@inlined
def _copy_row(source: Floats, target: Floats, largest: Floats, poison: Floats) -> None:
    for k in range(target.size):
        value = source[k]
        size = abs(value)
        target[k] = value
        largest[k] = size if size > largest[k] else largest[k]
        poison[k] += value * 0.0

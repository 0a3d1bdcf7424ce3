"""Where the zones of a tile lie in flat arrays: rims, checkerboard colours, panels of eight zones.

This module knows index arithmetic and refuses to know what the numbers mean.

Kernels of implicit transport see a tile through two numbers. ``extent`` is its shape in zones with the
absent axes moved to the front, ``(1, 1, nx)``, ``(1, nx, ny)`` or ``(nx, ny, nz)``, which leaves the memory
of a C-contiguous array as it is and makes the innermost loops long. ``n_axes`` counts the axes present:
the last ``n_axes`` of the three. Arrays with a rim are one zone wider on both sides of each of those.

**Panel order.** Factored blocks are only ever read zone colour by zone colour, and each pass is bound by
that read. So they are stored in the order in which a pass wants them: first the zones with an even sum
of indices within the tile, then the odd ones, in panels of eight as ``blocks`` describes; the last panel
holds what is left. Reading every second zone of an array in mesh order would fetch each byte twice.
"""

from __future__ import annotations

from breakstep.kernels.compiled import compiled, inlined  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.blocks import LANES, identity_panel

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Extent = tuple[int, int, int]


@inlined
def rim_strides(extent: Extent, n_axes: int) -> tuple[int, int, int, int]:
    """Strides of a flat array with a rim, and the position of the first inner zone in it."""
    s1 = extent[2] + 2
    s0 = s1 * (extent[1] + 2) if n_axes > 1 else s1
    first = 1
    if n_axes > 1:
        first += s1
    if n_axes > 2:
        first += s0
    return s0, s1, 1, first


@compiled
def checkerboard(extent: Extent, n_axes: int) -> tuple[Integers, Integers, int]:
    """The zones of a tile in panel order.

    Returns
    -------
    zones, places : ndarray of int64, shape (n_panels, 8)
        Flat index of each zone, and its place in arrays with a rim. Lanes beyond the last zone repeat it.
    n_even : int
        How many zones have an even sum of indices; they come first.
    """
    n_zones = extent[0] * extent[1] * extent[2]
    n_panels = (n_zones + LANES - 1) // LANES
    zones = np.empty(n_panels * LANES, np.int64)
    places = np.empty(n_panels * LANES, np.int64)
    s0, s1, _, first = rim_strides(extent, n_axes)
    count = 0
    n_even = 0
    for parity in range(2):
        for i in range(extent[0]):
            for j in range(extent[1]):
                for k in range((parity + i + j) % 2, extent[2], 2):
                    zones[count] = (i * extent[1] + j) * extent[2] + k
                    places[count] = first + i * s0 + j * s1 + k
                    count += 1
        if parity == 0:
            n_even = count
    zones[n_zones:] = zones[n_zones - 1]
    places[n_zones:] = places[n_zones - 1]
    return zones.reshape(n_panels, LANES), places.reshape(n_panels, LANES), n_even


@inlined
def whole_panels(blocks: Floats, entries: int) -> Floats:
    """View the full panels of flat storage as (n_full, entries, 8)."""
    n_full = blocks.size // (entries * LANES)
    return blocks[: n_full * entries * LANES].reshape(n_full, entries, LANES)


@compiled
def load_last_panel(blocks: Floats, entries: int, n: int) -> Floats:
    """Widen the panel that is left over to eight lanes; lanes without a zone get the identity."""
    panel = np.empty((entries, LANES))
    identity_panel(panel, n)
    start = blocks.size // (entries * LANES) * entries * LANES
    width = (blocks.size - start) // entries
    panel[:, :width] = blocks[start:].reshape(entries, width)
    return panel


@compiled
def store_last_panel(blocks: Floats, panel: Floats) -> None:
    """Store the panel that is left over as narrow as it is."""
    entries = panel.shape[0]
    start = blocks.size // (entries * LANES) * entries * LANES
    width = (blocks.size - start) // entries
    blocks[start:].reshape(entries, width)[:] = panel[:, :width]

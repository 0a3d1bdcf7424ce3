"""Where the zones of a tile lie in flat arrays: halos, checkerboard colours, panels of eight zones.

This module knows index arithmetic and refuses to know what the numbers mean.

Kernels of implicit transport see a tile through two numbers. ``extent`` is its shape in zones with the
absent axes moved to the front, ``(1, 1, nx)``, ``(1, nx, ny)`` or ``(nx, ny, nz)``, which leaves the memory
of a C-contiguous array as it is and makes the innermost loops long. ``n_axes`` counts the axes present:
the last ``n_axes`` of the three. Arrays with a halo are one zone wider on both sides of each of those.

**Panel order.** The linear system of a tile is only ever read one zone colour at a time, and each pass is
bound by that read. So it is stored in the order in which a pass wants it: first the zones with an even sum
of indices within the tile, then the odd ones, in panels of eight, all numbers of a panel together. A row of
a panel is one number of eight zones; its rows are, for G groups,

    G * G             the factored block, column by column, as ``blocks`` describes
    G                 the right-hand side
    2 * n_axes * G    the couplings to the neighbours: low face, high face, axis by axis

The last panel holds the zones that are left and is as narrow as they are few, so the size is exactly that
of a field with ``G * (G + 1 + 2 * n_axes)`` components. Reading every second zone of an array in mesh order
would fetch each byte twice; with the couplings and right-hand side in mesh order, a pass took 133 ns a
zone instead of 115 in two dimensions and 168 instead of 131 in three (G = 16, 1024 zones).
"""

from __future__ import annotations

from breakstep.kernels.compiled import compiled, inlined  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

from breakstep.errors import KernelError
from breakstep.kernels.transport.blocks import LANES

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Extent = tuple[int, int, int]
Axes = tuple[int, ...]


@inlined
def halo_strides(extent: Extent, n_axes: int) -> tuple[int, int, int, int]:
    """Strides of a flat array with a halo, and the position of the first inner zone in it."""
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
        Flat index of each zone, and its place in arrays with a halo. Lanes beyond the last zone repeat it.
    n_even : int
        How many zones have an even sum of indices; they come first.
    """
    n_zones = extent[0] * extent[1] * extent[2]
    n_panels = (n_zones + LANES - 1) // LANES
    zones = np.empty(n_panels * LANES, np.int64)
    places = np.empty(n_panels * LANES, np.int64)
    s0, s1, _, first = halo_strides(extent, n_axes)
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
def panel_rows(n_groups: int, n_axes: int) -> int:
    """Numbers a zone in the stored system."""
    return n_groups * (n_groups + 1 + 2 * n_axes)


@inlined
def whole_panels(system: Floats, rows: int) -> Floats:
    """View the full panels of flat storage as (n_full, rows, 8)."""
    n_full = system.size // (rows * LANES)
    return system[: n_full * rows * LANES].reshape(n_full, rows, LANES)


@compiled
def load_last_panel(system: Floats, rows: int, n_groups: int) -> Floats:
    """Widen the panel that is left over to eight lanes; lanes without a zone get the identity."""
    panel = np.zeros((rows, LANES))
    for g in range(n_groups):
        panel[g * n_groups + g] = 1.0
    start = system.size // (rows * LANES) * rows * LANES
    width = (system.size - start) // rows
    panel[:, :width] = system[start:].reshape(rows, width)
    return panel


@compiled
def store_last_panel(system: Floats, panel: Floats) -> None:
    """Store the panel that is left over as narrow as it is."""
    rows = panel.shape[0]
    start = system.size // (rows * LANES) * rows * LANES
    width = (system.size - start) // rows
    system[start:].reshape(rows, width)[:] = panel[:, :width]


def tile_extent(shape: tuple[int, ...], axes: Axes) -> tuple[Extent, int]:
    """Extent with the absent axes first; raises KernelError if an absent axis has more than one zone."""
    absent = [a for a in range(3) if a not in axes]
    if not axes or list(axes) != sorted(set(axes)) or any(shape[a] != 1 for a in absent):
        raise KernelError(
            f"radiation transport expects ascending axes of 0, 1, 2 and extent 1 along all others; "
            f"got axes {axes} for zones {shape}. Name every axis along which the mesh has zones.",
            axes=axes,
            shape=shape,
        )
    extent = (1,) * len(absent) + tuple(shape[a] for a in axes)
    return (extent[0], extent[1], extent[2]), len(axes)


def inner_shape(shape: tuple[int, ...], axes: Axes) -> tuple[int, ...]:
    """Shape without the halo."""
    return tuple(n - 2 if a in axes else n for a, n in enumerate(shape))


def in_extent_order(spacing: tuple[float, float, float], axes: Axes) -> tuple[float, float, float]:
    """tuple[float, float, float] in the order of the extent."""
    ordered = (1.0,) * (3 - len(axes)) + tuple(float(spacing[a]) for a in axes)
    return ordered[0], ordered[1], ordered[2]


def frozen(array: Floats) -> Floats:
    """A read-only view. One mutability means one compiled version, whoever sent the array."""
    view = array.view()
    view.flags.writeable = False
    return view


def flat(array: Floats) -> Floats:
    """A read-only view of shape (n_components, n_zones)."""
    return frozen(array.reshape(array.shape[0], -1))

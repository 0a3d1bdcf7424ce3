"""What the matter receives: the radiation's own balance, zone by zone, whatever the solver left over.

This module knows radiation before and after the step and the flows between; it refuses to know opacities.
"""

from __future__ import annotations

from breakstep.kernels.compiled import compiled, inlined  # isort: skip  (must precede numba)

import numpy as np

from breakstep.kernels.transport.layout import Extent, Floats, halo_strides
from breakstep.kernels.transport.matter import internal_energy


@compiled
def gain_flat(radiation: Floats, old: Floats, bands: Floats, deposit: Floats, extent: Extent, n_axes: int) -> Floats:
    """``energy_gain`` on flat arrays. Adds group by group, axis by axis, low face then high face."""
    n = old.shape[0]
    strides = halo_strides(extent, n_axes)
    gain = np.zeros(old.shape[1])
    for g in range(n):
        for i in range(extent[0]):
            for j in range(extent[1]):
                place = strides[3] + i * strides[0] + j * strides[1]
                start = (i * extent[1] + j) * extent[2]
                stop = start + extent[2]
                row = gain[start:stop]
                _add_loss(row, old[g, start:stop], radiation[g], place, deposit[g, start:stop])
                for m in range(n_axes):
                    step = strides[3 - n_axes + m]
                    low = bands[2 * m * n + g, start:stop]
                    high = bands[(2 * m + 1) * n + g, start:stop]
                    _add_inflow(row, low, radiation[g], place, -step)
                    _add_inflow(row, high, radiation[g], place, step)
    return gain


@inlined
def _add_loss(gain: Floats, old: Floats, new: Floats, place: int, deposit: Floats) -> None:
    here = new[place : place + gain.size]
    for k in range(gain.size):
        gain[k] += (old[k] - here[k]) + deposit[k]


@inlined
def _add_inflow(gain: Floats, coupling: Floats, energy: Floats, place: int, step: int) -> None:
    here = energy[place : place + gain.size]
    there = energy[place + step : place + step + gain.size]
    for k in range(gain.size):
        gain[k] += coupling[k] * (there[k] - here[k])


@compiled
def first_not_positive(gas: Floats) -> int:
    """The first zone whose internal energy density is not positive, or -1."""
    for z in range(gas.shape[1]):
        if not internal_energy(gas, z) > 0.0:
            return z
    return -1

"""The scratch of one hydrodynamics sweep: which row holds what.

A chunk of zones is a flat run of ``count`` positions in which the two neighbours along the sweep axis lie
``step`` positions below and above, whatever the axis; so every loop runs over contiguous memory with one
constant distance, and vectorises for all three axes. The first and last two neighbours of a line are halo.
Where a chunk holds several lines end to end, faces between the end of one line and the start of the next
are computed and never used.

Scratch is one vector of rows. Row numbers and ``ROW`` are compile-time constants, because the vectoriser
can then tell that two rows do not overlap; loops that read one row at two distances take slices.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from breakstep.kernels.compiled import inlined

Array = npt.NDArray[np.float64]

HALO = 2
"""Neighbours read on each side along the sweep axis: one for the limiter, one for the far face."""

ROW = 544
"""Positions in a row: 30 lines of 16 columns with their halo, or eight lines of 64 zones with theirs.
With 5 species the scratch takes 250 KB; half or twice as much costs the same within the noise."""

# Of each zone. Momentum and velocity in the order normal, first transverse, second transverse.
DENSITY, MOMENTUM, ENERGY = 0, 1, 4
VELOCITY, PRESSURE, INTERNAL = 5, 8, 9  # internal energy density
GAMMA1, INVERSE, SPEED = 10, 11, 12  # INVERSE is 1 / density, SPEED is |u| + c
ABAR, ZBAR, FRACTIONS = 13, 14, 15  # FRACTIONS is their sum over the species
SOUND_BEFORE, SOUND_AFTER = 16, 48  # 1.0 where the state is one the scheme can use
# Of each zone, six rows each: density, velocity (3), pressure, internal energy.
DIFFERENCE, UPPER, LOWER = 17, 23, 29  # limited differences; states at the upper and the lower face
# Weights that a difference has at the upper and the lower face; 0 where the zone keeps its mean, else 1.
TO_UPPER, TO_LOWER, KEEP = 35, 36, 37
# Of the face above each zone: 5 fluxes, speed of the middle wave; for the species the sum of their fractions,
# what it should be, the species' fluxes over their fractions, and the weight of the upwind difference.
FLUX, MIDDLE, FACE_SUM, FACE_TOTAL, SHARE, UPWIND = 38, 43, 44, 45, 46, 47
SPECIES = 49
"""First row of the species: one row each for the zones, then one each for the faces."""


@inlined
def part(scratch: Array, row: int, start: int, count: int) -> Array:
    """``count`` positions of a row, from ``start``."""
    return scratch[row * ROW + start : row * ROW + start + count]


@inlined
def scratch_for(species: int) -> Array:
    """Scratch for one call, never shared between threads."""
    return np.empty((SPECIES + 2 * species) * ROW)

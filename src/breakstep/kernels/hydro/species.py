"""The loops of a sweep over one chunk: the species.

A species' flux is the mass flux times its fraction on the upwind side of the middle wave. Fractions are
limited one by one, so at a face they need not sum to what they sum to in the zones; they are therefore
scaled so that their sum is the sum reconstructed in its own right, which is 1 where fractions sum to 1
(Plewa & Mueller 1999, Astron. Astrophys. 342, 179). Then species fluxes sum to the mass flux, to round-off.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from breakstep.kernels.compiled import compiled
from breakstep.kernels.hydro.gas import row_differences
from breakstep.kernels.hydro.rows import (
    ABAR,
    DIFFERENCE,
    FACE_SUM,
    FACE_TOTAL,
    FLUX,
    FRACTIONS,
    INVERSE,
    MIDDLE,
    ROW,
    SHARE,
    SPECIES,
    TO_LOWER,
    TO_UPPER,
    UPWIND,
    ZBAR,
    part,
)

Array = npt.NDArray[np.float64]


@compiled
def mean_nuclei(s: Array, count: int, mass_numbers: Array, charges: Array) -> None:
    """Mean mass number and charge from partial densities, by the operations of ``eos.mean_nuclear``."""
    mass, nuclei, electrons = part(s, FRACTIONS, 0, count), part(s, ABAR, 0, count), part(s, ZBAR, 0, count)
    start = 1.0 if mass_numbers.size == 0 else 0.0
    mass[:] = start
    nuclei[:] = start
    electrons[:] = start
    for k in range(mass_numbers.size):
        partial = part(s, SPECIES + k, 0, count)
        for i in range(count):
            moles = partial[i] / mass_numbers[k]
            mass[i] += partial[i]
            nuclei[i] += moles
            electrons[i] += moles * charges[k]
    for i in range(count):
        electrons[i] = electrons[i] / nuclei[i]
        nuclei[i] = mass[i] / nuclei[i]


@compiled
def fractions(s: Array, count: int, species: int) -> None:
    """Turn partial densities into mass fractions, in place, and sum these."""
    total, inverse = part(s, FRACTIONS, 0, count), part(s, INVERSE, 0, count)
    total[:] = 0.0
    for k in range(species):
        fraction = part(s, SPECIES + k, 0, count)
        for i in range(count):
            fraction[i] = fraction[i] * inverse[i]
            total[i] += fraction[i]


@compiled
def upwind_weights(s: Array, step: int, count: int) -> None:
    """Weight that the upwind zone's difference has at the face above each zone."""
    next_lower = part(s, TO_LOWER, step, count - step)
    for i in range(count - step):
        from_below, from_above = s[TO_UPPER * ROW + i], next_lower[i]
        s[UPWIND * ROW + i] = from_below if s[MIDDLE * ROW + i] >= 0.0 else from_above


@compiled
def _upwind(s: Array, row: int, out: int, step: int, count: int) -> None:
    """Value of an advected row at the face above each zone, which is also added to ``FACE_SUM``."""
    row_differences(s, row, DIFFERENCE, step, count)
    faces = count - step
    below, above = part(s, row, 0, faces), part(s, row, step, faces)
    difference_above, face = part(s, DIFFERENCE, step, faces), part(s, out, 0, faces)
    for i in range(faces):
        # Both candidates are computed before one is chosen: a choice of loads does not vectorise.
        weight = s[UPWIND * ROW + i]
        from_below = below[i] + weight * s[DIFFERENCE * ROW + i]
        from_above = above[i] + weight * difference_above[i]
        value = from_below if s[MIDDLE * ROW + i] >= 0.0 else from_above
        face[i] = value
        s[FACE_SUM * ROW + i] += value


@compiled
def face_fractions(s: Array, step: int, count: int, species: int) -> None:
    """Fractions at the face above each zone, and the factor that turns them into species fluxes."""
    faces = count - step
    upwind_weights(s, step, count)
    _upwind(s, FRACTIONS, FACE_TOTAL, step, count)
    part(s, FACE_SUM, 0, faces)[:] = 0.0
    for k in range(species):
        _upwind(s, SPECIES + k, SPECIES + species + k, step, count)
    for i in range(faces):
        scale = s[FACE_TOTAL * ROW + i] / s[FACE_SUM * ROW + i]
        s[SHARE * ROW + i] = s[FLUX * ROW + i] * (scale if s[FACE_SUM * ROW + i] > 0.0 else 1.0)


@compiled
def species_changes(s: Array, step: int, count: int, species: int, courant: float) -> None:
    """Replace the fractions by the changes of the partial densities over the time step."""
    both = count - 2 * step
    share_below, share_above = part(s, SHARE, 0, both), part(s, SHARE, step, both)
    for k in range(species):
        below, above = part(s, SPECIES + species + k, 0, both), part(s, SPECIES + species + k, step, both)
        change = part(s, SPECIES + k, step, both)
        for i in range(both):
            change[i] = courant * (share_below[i] * below[i] - share_above[i] * above[i])

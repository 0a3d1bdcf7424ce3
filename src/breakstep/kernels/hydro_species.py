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
from breakstep.kernels.hydro_rows import (
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
    ZBAR,
    part,
)
from breakstep.kernels.riemann import limited_difference

Array = npt.NDArray[np.float64]

# The differences of the gas are no longer needed when species are advected.
_AT_UPPER = DIFFERENCE
_AT_LOWER = DIFFERENCE + 1


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
def _upwind(s: Array, row: int, out: int, step: int, count: int) -> None:
    """Value of an advected row at the face above each zone."""
    both = count - 2 * step
    below, here, above = part(s, row, 0, both), part(s, row, step, both), part(s, row, 2 * step, both)
    to_upper, to_lower = part(s, TO_UPPER, step, both), part(s, TO_LOWER, step, both)
    at_upper, at_lower = part(s, _AT_UPPER, step, both), part(s, _AT_LOWER, step, both)
    for i in range(both):
        difference = limited_difference(below[i], here[i], above[i])
        at_upper[i] = here[i] + to_upper[i] * difference
        at_lower[i] = here[i] + to_lower[i] * difference
    face, next_lower = part(s, out, 0, count - step), part(s, _AT_LOWER, step, count - step)
    for i in range(count - step):
        face[i] = s[_AT_UPPER * ROW + i] if s[MIDDLE * ROW + i] >= 0.0 else next_lower[i]


@compiled
def face_fractions(s: Array, step: int, count: int, species: int) -> None:
    """Fractions at the face above each zone, and the factor that turns them into species fluxes."""
    faces = count - step
    total = part(s, FACE_SUM, 0, faces)
    total[:] = 0.0
    for k in range(species):
        _upwind(s, SPECIES + k, SPECIES + species + k, step, count)
        fraction = part(s, SPECIES + species + k, 0, faces)
        for i in range(faces):
            total[i] += fraction[i]
    _upwind(s, FRACTIONS, FACE_TOTAL, step, count)
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

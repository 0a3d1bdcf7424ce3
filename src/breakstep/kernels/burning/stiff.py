"""A stiff integrator for one zone: Rosenbrock sub-steps of adaptive size under an error control.

Each sub-step solves six linear systems with one sparse factorisation of I / (gamma h) - J and judges
itself by the difference of two embedded solutions. Work is counted, so that cost can be told without a
clock. The first sub-step comes from the zone's own state: a result depends on nothing else.

Knows the method and its step control. Refuses to know what the equations mean.
"""

from __future__ import annotations

from typing import NamedTuple

from breakstep.kernels.unmanaged import merged, unmanaged  # isort: skip  (must precede numba)

import numpy as np
from numpy.typing import NDArray

from breakstep.kernels.burning.reactions import KineticsScratch, NetworkArrays, kinetics_scratch, weigh_by_density
from breakstep.kernels.burning.rosenbrock import GAMMA, STAGES, A, C
from breakstep.kernels.burning.sparse_lu import factorise, solve
from breakstep.kernels.burning.zone_equations import Floats, Zone, linearise, right_hand_side

Counters = NDArray[np.int64]

# Outcomes of an integration.
DONE = 0
SUBSTEP_LIMIT = 1
NOT_FINITE = 2

# Places in the counters vector.
SUB_STEPS, REJECTED, RIGHT_HAND_SIDES, JACOBIANS, FACTORISATIONS = range(5)

# Step control after Hairer & Wanner's code RODAS: safety factor, and the limits of what a sub-step is
# divided by (shrinking at most fivefold, growing at most sixfold).
_SAFETY = 0.9
_SHRINK = 5.0
_GROW = 1.0 / 6.0
_SMALLEST_LAST_ERROR = 0.01
# The first sub-step may change the unknowns by this many tolerances by Euler's estimate; its real error is
# far smaller, and growth by six corrects a choice that was too careful.
_FIRST_CHANGE = 10.0
# A last sub-step is stretched by up to this much rather than leaving a sliver behind.
_STRETCH = 1.1


class StiffScratch(NamedTuple):
    """Work arrays of one caller (thread)."""

    kinetics: KineticsScratch
    state: Floats  # (n + 1,) for the caller: abundances and temperature
    start_change: Floats  # (n + 1,) f at the start of the sub-step
    change: Floats  # (n + 1,) f at a stage
    trial: Floats  # (n + 1,) stage argument, at last the proposed state
    stages: Floats  # (STAGES, n + 1) the transformed stages U
    jacobian: Floats  # packed
    matrix: Floats  # packed I / (gamma h) - J and its factors


def stiff_scratch(network: NetworkArrays) -> StiffScratch:
    """Allocate work arrays for `network`."""
    n = network.mass_numbers.size + 1
    elimination = network.elimination
    entries = elimination.diagonal.size + elimination.lower_entry.size + elimination.upper_entry.size
    return StiffScratch(
        kinetics_scratch(network),
        state=np.zeros(n),
        start_change=np.zeros(n),
        change=np.zeros(n),
        trial=np.zeros(n),
        stages=np.zeros((STAGES, n)),
        jacobian=np.zeros(entries),
        matrix=np.zeros(entries),
    )


@merged
def tolerance_norm(
    vector: Floats, state: Floats, other: Floats, mass_numbers: Floats, rtol: float, atol: float
) -> float:
    """Root mean square of ``vector`` in units of the tolerance; NaN if anything is.

    The tolerance is ``atol + rtol X`` for a mass fraction X = A Y and ``rtol T`` for the temperature, with
    the larger of the two states.
    """
    n = mass_numbers.size
    total = 0.0
    for k in range(n):
        size = max(abs(state[k]), abs(other[k]))
        ratio = vector[k] / (atol / mass_numbers[k] + rtol * size)
        total += ratio * ratio
    ratio = vector[n] / (rtol * max(abs(state[n]), abs(other[n])))
    norm: float = np.sqrt((total + ratio * ratio) / (n + 1))
    return norm


@merged
def _prepare_matrix(network: NetworkArrays, h: float, scratch: StiffScratch) -> None:
    for e in range(scratch.matrix.size):
        scratch.matrix[e] = -scratch.jacobian[e]
    for i in range(network.elimination.diagonal.size):
        scratch.matrix[network.elimination.diagonal[i]] += 1.0 / (GAMMA * h)
    factorise(network.elimination, scratch.matrix)


@merged
def _stage(network: NetworkArrays, zone: Zone, state: Floats, h: float, i: int, scratch: StiffScratch) -> None:
    """Compute U_i from the earlier ones."""
    u = scratch.stages[i]
    n = state.size
    if i == 0:
        for k in range(n):
            u[k] = scratch.start_change[k]
    else:
        for k in range(n):
            total = state[k]
            for j in range(i):
                total += A[i, j] * scratch.stages[j, k]
            scratch.trial[k] = total
        right_hand_side(network, zone, scratch.trial, scratch.kinetics, u)
        for k in range(n):
            total = 0.0
            for j in range(i):
                total += C[i, j] * scratch.stages[j, k]
            u[k] += total / h
    solve(network.elimination, scratch.matrix, u)


@merged
def _propose(
    network: NetworkArrays,
    zone: Zone,
    state: Floats,
    h: float,
    rtol: float,
    atol: float,
    scratch: StiffScratch,
    counters: Counters,
) -> float:
    """Leave the state after a sub-step h in ``scratch.trial``; its error estimate in tolerances."""
    _prepare_matrix(network, h, scratch)
    for i in range(STAGES):
        _stage(network, zone, state, h, i, scratch)
    counters[FACTORISATIONS] += 1
    counters[RIGHT_HAND_SIDES] += STAGES - 1
    difference = scratch.stages[STAGES - 1]
    for k in range(state.size):
        scratch.trial[k] += difference[k]
    return tolerance_norm(difference, state, scratch.trial, network.mass_numbers, rtol, atol)


@merged
def _linearise(network: NetworkArrays, zone: Zone, state: Floats, scratch: StiffScratch, counters: Counters) -> None:
    linearise(network, zone, state, scratch.kinetics, scratch.start_change, scratch.jacobian)
    counters[JACOBIANS] += 1
    counters[RIGHT_HAND_SIDES] += 1


@merged
def _step_factor(error: float) -> float:
    """By what the elementary controller divides the sub-step; the largest shrinking for NaN."""
    factor: float = np.sqrt(np.sqrt(error)) / _SAFETY
    if not factor < _SHRINK:
        factor = _SHRINK
    return max(factor, _GROW)


@merged
def _accepted_factor(error: float, h: float, last_error: float, last_h: float, rejected: bool) -> float:
    """Gustafsson's predictive controller (Hairer & Wanner, section IV.8); no growth after a rejection."""
    factor = _step_factor(error)
    if last_h > 0.0:
        factor = max(factor, _step_factor(error * error / last_error * (last_h / h) ** 4))
    if rejected:
        factor = max(factor, 1.0)
    return factor


@unmanaged
def integrate(
    network: NetworkArrays,
    zone: Zone,
    state: Floats,
    duration: float,
    rtol: float,
    atol: float,
    max_substeps: int,
    scratch: StiffScratch,
    counters: Counters,
) -> int:
    """Advance ``state`` in place by ``duration`` [s].

    Parameters
    ----------
    rtol, atol : float
        See `tolerance_norm`; the error estimate of each sub-step is kept below 1 in that norm.
    max_substeps : int
        Limit on sub-steps tried, accepted or not.
    counters : ndarray of int64
        Incremented: sub_steps, rejected, right_hand_sides, jacobians, factorisations.

    Returns
    -------
    int
        DONE, SUBSTEP_LIMIT or NOT_FINITE; in the last two cases ``state`` is the last one accepted.
    """
    weigh_by_density(network.table, zone.density, scratch.kinetics)
    elapsed, last_h, last_error, rejected = 0.0, 0.0, 1.0, False
    _linearise(network, zone, state, scratch, counters)
    norm = tolerance_norm(scratch.start_change, state, state, network.mass_numbers, rtol, atol)
    if not norm < np.inf:
        return NOT_FINITE
    h = duration if norm * duration <= _FIRST_CHANGE else _FIRST_CHANGE / norm
    for _ in range(max_substeps):
        last = elapsed + _STRETCH * h >= duration
        if last:
            h = duration - elapsed
        error = _propose(network, zone, state, h, rtol, atol, scratch, counters)
        if not error <= 1.0:  # also if it is NaN
            counters[REJECTED] += 1
            rejected = True
            h /= _step_factor(error)
            if elapsed + h <= elapsed:
                return SUBSTEP_LIMIT if error < np.inf else NOT_FINITE
            continue
        counters[SUB_STEPS] += 1
        for k in range(state.size):
            state[k] = scratch.trial[k]
        if last:
            return DONE
        elapsed += h
        factor = _accepted_factor(error, h, last_error, last_h, rejected)
        last_h, last_error, rejected = h, max(error, _SMALLEST_LAST_ERROR), False
        h /= factor
        _linearise(network, zone, state, scratch, counters)
    return SUBSTEP_LIMIT

"""The time step: a reduction over all tiles, and the contract that a lagged one must keep.

The result is the vector (dt, t): the time step [s] of a cycle and the time [s] at which the cycle begins.
With a lag the state has moved on since it was measured, so the CFL factor must leave room, and each sweep
checks the true CFL number of the state it meets.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from breakstep.errors import DeclarationError, KernelError
from breakstep.kernels.hydro import sweep as hydro
from breakstep.steps.hydro import Gas, describe_zone
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.step import Array, Call, Read

# The time is a sum of n steps, each addition off by 1.1e-16 of it at most: n^2 1.1e-16 of a step. Below this, so
# for 3000 equal steps at worst, what remains counts as a whole number of steps.
STEP_ROUNDING = 1e-9
TIME_ROUNDING = 1e-15  # relative; the last step and its addition to the time are rounded once each
LAGGED_CFL_LIMIT = 0.5  # leaves a factor 2 for signals to speed up within the lag; checked by every sweep


@dataclass(frozen=True)
class SignalRate:
    """The largest rate [1/s] at which a signal crosses a zone of the tile."""

    gas: Gas

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> Array:
        widths, active = np.array(call.widths), np.array(call.active)
        rate, bad = hydro.signal_rate(arrays["gas"], widths, active, *self.gas.arrays)
        if bad >= 0:
            zone, state = describe_zone(arrays["gas"], bad, call)
            raise KernelError(f"{call.where()}: zone {zone} has no sound speed; its state: {state}", zone=zone)
        return np.array([rate])


@dataclass(frozen=True)
class NoRate:
    """For a run without hydrodynamics: no signal limits the time step."""

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> Array:
        return np.zeros(1)


@dataclass(frozen=True)
class NextStep:
    """From the largest rate to (dt, t): the CFL factor, bounds, growth, and the end of the run.

    The end time is reported exactly. What is left before it is taken in one step, or in two equal ones
    rather than a full one and a sliver.

    Raises
    ------
    KernelError
        The rate is negative, infinite or NaN, or nothing bounds the step.
    """

    cfl: float
    growth: float
    first: float
    maximum: float
    end_time: float

    def __call__(self, combined: Array, previous: Array | None) -> Array:
        rate = float(combined[0])
        if not 0.0 <= rate < np.inf:
            raise KernelError(f"the largest signal rate is {rate} 1/s; look at the state it was measured on")
        time = 0.0 if previous is None else self._reached(float(previous[0]), float(previous[1]))
        dt = self._fit(self._bounded(rate, previous), self.end_time - time)
        if dt == np.inf:
            raise KernelError("nothing bounds the time step: no signal moves; give a maximum or an end time")
        return np.array([dt, time])

    def _reached(self, dt: float, time: float) -> float:
        """Where a step leads; a rounding error beside the end time is the end time."""
        reached = time + dt
        return self.end_time if abs(reached - self.end_time) <= TIME_ROUNDING * reached else reached

    def _bounded(self, rate: float, previous: Array | None) -> float:
        dt = min(self.cfl / rate if rate > 0.0 else np.inf, self.maximum)
        if previous is None:
            return min(dt, self.first)
        return min(dt, self.growth * float(previous[0])) if previous[0] > 0.0 else dt

    @staticmethod
    def _fit(dt: float, remaining: float) -> float:
        """The step, fitted to the time that remains."""
        if remaining <= dt * (1.0 + STEP_ROUNDING):
            return max(remaining, 0.0)
        return 0.5 * remaining if remaining < 2.0 * dt * (1.0 - STEP_ROUNDING) else dt


def time_is_up(value: Array) -> bool:
    """Whether a value of the reduction says that the end time has been reached."""
    return bool(value[0] <= 0.0)


def time_step(
    gas: Gas | None,
    *,
    cfl: float,
    lag: int = 0,
    growth: float = 1.25,
    first: float | None = None,
    maximum: float | None = None,
    end_time: float | None = None,
) -> Reduction:
    """The reduction ``dt``.

    Parameters
    ----------
    gas : Gas or None
        None for a run without hydrodynamics; then dt is ``maximum``.
    cfl : float
        Factor applied to the largest stable step; at most 0.5 with a lag.
    lag : int
        Cycles by which the result is late.
    growth : float
        Largest ratio of one step to the one before.
    first, maximum, end_time : float, optional
        Bounds on the first step and on every step, and the end of the run [s].

    Raises
    ------
    DeclarationError
        A CFL factor or bound out of range, or nothing that bounds the step.
    """
    bounds = {"first": first, "maximum": maximum, "end_time": end_time}
    limit = LAGGED_CFL_LIMIT if lag else 1.0
    if not 0.0 < cfl <= limit:
        raise DeclarationError(f"the CFL factor must lie in (0, {limit:g}] with a dt lag of {lag}, not {cfl}")
    if gas is None and maximum is None:
        raise DeclarationError("without hydrodynamics nothing bounds the time step; give a maximum")
    for name, bound in bounds.items():
        if bound is not None and not bound > 0.0:
            raise DeclarationError(f"the time step's bound {name!r} must be positive, not {bound}")
    if not growth >= 1.0:
        raise DeclarationError(f"the growth of the time step must be at least 1, not {growth}")
    following = NextStep(cfl, growth, *(np.inf if bound is None else bound for bound in bounds.values()))
    kernel = NoRate() if gas is None else SignalRate(gas)
    reads = () if gas is None else (Read("gas"),)
    return Reduction("dt", kernel, reads, Combine.MAX, following, lag)

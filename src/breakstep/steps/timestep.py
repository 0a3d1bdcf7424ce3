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
from breakstep.kernels import hydro
from breakstep.steps.hydro import Gas, describe_zone
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.step import Array, Call, Read

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
            raise KernelError(
                f"{call.where()}: zone {zone} has no sound speed; its state: {state}", zone=zone
            )
        return np.array([rate])


@dataclass(frozen=True)
class NoRate:
    """For a run without hydrodynamics: no signal limits the time step."""

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> Array:
        return np.zeros(1)


@dataclass(frozen=True)
class NextStep:
    """From the largest rate to (dt, t): the CFL factor, bounds, growth, and the end of the run."""

    cfl: float
    growth: float
    first: float
    maximum: float
    end_time: float

    def __call__(self, combined: Array, previous: Array | None) -> Array:
        rate = float(combined[0])
        dt = min(self.cfl / rate if rate > 0.0 else np.inf, self.maximum)
        time = 0.0
        if previous is None:
            dt = min(dt, self.first)
        else:
            dt = min(dt, self.growth * previous[0]) if previous[0] > 0.0 else dt
            time = float(previous[1] + previous[0])
        remaining = self.end_time - time
        if remaining <= dt * (1.0 + 1e-12):  # no sliver of a step is left by round-off in t
            dt = max(remaining, 0.0)
        return np.array([dt, time])


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
        A CFL factor out of range, or nothing that bounds the step.
    """
    limit = LAGGED_CFL_LIMIT if lag else 1.0
    if not 0.0 < cfl <= limit:
        raise DeclarationError(f"the CFL factor must lie in (0, {limit:g}] with a dt lag of {lag}, not {cfl}")
    if gas is None and maximum is None:
        raise DeclarationError("without hydrodynamics nothing bounds the time step; give a maximum")
    following = NextStep(
        cfl, growth, *(np.inf if bound is None else bound for bound in (first, maximum, end_time))
    )
    kernel = NoRate() if gas is None else SignalRate(gas)
    reads = () if gas is None else (Read("gas"),)
    return Reduction("dt", kernel, reads, Combine.MAX, following, lag)

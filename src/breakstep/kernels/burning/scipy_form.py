"""The burning kernel beside scipy's stiff solvers, on the same compiled equations.

An independent reference for the tests, and the yardstick for the kernel's speed: how long does one zone
take here, and how long does scipy take to reach the same accuracy with compiled right-hand side and
Jacobian? Accuracy is what was achieved against a much tighter integration, not what was asked for.

Knows one zone at a time. Refuses to know tiles, and is no part of any run.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Literal

from breakstep.kernels.unmanaged import unmanaged  # isort: skip  (must precede numba)

import numpy as np
from scipy.integrate import solve_ivp

from breakstep.errors import ConvergenceError
from breakstep.kernels.burning.network import Network
from breakstep.kernels.burning.network_layout import read_only
from breakstep.kernels.burning.reactions import NetworkArrays, weigh_by_density
from breakstep.kernels.burning.stiff import DONE, SUB_STEPS, StiffScratch, integrate, stiff_scratch
from breakstep.kernels.burning.zone_equations import Floats, Zone, linearise, right_hand_side

Method = Literal["BDF", "Radau", "LSODA"]
RTOLS = (1e-3, 1e-4, 1e-5, 1e-6, 1e-7)
# Mass fractions below this part of the relative tolerance count by their absolute error, in both solvers.
ATOL_PER_RTOL = 1e-6
_REFERENCE_RTOL = 1e-11
_REFERENCE_ATOL = 1e-17
_MAX_SUBSTEPS = 1_000_000
_REPEATS = 5


@unmanaged
def _change(network: NetworkArrays, zone: Zone, state: Floats, scratch: StiffScratch, change: Floats) -> None:
    right_hand_side(network, zone, state, scratch.kinetics, change)


@unmanaged
def _packed_jacobian(network: NetworkArrays, zone: Zone, state: Floats, scratch: StiffScratch) -> None:
    linearise(network, zone, state, scratch.kinetics, scratch.change, scratch.jacobian)


@unmanaged
def _weigh(network: NetworkArrays, density: float, scratch: StiffScratch) -> None:
    weigh_by_density(network.table, density, scratch.kinetics)


@dataclass(frozen=True, eq=False)
class ZoneProblem:
    """One zone's initial value problem: abundances and temperature over a time, at constant density.

    Parameters
    ----------
    eos : ndarray, shape (3,)
        The equation of state's vector.
    density, temperature : float
        [g/cm^3], [K]
    fractions : ndarray, shape (n_species,)
        Mass fractions.
    duration : float
        [s]
    self_heating : bool
        Whether the energy set free heats the zone; if not, its temperature is held.
    """

    network: Network
    eos: Floats
    density: float
    temperature: float
    fractions: Floats
    duration: float
    self_heating: bool = True
    zone: Zone = field(init=False, repr=False)
    scratch: StiffScratch = field(init=False, repr=False)
    callback_seconds: Floats = field(init=False, repr=False)  # (1,) spent in `change` and `jacobian`

    def __post_init__(self) -> None:
        electrons = float(self.fractions / self.network.mass_numbers @ self.network.charges)
        zone = Zone(read_only(self.eos), float(self.density), electrons, self.self_heating)
        object.__setattr__(self, "zone", zone)
        scratch = stiff_scratch(self.network.arrays)
        _weigh(self.network.arrays, zone.density, scratch)
        object.__setattr__(self, "scratch", scratch)
        object.__setattr__(self, "callback_seconds", np.zeros(1))

    @property
    def start(self) -> Floats:
        """The state at the start: molar abundances [mol/g], then temperature [K]."""
        return np.append(self.fractions / self.network.mass_numbers, self.temperature)

    def change(self, _time: float, state: Floats) -> Floats:
        """Right-hand side, as scipy calls it."""
        started = time.perf_counter()
        change = np.empty(state.size)
        _change(self.network.arrays, self.zone, state, self.scratch, change)
        self.callback_seconds[0] += time.perf_counter() - started
        return change

    def jacobian(self, _time: float, state: Floats) -> Floats:
        """Dense Jacobian, as scipy calls it."""
        started = time.perf_counter()
        _packed_jacobian(self.network.arrays, self.zone, state, self.scratch)
        positions = self.network.positions
        dense = np.where(positions >= 0, self.scratch.jacobian[positions], 0.0)
        self.callback_seconds[0] += time.perf_counter() - started
        return dense

    def solve(self, rtol: float, atol: float) -> tuple[Floats, int]:
        """State at the end by the kernel's integrator, and the sub-steps it took.

        Raises
        ------
        ConvergenceError
            The integrator gave up.
        """
        state, counters = self.start, np.zeros(7, dtype=np.int64)
        args = (self.network.arrays, self.zone, state, self.duration, rtol, atol)
        outcome = integrate(*args, _MAX_SUBSTEPS, self.scratch, counters)
        if outcome != DONE:
            raise ConvergenceError(f"the zone was not integrated: outcome {outcome}", outcome=outcome)
        return state, int(counters[SUB_STEPS])

    def solve_with_scipy(self, method: Method, rtol: float, atol: float) -> tuple[Floats, int]:
        """State at the end by ``scipy.integrate.solve_ivp``, and the steps it took.

        Raises
        ------
        ConvergenceError
            scipy gave up; its message is passed on.
        """
        # the temperature's absolute tolerance is negligible at any temperature that burns
        tolerances = np.append(atol / self.network.mass_numbers, atol)
        result = solve_ivp(
            self.change,
            (0.0, self.duration),
            self.start,
            method=method,
            rtol=rtol,
            atol=tolerances,
            jac=self.jacobian,
        )
        if not result.success:
            raise ConvergenceError(f"scipy's {method} failed: {result.message}")
        return result.y[:, -1], result.t.size - 1

    def reference(self) -> Floats:
        """State at the end by scipy's Radau at a tolerance far below those compared."""
        return self.solve_with_scipy("Radau", _REFERENCE_RTOL, _REFERENCE_ATOL)[0]

    def error(self, state: Floats, reference: Floats) -> float:
        """Largest deviation in any mass fraction (absolute) and in temperature (relative)."""
        fractions = np.abs(state[:-1] - reference[:-1]) * self.network.mass_numbers
        return max(float(fractions.max()), abs(float(state[-1] / reference[-1]) - 1.0))


Solver = Callable[[float], tuple[Floats, int]]


@dataclass(frozen=True)
class WorkPrecision:
    """What one integration cost and how good it was."""

    rtol: float
    error: float
    seconds: float
    steps: int


def work_precision(
    problem: ZoneProblem, reference: Floats, solver: Solver, rtols: Sequence[float] = RTOLS
) -> list[WorkPrecision]:
    """Integrate at several tolerances; the time is the fastest of some repeats.

    Parameters
    ----------
    reference : ndarray
        ``problem.reference()``
    solver : callable
        From a relative tolerance to the state at the end and the number of steps.
    """
    curve = []
    for rtol in rtols:
        seconds = []
        for _ in range(_REPEATS):
            started = time.perf_counter()
            state, steps = solver(rtol)
            seconds.append(time.perf_counter() - started)
        curve.append(WorkPrecision(rtol, problem.error(state, reference), min(seconds), steps))
    return curve


def seconds_at(curve: Sequence[WorkPrecision], error: float) -> float:
    """Time a solver needs for this achieved error: its curve interpolated in both logarithms.

    Beyond the ends of the curve the nearest end counts.
    """
    points = sorted((np.log(point.error), np.log(point.seconds)) for point in curve)
    errors, seconds = zip(*points, strict=True)
    return float(np.exp(np.interp(np.log(error), errors, seconds)))


@dataclass(frozen=True)
class SpeedComparison:
    """Seconds a zone for one achieved error, by the kernel's integrator and by scipy's ``method``.

    ``callback_share`` is the part of scipy's time spent in the callbacks, their calls from Python
    included; ``ratio_without_callbacks`` is what would remain of the ratio if they cost nothing at all.
    """

    method: Method
    error: float
    kernel_seconds: float
    scipy_seconds: float
    callback_share: float

    @property
    def ratio(self) -> float:
        """How many times longer scipy takes."""
        return self.scipy_seconds / self.kernel_seconds

    @property
    def ratio_without_callbacks(self) -> float:
        """The same, with scipy's callbacks taken as free."""
        return self.ratio * (1.0 - self.callback_share)


def compare_with_scipy(problem: ZoneProblem, method: Method = "BDF", error: float = 1e-6) -> SpeedComparison:
    """Measure both on one zone and compare at equal achieved error.

    The kernel's time includes one call from Python, some ten microseconds, which a tile's zones share.
    """
    reference = problem.reference()

    def kernel(rtol: float) -> tuple[Floats, int]:
        return problem.solve(rtol, ATOL_PER_RTOL * rtol)

    def scipy(rtol: float) -> tuple[Floats, int]:
        return problem.solve_with_scipy(method, rtol, ATOL_PER_RTOL * rtol)

    ours = work_precision(problem, reference, kernel)
    problem.callback_seconds[0] = 0.0
    started = time.perf_counter()
    theirs = work_precision(problem, reference, scipy)
    share = float(problem.callback_seconds[0]) / (time.perf_counter() - started)
    return SpeedComparison(method, error, seconds_at(ours, error), seconds_at(theirs, error), share)

"""Burning: what zones of different temperatures cost, and how long scipy's BDF takes for the same accuracy.

**Equal accuracy** is established by what was achieved, not by what was asked for. A zone is first
integrated at a tolerance far below all others; that is the reference, and a solution's error is its largest
deviation from it in any mass fraction (absolute) or in temperature (relative). The kernel integrates at the
relative tolerance that runs use. BDF goes down a ladder of tolerances until its error is no larger than the
kernel's; the last two solutions bracket it, and BDF's time is interpolated between them in both logarithms.
BDF calls the compiled right-hand side and Jacobian that the kernel itself uses.
"""

from __future__ import annotations

import time
from collections.abc import Iterable, Iterator
from dataclasses import replace
from typing import Any

import numpy as np

from breakstep.errors import ConvergenceError, KernelError
from breakstep.kernels.burning.network import load_network
from breakstep.kernels.burning.scipy_form import ATOL_PER_RTOL, WorkPrecision, ZoneProblem, seconds_at
from breakstep.kernels.burning.zones import COUNTERS, Counters, burn, failure
from breakstep.kernels.eos import Stellar
from breakstep.measure.states import DENSITY, Array, fuel_at_rest, fuel_fractions
from breakstep.measure.timing import Effort, Row, Spread, Work, take_turns

NETWORK = "alpha13"
DURATION = 1e-5  # [s]
RTOL, ATOL = 1e-4, 1e-8  # what runs use unless told otherwise
CUTOFF = 1e8  # [K]
HOT = (3e9, 4e9)  # [K]
NEEDED = 30.0  # what a compiled integrator must gain over one whose loop runs in Python
LADDER = tuple(10.0 ** (-exponent / 2) for exponent in range(4, 21))  # 1e-2 to 1e-10
KINDS = {5e7: 1024, 5e8: 1024, 1.2e9: 64, 3e9: 16, 4e9: 16}
"""Temperature [K] of zones below the cut-off, quiet ones, and three that burn; how many make a tile that
takes long enough for its call from Python not to count."""
_LIMIT = 100_000  # sub-steps a zone, far more than any of these takes


def hot_rows(effort: Effort) -> list[Row]:
    """Microseconds a hot zone, by the kernel and by BDF at the same achieved error."""
    return [_row(temperature, effort) for temperature in HOT]


def _row(temperature: float, effort: Effort) -> Row:
    problem = _problem(temperature)
    reference = problem.reference()
    state, steps = problem.solve(RTOL, ATOL_PER_RTOL * RTOL)
    error = problem.error(state, reference)
    loose, tight = bracket(_ladder(problem, reference), error)
    samples = take_turns(_works(problem, loose, tight), effort)
    theirs = [
        seconds_at([replace(loose, seconds=a), replace(tight, seconds=b)], error)
        for a, b in zip(samples["loose"], samples["tight"], strict=True)
    ]
    ours = samples["ours"]
    details: dict[str, Any] = {
        "temperature": temperature,
        "error": error,
        "sub_steps": steps,
        "bdf_steps": [loose.steps, tight.steps],
        "bdf_errors": [loose.error, tight.error],
        "bdf_tolerances": [loose.rtol, tight.rtol],
        "bdf_callback_share": _callback_share(problem, tight),
    }
    spread = Spread.of([a / b for a, b in zip(theirs, ours, strict=True)])
    what = f"T9 = {temperature / 1e9:g}, error {error:.1e}"
    return Row(what, 1e6 * min(ours), 1e6 * min(theirs), spread, NEEDED, details=details)


def _problem(temperature: float) -> ZoneProblem:
    network = load_network(NETWORK)
    return ZoneProblem(network, Stellar().vector, DENSITY, temperature, fuel_fractions(network), DURATION)


def _bdf(problem: ZoneProblem, rtol: float) -> tuple[Array, int]:
    return problem.solve_with_scipy("BDF", rtol, ATOL_PER_RTOL * rtol)


def _ladder(problem: ZoneProblem, reference: Array) -> Iterator[WorkPrecision]:
    """What BDF achieves at one tolerance after the other; nothing is timed yet."""
    for rtol in LADDER:
        state, steps = _bdf(problem, rtol)
        yield WorkPrecision(rtol, problem.error(state, reference), 0.0, steps)


def bracket(curve: Iterable[WorkPrecision], error: float) -> tuple[WorkPrecision, WorkPrecision]:
    """The first two neighbours on a curve, from loose to tight, between whose errors ``error`` lies.

    Raises
    ------
    ConvergenceError
        The curve begins below that error, or never gets there: no two solutions are equally accurate.
    """
    loose = None
    for point in curve:
        if point.error <= error and loose is not None:
            return loose, point
        if point.error <= error:
            break
        loose = point
    raise ConvergenceError(
        f"expected errors on both sides of {error:.3g} from the tolerances {LADDER[0]:g} to {LADDER[-1]:g};"
        " there is nothing of equal accuracy to compare with",
        error=error,
    )


def _works(problem: ZoneProblem, loose: WorkPrecision, tight: WorkPrecision) -> dict[str, Work]:
    return {
        "ours": lambda: problem.solve(RTOL, ATOL_PER_RTOL * RTOL),
        "loose": lambda: _bdf(problem, loose.rtol),
        "tight": lambda: _bdf(problem, tight.rtol),
    }


def _callback_share(problem: ZoneProblem, point: WorkPrecision) -> float:
    """Part of BDF's time spent in the right-hand side and Jacobian, their calls from Python included."""
    problem.callback_seconds[0] = 0.0
    started = time.perf_counter()
    _bdf(problem, point.rtol)
    return float(problem.callback_seconds[0]) / (time.perf_counter() - started)


def burn_work(temperature: float) -> Work:
    """Burn a tile of the zones of ``KINDS``, all within a hundredth of the temperature [K]."""
    network, eos = load_network(NETWORK), Stellar()
    gas = fuel_at_rest(network, eos, temperature * np.linspace(0.99, 1.01, KINDS[temperature]))
    arguments = (gas, DURATION, eos.vector, network.arrays, RTOL, ATOL, _LIMIT, CUTOFF)
    _, _, status = burn(*arguments)
    complaint = failure(status, gas, network.names)
    if complaint is not None:
        raise KernelError(complaint)
    return lambda: burn(*arguments)


def zone_figures(effort: Effort) -> dict[str, Any]:
    """What a zone costs at each of the temperatures of ``KINDS``, within a tile of such zones."""
    works = {f"{temperature:g}": burn_work(temperature) for temperature in KINDS}
    samples = take_turns(works, effort)
    kinds = [
        {"temperature": kind, "microseconds": 1e6 * min(seconds) / zones, **_counted(work, zones)}
        for (kind, zones), seconds, work in zip(KINDS.items(), samples.values(), works.values(), strict=True)
    ]
    return {"duration": DURATION, "kinds": kinds}


def _counted(work: Work, zones: int) -> dict[str, float]:
    """What the kernel counted, a zone."""
    counters: Counters = work()[1]  # type: ignore[index]
    return {name: float(count) / zones for name, count in zip(COUNTERS, counters, strict=True)}

"""Burning: what zones of different temperatures cost, and how long scipy's BDF takes for the same accuracy.

**Equal accuracy** is established by what was achieved, not by what was asked for. A zone is first
integrated at a tolerance far below all others; that is the reference, and a solution's error is its largest
deviation from it in any mass fraction (absolute) or in temperature (relative). The kernel integrates
at the relative tolerance that runs use. BDF goes through a ladder of tolerances until its error falls below
the kernel's; the last two solutions bracket it, and BDF's time is interpolated between them in both logarithms.
BDF gets the compiled right-hand side and Jacobian that the kernel itself uses.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

from breakstep.errors import ConvergenceError
from breakstep.kernels.burning import COUNTERS, ZONES_BURNED, ZONES_QUIET, burn, failure
from breakstep.kernels.burning_scipy import ATOL_PER_RTOL, WorkPrecision, ZoneProblem, seconds_at
from breakstep.kernels.eos import Stellar
from breakstep.kernels.network import load_network
from breakstep.kernels.stiff import SUB_STEPS

import numpy as np  # isort: skip

from breakstep.measure.states import DENSITY, fuel_at_rest, fuel_fractions
from breakstep.measure.timing import Effort, Row, Spread, Work, take_turns

NETWORK = "alpha13"
DURATION = 1e-5  # [s]
RTOL, ATOL = 1e-4, 1e-8  # what runs use unless told otherwise
CUTOFF = 1e8  # [K]
LIMIT = 100_000
HOT = (3e9, 4e9)  # [K]
NEEDED = 30.0  # what one compiled integrator must gain over one whose loop runs in Python
LADDER = tuple(10.0 ** (-exponent / 2) for exponent in range(4, 21))  # 1e-2 to 1e-10
ZONES = 16

TEMPERATURES = (5e7, 5e8, 1.5e9, 3e9, 4e9)
"""Below the cut-off; quiet; and three that burn [K]."""


@dataclass(frozen=True)
class Solution:
    """What an integration at ``rtol`` achieved, and its steps."""

    rtol: float
    error: float
    steps: int


def hot_rows(effort: Effort) -> list[Row]:
    """Microseconds a hot zone, by the kernel and by BDF at the same achieved error."""
    return [_row(temperature, effort) for temperature in HOT]


def _row(temperature: float, effort: Effort) -> Row:
    network = load_network(NETWORK)
    problem = ZoneProblem(
        network, Stellar().vector, DENSITY, temperature, fuel_fractions(network), DURATION
    )
    reference = problem.reference()
    state, steps = problem.solve(RTOL, ATOL_PER_RTOL * RTOL)
    ours = Solution(RTOL, problem.error(state, reference), steps)
    loose, tight = bracket(_bdf_solutions(problem, reference), ours.error)
    samples = take_turns(_works(problem, loose, tight), effort)
    theirs = [
        seconds_at([_point(loose, a), _point(tight, b)], ours.error)
        for a, b in zip(samples["loose"], samples["tight"], strict=True)
    ]
    spread = Spread.of([a / b for a, b in zip(theirs, samples["ours"], strict=True)])
    details = {
        "temperature": temperature,
        "error": ours.error,
        "sub_steps": steps,
        "bdf_rtol_loose": loose.rtol,
        "bdf_rtol_tight": tight.rtol,
        "bdf_steps_loose": loose.steps,
        "bdf_steps_tight": tight.steps,
    }
    what = f"{temperature:.1e} K, error {ours.error:.0e}"
    return Row(what, 1e6 * min(samples["ours"]), 1e6 * min(theirs), spread, NEEDED, details=details)


def _bdf_solutions(problem: ZoneProblem, reference: np.ndarray) -> Iterator[Solution]:
    for rtol in LADDER:
        state, steps = problem.solve_with_scipy("BDF", rtol, ATOL_PER_RTOL * rtol)
        yield Solution(rtol, problem.error(state, reference), steps)

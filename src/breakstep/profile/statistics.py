"""Is it a gain? The ratio of two wall times over repeated pairs, with an interval.

Each pair is one lockstep and one tasked run made next to each other, so that what drifts on the host
(clock rates, other users) hits both and cancels in their ratio. The interval is Student's, at 95 %, on the
logarithms of the ratios with n - 1 degrees of freedom: ratios are positive and multiply, and the interval
of tasked over lockstep is then the reciprocal of the interval of lockstep over tasked.

What few pairs can say
----------------------
With three pairs the half width is t(0.975, 2) / sqrt(3) = 2.48 standard deviations of the logarithms: at a
scatter of 2 % from pair to pair a gain below about 5 % stays undecided, at five pairs (1.24) below 2.5 %, at
ten (0.72) below 1.5 %. Three numbers cannot show either whether their scatter is normal, which Student's
interval assumes, and one disturbed pair widens it until nothing is significant. So a gain that is found with
three pairs stands on that assumption, and a gain that is not found may still be there. One pair has no
interval, and is never called a gain.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import stdtrit

from breakstep.errors import PairsError

#: Probability that the interval covers the true ratio, given independent pairs with log-normal scatter.
CONFIDENCE = 0.95


@dataclass(frozen=True)
class Gain:
    """Lockstep over tasked wall time: above 1, tasks were faster.

    Attributes
    ----------
    ratios : tuple of float
        One per pair.
    median : float
    geometric_mean : float
        Centre of the interval. The median need not lie inside the interval when the scatter is skewed.
    low, high : float or None
        Ends of the interval at :data:`CONFIDENCE`; None for a single pair.
    significant : bool
        Whether the interval excludes 1.
    """

    ratios: tuple[float, ...]
    median: float
    geometric_mean: float
    low: float | None
    high: float | None
    significant: bool

    @property
    def degrees(self) -> int:
        """Degrees of freedom, one less than the number of pairs."""
        return len(self.ratios) - 1


def gain_of_pairs(lockstep_seconds: Sequence[float], tasked_seconds: Sequence[float]) -> Gain:
    """Compare repeated pairs of runs.

    Parameters
    ----------
    lockstep_seconds, tasked_seconds : sequence of float
        Wall time of each run [s]; equal places belong to one pair.

    Raises
    ------
    PairsError
        No pairs, unequal numbers of runs, or a wall time that is not positive and finite.
    """
    _check(lockstep_seconds, tasked_seconds)
    logs = np.log(np.asarray(lockstep_seconds, float)) - np.log(np.asarray(tasked_seconds, float))
    ratios = tuple(float(r) for r in np.exp(logs))
    centre = float(logs.mean())
    if len(logs) == 1:
        return Gain(ratios, ratios[0], math.exp(centre), None, None, False)
    half = _half_width(logs)
    low, high = math.exp(centre - half), math.exp(centre + half)
    return Gain(ratios, float(np.median(ratios)), math.exp(centre), low, high, low > 1.0 or high < 1.0)


def _half_width(logs: np.ndarray[tuple[int], np.dtype[np.float64]]) -> float:
    """Half the width of Student's interval for the mean."""
    quantile = float(stdtrit(len(logs) - 1, 0.5 + CONFIDENCE / 2))
    return quantile * float(logs.std(ddof=1)) / math.sqrt(len(logs))


def _check(lockstep: Sequence[float], tasked: Sequence[float]) -> None:
    if len(lockstep) != len(tasked) or not lockstep:
        raise PairsError(
            f"a gain needs as many lockstep as tasked runs, one at least, not {len(lockstep)} and"
            f" {len(tasked)}; give the runs in pairs"
        )
    for name, seconds in (("lockstep", lockstep), ("tasked", tasked)):
        for place, value in enumerate(seconds):
            if not (math.isfinite(value) and value > 0.0):
                raise PairsError(
                    f"{name} run {place + 1}: expected a positive wall time in seconds, not {value};"
                    " leave out the pair or run it again"
                )

"""The grain: how long tasks must be for the dispatch to take less than a twentieth of the core-seconds.

Kernels of a few lengths, which release the interpreter's lock, run on a ring of tiles; the ledger of each run
says which share of the core-seconds went to the dispatch (``engine`` and ``transfer``). Between two lengths
the share is interpolated in both logarithms. Beyond the lengths that were measured, a task is taken to cost
the dispatch what it cost at the last of them, and the figure is marked as extrapolated.

The ledger counts time on worker threads. CPU time of event loops and of the scheduler, which may run on cores
that kernels want, is given beside it.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from breakstep.engine.run import RunOptions
from breakstep.measure.bench import Bench, Usage
from breakstep.measure.cost import spread
from breakstep.measure.noop import Pace, Ring
from breakstep.profile.run import Profile

LIMIT = 0.05  # of the core-seconds
TILES = 32
FEWEST_CYCLES = 3
_NEXT_TO_NOTHING = 1e-6  # a share to take the logarithm of where none was booked


@dataclass(frozen=True)
class GrainPoint:
    """One length of task.

    Attributes
    ----------
    milliseconds : float
        CPU time of a kernel.
    dispatch : float
        Share of the core-seconds in ``engine`` and ``transfer``.
    idle : float
        Share not in kernels, waits for neighbours and the run's ends included.
    cpu : float
        Share of all CPU time that was used outside kernels, idle daemons and what a run costs once left out.
    cpu_us : float
        The same as CPU time a task [us].
    """

    milliseconds: float
    dispatch: float
    idle: float
    cpu: float
    cpu_us: float


def grain_figures(
    bench: Bench, dispatch: str, lengths: Sequence[float], pace: Pace, rounds: int, seconds: float
) -> dict[str, Any]:
    """The grain of one dispatch, and the shares it comes from.

    Parameters
    ----------
    lengths : sequence of float
        Lengths of kernels to try, ascending [ms].
    seconds : float
        How long a run should keep each thread busy.
    """
    once = bench.record(dispatch, Ring((TILES,), 1), RunOptions())[0]
    found = [[_point(bench, dispatch, length, pace, seconds, once) for length in lengths] for _ in range(rounds)]
    grains = [grain([(p.milliseconds, p.dispatch) for p in points]) for points in found]
    columns = [[points[i] for points in found] for i in range(len(lengths))]
    return {
        **spread([milliseconds for milliseconds, _ in grains]),
        "extrapolated": any(outside for _, outside in grains),
        "limit": LIMIT,
        "points": [{"nominal_ms": length, **_medians(column)} for length, column in zip(lengths, columns, strict=True)],
    }


def _medians(points: Sequence[GrainPoint]) -> dict[str, dict[str, float]]:
    names = ("milliseconds", "dispatch", "idle", "cpu", "cpu_us")
    return {name: spread([getattr(point, name) for point in points]) for name in names}


def _point(bench: Bench, dispatch: str, length: float, pace: Pace, seconds: float, once: Usage) -> GrainPoint:
    cycles = max(FEWEST_CYCLES, round(1e3 * seconds * bench.slots / (length * TILES)))
    ring = Ring((TILES,), cycles, kernel=pace.busy(length))
    used, profile = bench.record(dispatch, ring, RunOptions())
    return point_of(profile, used.cpu - once.cpu, ring.tasks)


def point_of(profile: Profile, cpu: float, tasks: int) -> GrainPoint:
    """Shares of a recorded run that used so much CPU time [s]."""
    accounts, available = profile.ledger.accounts_seconds, profile.ledger.available_ns * 1e-9
    kernels = float(profile.work["cpu_seconds"].sum())
    outside = max(cpu - kernels, 0.0)
    return GrainPoint(
        milliseconds=1e3 * kernels / tasks,
        dispatch=(accounts["engine"] + accounts["transfer"]) / available,
        idle=1.0 - accounts["compute"] / available,
        cpu=outside / (outside + kernels),
        cpu_us=1e6 * outside / tasks,
    )


def grain(points: Sequence[tuple[float, float]], limit: float = LIMIT) -> tuple[float, bool]:
    """Length from which on the share stays below the limit [ms], and whether it lies outside the points.

    Parameters
    ----------
    points : sequence of (float, float)
        Length and share, lengths ascending.
    """
    above = [i for i, (_, share) in enumerate(points) if share > limit]
    if not above:
        return _extrapolated(*points[0], limit), True
    last = above[-1]
    if last + 1 == len(points):
        return _extrapolated(*points[last], limit), True
    (short, large), (long, small) = points[last], points[last + 1]
    small = max(small, _NEXT_TO_NOTHING)
    way = math.log(large / limit) / math.log(large / small)
    return short * (long / short) ** way, False


def _extrapolated(length: float, share: float, limit: float) -> float:
    """A dispatch that takes ``cost`` beside a kernel of ``length`` has the share cost / (cost + length)."""
    share = min(max(share, _NEXT_TO_NOTHING), 1.0 - _NEXT_TO_NOTHING)
    cost = length * share / (1.0 - share)
    return cost * (1.0 - limit) / limit

"""How long a worker's threads stood idle, up to any moment: waiting for tiles, values, barriers or bytes.

Time in the dispatch is not idle time here. Where a wait was partly the dispatch's, its idle part is spread evenly
over it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from breakstep.profile.causes import WAITS
from breakstep.profile.frames import integers
from breakstep.profile.run import Profile

IDLE = tuple(account for account in WAITS if account != "engine")


@dataclass(frozen=True)
class IdleTime:
    """For each worker, moments from the run's begin [ns] and the mean idle time of its threads until then [ns]."""

    moments: dict[int, NDArray[np.float64]]
    idle_ns: dict[int, NDArray[np.float64]]

    @classmethod
    def of(cls, profile: Profile) -> IdleTime:
        """From the gaps of a ledger, and the time after each thread's last task."""
        moments, idle = {}, {}
        threads = integers(profile.threads, "worker")
        for worker in np.unique(threads):
            begin, end, amount = _waits(profile, int(worker))
            moments[int(worker)], idle[int(worker)] = _accumulated(begin, end, amount / np.sum(threads == worker))
        return cls(moments, idle)

    def until(self, worker: int, moment: NDArray[np.int64]) -> NDArray[np.float64]:
        """Mean idle time of a worker's threads from the run's begin to some moments [ns]."""
        if worker not in self.moments or not len(self.moments[worker]):
            return np.zeros(moment.shape)
        return np.interp(moment, self.moments[worker], self.idle_ns[worker])


def _waits(profile: Profile, worker: int) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Begin, end and idle part of all waits of a worker's threads [ns from the run's begin]."""
    ledger = profile.ledger
    gaps = ledger.gaps[(ledger.gaps["worker"] == worker).to_numpy()]
    last = ledger.by_thread["unemployed"]
    after = last[last.index.get_level_values("worker") == worker].to_numpy(dtype=np.float64)
    begin = np.concatenate([integers(gaps, "start_ns") - ledger.first_ns, ledger.span_ns - after])
    end = np.concatenate([integers(gaps, "end_ns") - ledger.first_ns, np.full(len(after), ledger.span_ns)])
    amount = np.concatenate([gaps[list(IDLE)].sum(axis=1).to_numpy(dtype=np.float64), after])
    return begin.astype(float), end.astype(float), amount


def _accumulated(
    begin: NDArray[np.float64], end: NDArray[np.float64], amount: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """The sum of ramps, each from 0 at its begin to its amount at its end: moments and values at them."""
    real = end > begin
    begin, end, amount = begin[real], end[real], amount[real]
    slope = amount / (end - begin)
    moments = np.concatenate([begin, end])
    change = np.concatenate([slope, -slope])
    order = np.argsort(moments, kind="stable")
    moments, slopes = moments[order], np.cumsum(change[order])
    steps = np.concatenate([[0.0], np.diff(moments) * slopes[:-1]]) if len(moments) else moments
    return moments, np.cumsum(steps)

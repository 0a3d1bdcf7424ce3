"""Which cycles are done and which are closed on one worker, and how far ahead phases may be emitted.

A cycle is done when all its phases are emitted and its own tasks are done. It is closed when also the results made
in it are known here, its barriers have been released here and its checkpoint, if it has one, is saved. Both
complete in order. How far cycles may be ahead of the last one done is the window, a choice; how far they may be ahead
of the last one closed bounds what a worker keeps in memory that is otherwise waited for by nobody, such as
contributions to a result that no step uses, or everything on a worker without tiles.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from breakstep.steps.reduction import Reduction


def longest_lag(reductions: Iterable[Reduction]) -> int:
    """The longest lag of any reduction, 0 without reductions."""
    return max((reduction.lag for reduction in reductions), default=0)


def cycles_kept(window: int, lag: int) -> int:
    """How many cycles may be open at once, the newest included, for the longest lag of any reduction.

    The oldest cycle that is not done uses results which are ``lag`` + 1 cycles older, so that where results are used
    this is no narrower than the window alone.
    """
    return window + lag + 1


@dataclass(slots=True)
class OpenCycle:
    """What a cycle still misses here: own tasks, and results, releases and checkpoints."""

    tasks: int = 0
    controls: int = 0


class Cycles:
    """The cycles of one worker.

    Parameters
    ----------
    start : int
        First cycle of the run; the one before holds the measurement with which a run begins.
    window, lag : int

    Attributes
    ----------
    emitted : int
        Newest cycle of which a phase was emitted.
    whole : int
        All phases of cycles below this one are emitted.
    closed : int
        All cycles below this one are closed.
    """

    def __init__(self, start: int, window: int, lag: int) -> None:
        self._start, self._window, self._kept = start, window, cycles_kept(window, lag)
        self.emitted = start - 1
        self.whole = self._done = self.closed = start - 1
        self.open: dict[int, OpenCycle] = {}

    @property
    def done(self) -> int:
        """All cycles below this one are done."""
        return max(self._done, self._start)

    def may_emit(self, cycle: int) -> bool:
        """Whether a phase of this cycle may be emitted now."""
        return cycle < self.done + self._window and cycle < self.closed + self._kept

    def emit(self, cycle: int, tasks: int) -> None:
        """A phase with so many own tasks has been emitted."""
        self.emitted = cycle
        self.of(cycle).tasks += tasks

    def of(self, cycle: int) -> OpenCycle:
        """A cycle that is not closed."""
        return self.open.setdefault(cycle, OpenCycle())

    def settle(self) -> bool:
        """Move on over cycles that are done or closed; whether there are new ones of either."""
        before = self._done, self.closed
        while self._done < self.whole and not self.of(self._done).tasks:
            self._done += 1
        while self.closed < self._done and not self.of(self.closed).controls:
            del self.open[self.closed]
            self.closed += 1
        return before != (self._done, self.closed)

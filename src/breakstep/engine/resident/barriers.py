"""Barriers, as one worker sees them: a count that goes up a tree of workers, and a release that comes down it.

A worker counts itself when its own tasks of the phase are done, and the workers below it as they report; then it
reports. No tile data moves.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass, field

from breakstep.engine.resident.cycles import Cycles
from breakstep.engine.resident.states import Exits, SendItem, Waiter
from breakstep.graph.unroll import Phase

WORKER_ARITY = 8  # children of a worker in the barrier tree


@dataclass(slots=True)
class Barrier:
    """One barrier that is not released here.

    Attributes
    ----------
    missing : set of int
        Workers that must report before this one does, itself among them.
    waiters : list of Waiter
        Who stands behind it.
    """

    phase: Phase
    missing: set[int]
    waiters: list[Waiter] = field(default_factory=list)


class Barriers:
    """Barriers under way.

    Parameters
    ----------
    me, workers : int
    stages : collection of int
        Stages behind which a barrier stands.

    Attributes
    ----------
    open : dict of int to Barrier
        By phase, barriers that are not released here.
    early : dict of int to set of int
        By phase that is not emitted here, workers that have reported.
    """

    def __init__(self, me: int, workers: int, stages: Collection[int], cycles: Cycles, exits: Exits) -> None:
        self.me, self.stages, self._cycles, self._exits = me, frozenset(stages), cycles, exits
        first = WORKER_ARITY * me + 1
        self.below = tuple(w for w in range(first, first + WORKER_ARITY) if w < workers)
        self.open: dict[int, Barrier] = {}
        self.early: dict[int, set[int]] = {}
        self._emitted = 0  # newest phase

    def emit(self, phase: Phase, tasks: int) -> None:
        """A phase has been emitted, with so many own tasks."""
        self._emitted = number = phase.number
        if phase.stage.index not in self.stages:
            return
        self.open[number] = Barrier(phase, {self.me, *self.below})
        self._cycles.of(phase.cycle).controls += 1
        for worker in self.early.pop(number, ()):
            self.count(number, worker)
        if tasks == 0:
            self.count(number, self.me)

    def need(self, number: int, waiter: Waiter) -> None:
        """Somebody stands behind the barrier of a phase, and waits if it is not released yet."""
        if number in self.open:
            waiter.missing += 1
            self.open[number].waiters.append(waiter)

    def count(self, number: int, worker: int) -> None:
        """A worker has reported: this one, or one below it. A report that comes again changes nothing."""
        if number > self._emitted:
            self.early.setdefault(number, set()).add(worker)
            return
        barrier = self.open.get(number)
        if barrier is None or worker not in barrier.missing:
            return
        barrier.missing.remove(worker)
        if not barrier.missing:
            self._report(barrier.phase)

    def _report(self, phase: Phase) -> None:
        self._exits.control("count", phase, (self.me,))
        if self.me != 0:
            above = (self.me - 1) // WORKER_ARITY
            self._exits.out.append(SendItem(above, ("count", phase.number, self.me)))
            return
        self._exits.control("release", phase, ())
        self.release(phase.number)

    def release(self, number: int) -> None:
        """All workers are done with a phase. A release that comes again changes nothing."""
        barrier = self.open.pop(number, None)
        if barrier is None:
            return
        self._cycles.of(barrier.phase.cycle).controls -= 1
        self._exits.out.extend(SendItem(worker, ("release", number)) for worker in self.below)
        for waiter in barrier.waiters:
            self._exits.satisfy(waiter)

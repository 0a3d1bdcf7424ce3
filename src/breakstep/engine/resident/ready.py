"""Ready tasks in order of urgency; with a second order, by phase, for when only the oldest phase may run.

A task stands in both orders. Taken from one, it is left in the other as a leftover, which is skipped when it
comes up. Among all phases, leftovers never outnumber the tasks that are ready; those of a phase go with its last task.
"""

from __future__ import annotations

import heapq
from typing import TypeAlias

from breakstep.engine.resident.states import READY, RUNNING, PhaseState, TaskState

Entry: TypeAlias = tuple[tuple[int, int, int], int, TaskState]


class ReadyQueue:
    """Ready tasks of one worker.

    Parameters
    ----------
    by_phase : bool
        Whether :meth:`pop_from` will be asked.
    """

    def __init__(self, by_phase: bool) -> None:
        self._by_phase = by_phase
        self._heap: list[Entry] = []
        self._entries = 0  # settles ties by order of arrival
        self._leftovers = 0

    def __len__(self) -> int:
        return len(self._heap) - self._leftovers

    def push(self, task: TaskState) -> None:
        """A task that misses nothing."""
        task.move(READY)
        self._entries += 1
        entry = (task.priority, self._entries, task)
        heapq.heappush(self._heap, entry)
        if self._by_phase:
            heapq.heappush(task.where.ready, entry)

    def pop(self) -> TaskState | None:
        """The most urgent task, now running."""
        while self._heap:
            task = heapq.heappop(self._heap)[2]
            if task.state is READY:
                task.move(RUNNING)
                self._sweep()
                return task
            self._leftovers -= 1
        return None

    def pop_from(self, phase: PhaseState) -> TaskState | None:
        """The most urgent task of one phase, now running."""
        while phase.ready:
            task = heapq.heappop(phase.ready)[2]
            if task.state is READY:
                task.move(RUNNING)
                self._leftovers += 1
                self._sweep()
                return task
        return None

    def _sweep(self) -> None:
        """Drop leftovers when they are more than half of all: this costs each task a constant on average."""
        if 2 * self._leftovers > len(self._heap):
            self._heap = [entry for entry in self._heap if entry[2].state is READY]
            heapq.heapify(self._heap)
            self._leftovers = 0

    def tasks(self) -> list[TaskState]:
        """Every ready task, in no order."""
        return [task for _, _, task in self._heap if task.state is READY]

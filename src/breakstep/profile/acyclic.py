"""Is a graph of tasks free of cycles? Walks along edges end only then."""

from __future__ import annotations

import numpy as np

from breakstep.profile.compiling import compiled_loop
from breakstep.profile.frames import Integers


def task_on_cycle(tasks: int, producer: Integers, consumer: Integers) -> int:
    """Position of a task that lies on a cycle or behind one, or -1.

    Parameters
    ----------
    tasks : int
        How many tasks there are.
    producer, consumer : ndarray of int64, shape (edges,)
        Positions of the two ends of each edge, 0 <= position < tasks.
    """
    if np.all(producer < consumer):  # the usual case: tasks are emitted after their inputs
        return -1
    return int(_left_over(tasks, producer, consumer))


@compiled_loop
def _left_over(tasks: int, producer: Integers, consumer: Integers) -> int:
    """Kahn's algorithm: take away tasks without inputs until none is left; return the first that stays."""
    first = np.zeros(tasks + 1, dtype=np.int64)
    waiting = np.zeros(tasks, dtype=np.int64)
    for edge in range(len(producer)):
        first[producer[edge] + 1] += 1
        waiting[consumer[edge]] += 1
    first = np.cumsum(first)
    place = first.copy()
    consumers = np.empty(len(producer), dtype=np.int64)
    for edge in range(len(producer)):
        consumers[place[producer[edge]]] = consumer[edge]
        place[producer[edge]] += 1
    free = np.empty(tasks, dtype=np.int64)
    count = 0
    for task in range(tasks):
        if waiting[task] == 0:
            free[count] = task
            count += 1
    taken = 0
    while taken < count:
        task = free[taken]
        taken += 1
        for edge in range(first[task], first[task + 1]):
            waiting[consumers[edge]] -= 1
            if waiting[consumers[edge]] == 0:
                free[count] = consumers[edge]
                count += 1
    for task in range(tasks):
        if waiting[task] > 0:
            return task
    return -1

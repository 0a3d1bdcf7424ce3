"""What went on inside tasks, as arrays: kernels, ghost zones, packing, and kernels' time without a processor.

A kernel computes without waiting for anything, so wall time beyond its thread's processor time is time in which the
system had given the processor to somebody else: other programs, or more threads than there are processors. A step that
waits for a set time instead of computing (the run's manifest names it) is the exception. Processor time above wall
time, from a kernel with threads of its own, counts as none stolen.
"""

from __future__ import annotations

from collections.abc import Collection
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from breakstep.profile.frames import Frames, Integers, codes_of, integers, positions, words_of
from breakstep.profile.schema import INTERVAL_KINDS


class Inside(NamedTuple):
    """All intervals, sorted by task, then start.

    Attributes
    ----------
    task : ndarray of int64, shape (intervals,)
        Position of the task in the task table.
    start, end : ndarray of int64, shape (intervals,)
        [ns]
    stolen : ndarray of int64, shape (intervals,)
        Time without a processor [ns]; 0 outside kernels.
    kernel : ndarray of bool, shape (intervals,)
        Whether a kernel ran; else ghost zones were put together, or rims cut.
    step : ndarray of int64, shape (intervals,)
        Code of the step's name.
    steps : list of str
        The names.
    """

    task: Integers
    start: Integers
    end: Integers
    stolen: Integers
    kernel: NDArray[np.bool_]
    step: Integers
    steps: list[str]


def inside_tasks(frames: Frames, timed: Collection[str] = ()) -> Inside:
    """The intervals of a run whose tables are sound.

    Parameters
    ----------
    timed : collection of str
        Steps none of whose time counts as stolen.
    """
    intervals = frames["intervals"]
    task = positions(integers(frames["tasks"], "task"), integers(intervals, "task"))
    start, end = integers(intervals, "start_ns"), integers(intervals, "end_ns")
    kernel = codes_of(intervals, "what", INTERVAL_KINDS) == INTERVAL_KINDS.index("kernel")
    step, steps = words_of(intervals, "step")
    exempt = np.isin(step, [code for code, name in enumerate(steps) if name in timed])
    stolen = np.where(kernel & ~exempt, np.maximum(end - start - integers(intervals, "cpu_ns"), 0), 0)
    order = _by_task(task, start)
    return Inside(task[order], start[order], end[order], stolen[order], kernel[order], step[order], steps)


def _by_task(task: Integers, start: Integers) -> Integers:
    order: Integers = np.lexsort((start, task)).astype(np.int64)
    return order

"""What the recording calls of one task cost the thread that makes them, in this process and without a cluster.

That is all of recording that falls within a run's span: a task's row, its intervals with both clocks read at either
end, its counters and the rims that came for it, and the packing of full chunks. Working out edges and writing files
come after the last task. CPU time of one thread hardly depends on what else the machine does, unlike the span of two
runs.
"""

from __future__ import annotations

import time
from collections.abc import Callable

from breakstep.engine.execute import Stopwatch
from breakstep.engine.recording import Recorder, TaskRow
from breakstep.measure.cost import spread

TASKS = 2 * 4096  # two full chunks of rows
INTERVALS = ("halo", "kernel", "kernel", "pack")  # of a stage of two steps
COUNTERS = 6  # of the busiest built-in step
ARRIVALS = 4  # rims of a tile whose four neighbours all lie on other workers


def calls_us(rounds: int, clock: Callable[[], int] = time.thread_time_ns) -> dict[str, float]:
    """CPU time of one task's recording calls [us], median and quartiles over rounds."""
    _record(TASKS // 8)  # what the first calls cost once
    return spread([_round(clock) for _ in range(rounds)])


def _round(clock: Callable[[], int]) -> float:
    started = clock()
    _record(TASKS)
    return (clock() - started) * 1e-3 / TASKS


def _record(tasks: int) -> Recorder:
    recorder = Recorder(0, time.perf_counter_ns())
    counters = [("step", f"counter_{number}", number) for number in range(COUNTERS)]
    for number in range(tasks):
        start = time.perf_counter_ns()
        watch = Stopwatch()
        for what in INTERVALS:
            watch.stop(what, "step", watch.start())
        for arrival in range(ARRIVALS):
            recorder.arrival((number, arrival), "field", 1, 1024, (0, 0), start, start)
        recorder.intervals(number, watch.intervals)
        recorder.counters(number, counters)
        row = TaskRow(number, "step", "step", number % 64, number // 64, -1)
        recorder.task(row, start, time.perf_counter_ns(), 1024, False)
    return recorder

"""The record of a run that ended early, made fit to be accounted for.

When a worker is lost its record is lost with it, and Dask makes others repeat what it had done. A profile needs
every thread listed, and every task once.
"""

from __future__ import annotations

import pandas as pd
import pyarrow as pa

from breakstep.profile.record import RowBuffer, RunRecord


def tidy(record: RunRecord, workers: int, threads: int) -> None:
    """Change a record in place.

    Parameters
    ----------
    workers, threads : int
        Workers of the run, and threads of each.
    """
    _list_all_threads(record, workers, threads)
    _keep_first_runs(record)


def _list_all_threads(record: RunRecord, workers: int, threads: int) -> None:
    found = record.threads.table().to_pydict()
    known = set(zip(found["worker"], found["thread"], strict=True))
    every = {(worker, thread) for worker in range(workers) for thread in range(threads)}
    record.threads.extend(sorted(every - known))


def _keep_first_runs(record: RunRecord) -> None:
    """Of a task that ran several times, keep the first time with what lies inside it."""
    tasks = record.tasks.table()
    frame = tasks.select(["task", "start_ns", "end_ns"]).to_pandas().sort_values("start_ns", kind="stable")
    first = frame[~frame["task"].duplicated()]
    if len(first) == len(frame):
        return
    record.tasks = _rows(record.tasks, tasks, first.index)
    intervals = record.intervals.table()
    spans = first.set_index("task").rename(columns={"start_ns": "begin", "end_ns": "until"})
    inside = intervals.select(["task", "start_ns", "end_ns"]).to_pandas().join(spans, "task")
    inside = inside[(inside["start_ns"] >= inside["begin"]) & (inside["end_ns"] <= inside["until"])]
    record.intervals = _rows(record.intervals, intervals, inside.index)
    counters = record.counters.table()
    once = counters.select(["task", "step", "counter"]).to_pandas().drop_duplicates()
    record.counters = _rows(record.counters, counters, once.index)


def _rows(buffer: RowBuffer, table: pa.Table, rows: pd.Index[int]) -> RowBuffer:
    """A buffer of the same layout with some of a table's rows."""
    kept = RowBuffer(buffer.layout)
    kept.add_table(table.take(pa.array(sorted(rows), pa.int64())))
    return kept

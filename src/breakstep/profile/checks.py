"""Do the tables of a profile agree with each other? What the accounts rely on is checked here, once.

Each fault is one sentence that names the table and the first row at fault. It does not look at files,
and it does not judge the run: a task that overlaps another on its thread is a matter for the ledger's
closure, not for this module.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from typing import TypeAlias

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from breakstep.errors import ProfileError
from breakstep.profile.acyclic import task_on_cycle
from breakstep.profile.frames import Frames, codes_of, frames_of, integers, positions, thread_keys
from breakstep.profile.manifest import Manifest
from breakstep.profile.schema import LATEST_NS, LAYOUTS

Where: TypeAlias = Callable[[str], str]
_Fault: TypeAlias = tuple[str, str]

_TIMES = {
    "tasks": ("start_ns", "end_ns"),
    "intervals": ("start_ns", "end_ns"),
    "transfers": ("sent_ns", "arrived_ns"),
}
_AMOUNTS = {
    "tasks": ("task", "worker", "thread", "output_bytes"),
    "intervals": ("cpu_ns",),
    "transfers": ("bytes", "packed_ns", "unpacked_ns", "from_worker", "to_worker"),
    "threads": ("worker", "thread"),
}
_TASK_COLUMNS = {
    "intervals": ("task",),
    "counters": ("task",),
    "edges": ("producer", "consumer"),
    "transfers": ("producer",),
}
_REMEDY = "the profile cannot be accounted for: record the run again"


def sound_frames(tables: Mapping[str, pa.Table], manifest: Manifest, where: Where) -> dict[str, pd.DataFrame]:
    """Turn the tables into frames that the accounts can rely on.

    Parameters
    ----------
    tables : mapping of str to pyarrow.Table
        All tables of the schema, with the schema's columns.
    manifest : Manifest
        Already sound in itself.
    where : callable
        Gives the place of a table, for the message.

    Raises
    ------
    ProfileError
        For the first disagreement found.
    """
    _raise_first(_gaps(tables), where)
    try:
        frames = frames_of(tables)
    except (ValueError, pa.ArrowException) as fault:  # for instance a word that its dictionary lists twice
        raise ProfileError(f"{where('tasks')} or a table beside it: {fault}; {_REMEDY}") from fault
    _raise_first(_faults(frames, manifest), where)
    return frames


def _raise_first(faults: Iterator[_Fault], where: Where) -> None:
    for table, fault in faults:
        raise ProfileError(f"{where(table)}: {fault}; {_REMEDY}", table=table)


def _gaps(tables: Mapping[str, pa.Table]) -> Iterator[_Fault]:
    for name, table in tables.items():
        for column in table.column_names:
            empty = table.column(column).null_count
            if empty:
                yield name, f"column {column}: expected a value in every row, not {empty} empty ones"


def _faults(frames: Frames, manifest: Manifest) -> Iterator[_Fault]:
    for table, frame in frames.items():
        yield from ((table, fault) for fault in _row_faults(table, frame))
    yield from _tile_faults(frames["tasks"], len(manifest["mesh"]["tiles"]))
    yield from _thread_faults(frames, manifest)
    yield from _number_faults(frames)
    yield from _cycle_faults(frames)


def _row_faults(table: str, frame: pd.DataFrame) -> Iterator[str]:
    """Faults that a row has by itself."""
    for column, words in LAYOUTS[table].words.items():
        bad = codes_of(frame, column, words) < 0
        yield from _first(bad, frame, column, f"expected one of {', '.join(words)}")
    for column in _TIMES.get(table, ()):
        times = integers(frame, column)
        bad = (times > LATEST_NS) | (times < -LATEST_NS)
        yield from _first(bad, frame, column, f"expected a time within {LATEST_NS} ns of the run's origin")
    for column in _AMOUNTS.get(table, ()):
        yield from _first(integers(frame, column) < 0, frame, column, "expected zero or more")
    if table in ("tasks", "intervals"):
        bad = integers(frame, "end_ns") < integers(frame, "start_ns")
        yield from _first(bad, frame, "end_ns", "expected an end that is not before the start")


def _first(bad: NDArray[np.bool_], frame: pd.DataFrame, column: str, expected: str) -> Iterator[str]:
    if bad.any():
        row = int(np.argmax(bad))
        yield f"column {column}, row {row}: {expected}, not {frame[column].iloc[row]}"


def _tile_faults(tasks: pd.DataFrame, tiles: int) -> Iterator[_Fault]:
    bad = (integers(tasks, "tile") < -1) | (integers(tasks, "tile") >= tiles)
    expected = f"expected a tile of the manifest (it has {tiles}) or -1"
    yield from (("tasks", fault) for fault in _first(bad, tasks, "tile", expected))


def _thread_faults(frames: Frames, manifest: Manifest) -> Iterator[_Fault]:
    threads, tasks = frames["threads"], frames["tasks"]
    known = np.sort(thread_keys(threads))
    if np.any(known[1:] == known[:-1]):
        yield "threads", "a thread is listed twice"
    if manifest["threads"] != len(known):
        yield "threads", f"expected the {manifest['threads']} threads of the manifest, not {len(known)}"
    workers = np.unique(integers(threads, "worker"))
    if manifest["workers"] != len(workers):
        yield "threads", f"expected the {manifest['workers']} workers of the manifest, not {len(workers)}"
    bad = positions(known, thread_keys(tasks)) < 0
    yield from (("tasks", f) for f in _first(bad, tasks, "worker", "expected a thread of the table threads"))
    for column in ("from_worker", "to_worker"):
        bad = positions(workers, integers(frames["transfers"], column)) < 0
        faults = _first(bad, frames["transfers"], column, "expected a worker of the table threads")
        yield from (("transfers", f) for f in faults)


def _number_faults(frames: Frames) -> Iterator[_Fault]:
    numbers = integers(frames["tasks"], "task")
    repeated = np.append(False, numbers[1:] == numbers[:-1])
    yield from (("tasks", f) for f in _first(repeated, frames["tasks"], "task", "expected each number once"))
    for table, columns in _TASK_COLUMNS.items():
        for column in columns:
            bad = positions(numbers, integers(frames[table], column)) < 0
            faults = _first(bad, frames[table], column, "expected a number of the table tasks")
            yield from ((table, fault) for fault in faults)


def _cycle_faults(frames: Frames) -> Iterator[_Fault]:
    numbers = integers(frames["tasks"], "task")
    ends = [positions(numbers, integers(frames["edges"], column)) for column in ("producer", "consumer")]
    stuck = task_on_cycle(len(numbers), *ends)
    if stuck >= 0:
        yield "edges", f"task {numbers[stuck]} waits for itself through a ring of edges"


def without_unrun(tables: Mapping[str, pa.Table]) -> dict[str, pa.Table]:
    """The tables without rows that speak of tasks which never ran: what a run cut short may leave behind."""
    ran = tables["tasks"].column("task")
    kept = dict(tables)
    for table, columns in _TASK_COLUMNS.items():
        for column in columns:
            kept[table] = kept[table].filter(pc.is_in(kept[table].column(column), value_set=ran.combine_chunks()))
    return kept

"""Live bytes: how much of what tasks made was still needed, when, and on which worker.

An output lives on the worker that made it, from its task's end to the end of the last task that reads it
(over a data or reduction edge), and to the run's end if none does. What a worker keeps of what it received
is the sender's output in this account, so nothing is counted twice. Inputs are freed after outputs are there,
as functional updates have it: at the moment a task ends, both count.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from breakstep.profile.causes import BARRIER
from breakstep.profile.frames import Frames, Integers, codes_of, integers, positions, words_of
from breakstep.profile.schema import EDGE_KINDS


@dataclass(frozen=True)
class LiveBytes:
    """Live bytes over a run.

    Attributes
    ----------
    total : Series of int64, index moment [ns]
        Live bytes of all workers from that moment to the next. A moment at which something is added and
        something freed has two entries, before and after freeing; the highest of all is the high-water mark.
    by_worker : dict of int to Series
        The same for each worker that made something.
    by_kind : dict of str to Series
        The same for each kind of task that made something.
    """

    total: pd.Series[int]
    by_worker: dict[int, pd.Series[int]]
    by_kind: dict[str, pd.Series[int]]

    @property
    def peak_bytes(self) -> int:
        """High-water mark of all workers together [bytes]."""
        return _peak(self.total)

    @property
    def peak_by_worker(self) -> dict[int, int]:
        """High-water mark of each worker, each at its own moment [bytes]."""
        return {worker: _peak(series) for worker, series in self.by_worker.items()}

    @property
    def peak_by_kind(self) -> dict[str, int]:
        """High-water mark of each kind of task's output, each at its own moment [bytes]."""
        return {kind: _peak(series) for kind, series in self.by_kind.items()}


def _peak(series: pd.Series[int]) -> int:
    return int(series.max()) if len(series) else 0


def live_bytes(frames: Frames) -> LiveBytes:
    """Live bytes of a run whose tables are sound."""
    tasks = frames["tasks"]
    made = integers(tasks, "output_bytes") > 0
    size, born = integers(tasks, "output_bytes")[made], integers(tasks, "end_ns")[made]
    freed = np.maximum(_last_use(frames)[made], born)
    worker = integers(tasks, "worker")[made]
    kind, kinds = words_of(tasks, "kind")
    return LiveBytes(
        _series(size, born, freed),
        {int(w): _series(*_of(worker == w, size, born, freed)) for w in np.unique(worker)},
        {kinds[k]: _series(*_of(kind[made] == k, size, born, freed)) for k in np.unique(kind[made])},
    )


def _of(chosen: Any, *columns: Integers) -> tuple[Integers, ...]:
    return tuple(column[chosen] for column in columns)


def _last_use(frames: Frames) -> Integers:
    """End of the last consumer of each task [ns]; the run's end for a task that has none."""
    tasks, edges = frames["tasks"], frames["edges"]
    numbers, end = integers(tasks, "task"), integers(tasks, "end_ns")
    carries = codes_of(edges, "kind", EDGE_KINDS) != BARRIER
    producer = positions(numbers, integers(edges, "producer")[carries])
    consumer = positions(numbers, integers(edges, "consumer")[carries])
    never = np.iinfo(np.int64).min
    last = np.full(len(numbers), never, dtype=np.int64)
    np.maximum.at(last, producer, end[consumer])
    last[last == never] = end.max(initial=0)
    return last


def _series(size: Integers, born: Integers, freed: Integers) -> pd.Series[int]:
    """Running sum of what is there; at equal moments all that is added comes before all that is freed."""
    moment = np.concatenate([born, freed])
    change = np.concatenate([size, -size])
    leaving = np.repeat([0, 1], [len(born), len(freed)])
    order = np.lexsort((leaving, moment))
    moment, leaving, level = moment[order], leaving[order], np.cumsum(change[order])
    # one entry per moment and direction: the last of each group
    last = np.ones(len(moment), dtype=bool)
    last[:-1] = (moment[1:] != moment[:-1]) | (leaving[1:] != leaving[:-1])
    index = pd.Index(moment[last], name="moment_ns")
    return pd.Series(level[last], index=index, name="live_bytes", dtype="int64")

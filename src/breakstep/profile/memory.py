"""Live bytes: how much of what tasks made was still needed, when, and on which worker.

An output lives on the worker that made it, from its task's end to the end of the last task that reads it, and to
the run's end if none does; where the run says what its steps wrote and read, each field of an output by itself (see
:mod:`breakstep.profile.outputs`). What a worker keeps of what it received is the sender's output in this account, so
nothing is counted twice; the initial state is nobody's output, and does not count. Inputs are freed after outputs
are there, as functional updates have it: at the moment a task ends, both count.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from breakstep.profile.frames import Frames, Integers, integers, words_of
from breakstep.profile.outputs import DataKinds, pieces_of, whole_outputs


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
    by_data : dict of str to Series
        The same for each kind of data: a field's name, "rims" of pack tasks, "values" of reductions; "outputs" where
        the run does not say what steps wrote.
    """

    total: pd.Series[int]
    by_worker: dict[int, pd.Series[int]]
    by_kind: dict[str, pd.Series[int]]
    by_data: dict[str, pd.Series[int]]

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

    @property
    def peak_by_data(self) -> dict[str, int]:
        """High-water mark of each kind of data, each at its own moment [bytes]."""
        return {data: _peak(series) for data, series in self.by_data.items()}


def _peak(series: pd.Series[int]) -> int:
    return int(series.max()) if len(series) else 0


def live_bytes(frames: Frames, kinds: DataKinds | None = None) -> LiveBytes:
    """Live bytes of a run whose tables are sound.

    Parameters
    ----------
    kinds : DataKinds, optional
        What outputs consist of; without it an output is one piece, which lives as long as any of it is read.
    """
    tasks = frames["tasks"]
    pieces = whole_outputs(frames) if kinds is None else pieces_of(frames, kinds)
    size, born = pieces.size, integers(tasks, "end_ns")[pieces.task]
    freed = np.maximum(pieces.freed, born)
    worker = integers(tasks, "worker")[pieces.task]
    kind, names = words_of(tasks, "kind")
    kind = kind[pieces.task]
    return LiveBytes(
        _series(size, born, freed),
        {int(w): _series(*_of(worker == w, size, born, freed)) for w in np.unique(worker)},
        {names[k]: _series(*_of(kind == k, size, born, freed)) for k in np.unique(kind)},
        {pieces.names[d]: _series(*_of(pieces.data == d, size, born, freed)) for d in np.unique(pieces.data)},
    )


def _of(chosen: Any, *columns: Integers) -> tuple[Integers, ...]:
    return tuple(column[chosen] for column in columns)


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

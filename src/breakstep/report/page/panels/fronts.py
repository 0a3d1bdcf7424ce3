"""Step fronts: when each tile may begin each cycle, and how long its cores stood idle in the cycle before.

A tile may begin a cycle when the inputs and the barriers of its first task in it are there; whether a core is free
then is another matter. The fronts of a cell of several tiles are those of its last tile.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from breakstep.profile.causes import STEP
from breakstep.profile.frames import Integers, codes_of, integers
from breakstep.profile.run import Profile
from breakstep.profile.schema import TASK_KINDS
from breakstep.profile.timeline import timeline_of
from breakstep.report.page.cells import Cells
from breakstep.report.page.numbers import all_seconds, seconds
from breakstep.report.page.panels.idle import IdleTime

#: Lines beyond this many run into each other on a screen 1200 pixels wide.
MOST_FRONTS = 64
_ABSENT = np.iinfo(np.int64).min


def fronts_panel(profile: Profile, cells: Cells) -> dict[str, Any]:
    """The fronts of one run.

    Returns
    -------
    dict
        ``cycles``: which cycles have a line, every so many of them (``cycles_per_line``). ``front_s`` and
        ``idle_s``, for each of them, for the run's end, and for each cell: the moment [s], and how long the threads
        of the cell's worker stood idle, on average, since the line before [s].
        ``span_s``; ``bend_s``, the mean over lines of last minus first moment.
    """
    ready, owner = _ready(profile, cells)
    origin, span = profile.ledger.first_ns, profile.ledger.span_ns
    cycles = np.flatnonzero((ready != _ABSENT).any(axis=1))
    every = max(1, -(-len(cycles) // MOST_FRONTS))
    chosen = cycles[::every]
    fronts = _filled(ready[chosen]) - origin
    ends = np.concatenate([fronts, np.full((1, cells.count), span)])
    owners = np.concatenate([owner[chosen], owner[chosen][-1:]])
    idle = _idle_between(IdleTime.of(profile), ends, owners)
    inner = ends[1:-1]
    return {
        "cycles": [int(cycle) for cycle in chosen],
        "cycles_per_line": every,
        "front_s": [all_seconds(row) for row in ends],
        "idle_s": [all_seconds(row) for row in idle],
        "span_s": seconds(span),
        "bend_s": seconds(float((inner.max(axis=1) - inner.min(axis=1)).mean())) if len(inner) else 0.0,
    }


def _ready(profile: Profile, cells: Cells) -> tuple[Integers, Integers]:
    """For each cycle and cell, when the last of its tiles had all inputs [ns], and the worker of its first task."""
    tasks = profile.tasks
    kind, tile, cycle = codes_of(tasks, "kind", TASK_KINDS), integers(tasks, "tile"), integers(tasks, "cycle")
    rows = np.flatnonzero((kind == STEP) & (tile >= 0) & (cycle >= 0))
    first = rows[~pd.DataFrame({"c": cycle[rows], "t": tile[rows]}).duplicated().to_numpy()]
    inputs = timeline_of(profile.frames).inputs
    moment = np.maximum(np.maximum(inputs.data_at[first], inputs.barrier_at[first]), profile.ledger.first_ns)
    moment = np.minimum(moment, integers(tasks, "start_ns")[first])
    cycles = int(cycle.max(initial=-1)) + 1
    ready = np.full((cycles, cells.count), _ABSENT, dtype=np.int64)
    owner = np.zeros((cycles, cells.count), dtype=np.int64)
    cell = cells.of_tile[tile[first]]
    np.maximum.at(ready, (cycle[first], cell), moment)
    owner[cycle[first], cell] = integers(tasks, "worker")[first]
    return ready, owner


def _filled(ready: Integers) -> Integers:
    """Cells that did not get to a cycle, in a run that was cut short, get the last moment that others have."""
    last = ready.max(axis=1, keepdims=True)
    return np.where(ready == _ABSENT, last, ready)


def _idle_between(idle: IdleTime, ends: Integers, owners: Integers) -> NDArray[np.float64]:
    """Idle time of each cell's worker from the line before to each line [ns]; none before the first."""
    between = np.zeros(ends.shape)
    for worker in np.unique(owners):
        until = idle.until(int(worker), ends)
        since = np.concatenate([np.zeros((1, ends.shape[1])), until[:-1]])
        between = np.where(owners == worker, until - since, between)
    return between

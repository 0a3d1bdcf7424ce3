"""The realised critical chain: one path through the run whose pieces add up to its span, exactly.

It is walked backwards from the end of the last task. A task was held up by whatever came last of two: its thread's
previous task, or its own latest input (data, a reduction's value, a barrier's release). From its start back to that
moment the dispatch was at work; from there back to the end of the input's task, bytes or messages were in flight; then
that task is the next one. So the span is run, engine and transfer and nothing else: along this chain nobody waits.

Of equal moments the thread's previous task counts first, then data, then the barrier: the less it takes to explain
the start, the better. Clocks that disagree can make an input seem to arrive after the start; the walk never goes
forward in time, so the sum stays exact.

A step's share of the chain is an upper bound of what speeding it up could save, no forecast: another chain may be
almost as long.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd

from breakstep.profile.causes import NEVER, REDUCTION, Timeline
from breakstep.profile.compiling import compiled_loop
from breakstep.profile.frames import Frames, Integers, integers, words_of
from breakstep.profile.inside import Inside

#: The accounts of the chain: kernels with and without a processor, bytes, dispatch.
CHAIN_ACCOUNTS: Final = ("compute", "stolen", "transfer", "engine")
#: What held a task up, in the order of its codes.
VIA: Final = ("start", "thread", "data", "reduction", "barrier")
START, THREAD, DATA_CAME, VALUE_CAME, RELEASED = range(5)


@dataclass(frozen=True)
class Chain:
    """The critical chain of one run.

    Attributes
    ----------
    tasks : DataFrame
        One row per task on the chain, the last one first: ``task`` (its number), ``kind``, ``stage``, ``tile``,
        ``cycle``, ``iteration``, ``worker``, ``thread``; ``via``, what held it up (a word of :data:`VIA`);
        ``start_ns`` and ``end_ns``, the stretch of the run that it stands for: from the end of the task before it on
        the chain to its own end; that stretch by account, in the columns :data:`CHAIN_ACCOUNTS` [ns]; ``flight_ns``,
        the part of ``transfer`` in which its last input was on its way.
    by_step : DataFrame, index step, columns CHAIN_ACCOUNTS
        The same sums [ns], the longest first: time in kernels and for ghost zones under its step, the rest under the
        task's stage.
    """

    tasks: pd.DataFrame
    by_step: pd.DataFrame

    @property
    def accounts_ns(self) -> dict[str, int]:
        """Time of the chain in each account [ns]; the sum is the span."""
        return {account: int(self.tasks[account].sum()) for account in CHAIN_ACCOUNTS}

    @property
    def run_ns(self) -> int:
        """Time in kernels [ns]."""
        return self.accounts_ns["compute"] + self.accounts_ns["stolen"]

    @property
    def transfer_ns(self) -> int:
        """Time for bytes and messages in flight, ghost zones and rims [ns]."""
        return self.accounts_ns["transfer"]

    @property
    def engine_ns(self) -> int:
        """Time in the dispatch [ns]."""
        return self.accounts_ns["engine"]

    @property
    def span_ns(self) -> int:
        """The whole chain [ns]."""
        return sum(self.accounts_ns.values())


def chain_of(frames: Frames, run: Timeline, inside: Inside) -> Chain:
    """Walk the critical chain of a run whose tables are sound."""
    via, source, ready = _holders(run)
    task, upper, start, held, lower = _walked(run, via, source, ready)
    pieces, by_step = _in_kernels(inside, frames, task, upper)
    rows = _rows(frames, task)
    rows["via"] = [VIA[code] for code in via[task]]
    rows["start_ns"], rows["end_ns"] = lower, upper
    rows["compute"], rows["stolen"] = pieces[:, 0], pieces[:, 1]
    rows["transfer"] = pieces[:, 2] + held - lower
    rows["engine"] = start - held + upper - start - pieces.sum(axis=1)
    rows["flight_ns"] = held - lower
    return Chain(rows, _summed_by_step(rows, by_step, held - lower))


def _holders(run: Timeline) -> tuple[Integers, Integers, Integers]:
    """For each task what held it up: a code of VIA, the position of the task behind it (-1 for none), the moment."""
    inputs = run.inputs
    previous = previous_on_thread(run)
    freed = np.where(previous >= 0, run.end[previous], NEVER)
    moments = np.stack([freed, inputs.data_at, inputs.barrier_at])
    choice = np.argmax(moments, axis=0)  # of equal ones the first
    ready = moments.max(axis=0, initial=NEVER)
    source = np.choose(choice, [previous, inputs.data_from, inputs.barrier_from])
    via = np.choose(choice, [THREAD, np.where(inputs.data_kind == REDUCTION, VALUE_CAME, DATA_CAME), RELEASED])
    via = np.where(ready == NEVER, START, via)
    return via, np.where(ready == NEVER, -1, source), ready


def previous_on_thread(run: Timeline) -> Integers:
    """Position of each task's predecessor on its thread, -1 for none."""
    order = np.lexsort((run.end, run.start, run.thread))
    previous = np.full(len(order), -1, dtype=np.int64)
    same = run.thread[order[1:]] == run.thread[order[:-1]]
    previous[order[1:][same]] = order[:-1][same]
    return previous


def _walked(run: Timeline, via: Integers, source: Integers, ready: Integers) -> tuple[Integers, ...]:
    """Tasks of the chain from the last one back, and for each four moments, descending.

    They are the end of its time, its start, the moment that what held it up was there, and the end of the time of the
    task before it.
    """
    if len(run.start) == 0:
        none = np.empty(0, dtype=np.int64)
        return none, none, none, none, none
    first, last = int(run.start.min()), int(run.end.max())
    begin = int(np.flatnonzero(run.end == last)[0])  # of several the lowest number
    count, rows = _walk_back(begin, last, first, run.start, run.end, source, ready)
    return tuple(rows[:count].T)


@compiled_loop
def _walk_back(
    task: int, moment: int, first: int, start: Integers, end: Integers, source: Integers, ready: Integers
) -> tuple[int, Integers]:
    """Columns of a row: task, upper, start, held, lower. Stops where nothing is left, or a task comes up again."""
    rows = np.empty((len(start), 5), np.int64)
    seen = np.zeros(len(start), np.bool_)
    count = 0
    while task >= 0 and not seen[task]:
        seen[task] = True
        rows[count, 0], rows[count, 1] = task, moment
        moment = min(moment, start[task])
        rows[count, 2] = moment
        before = source[task]
        if before >= 0 and not seen[before]:
            moment = max(first, min(moment, ready[task]))
            rows[count, 3] = moment
            moment = max(first, min(moment, end[before]))
        else:
            moment = first
            rows[count, 3] = first
        rows[count, 4] = moment
        count += 1
        task = before
    return count, rows


def _in_kernels(inside: Inside, frames: Frames, task: Integers, upper: Integers) -> tuple[Integers, pd.DataFrame]:
    """For each task of the chain its time in kernels with and without a processor and for ghost zones [ns].

    Also the same by step.
    """
    place = np.full(len(frames["tasks"]), -1, dtype=np.int64)
    place[task] = np.arange(len(task))
    chosen = place[inside.task] >= 0
    row = place[inside.task[chosen]]
    length = _uncovered(
        row, inside.start[chosen], inside.end[chosen], integers(frames["tasks"], "start_ns")[task], upper
    )
    kernel = inside.kernel[chosen]
    stolen = np.minimum(inside.stolen[chosen], length)  # length is shorter than the interval where clocks disagree
    columns = np.stack(
        [np.where(kernel, length - stolen, 0), np.where(kernel, stolen, 0), np.where(kernel, 0, length)], axis=1
    )
    pieces = np.zeros((len(task), 3), dtype=np.int64)
    np.add.at(pieces, row, columns)
    by_step = np.zeros((len(inside.steps), 3), dtype=np.int64)
    np.add.at(by_step, inside.step[chosen], columns)
    return pieces, pd.DataFrame(by_step, index=inside.steps, columns=list(CHAIN_ACCOUNTS[:3]))


@compiled_loop
def _uncovered(row: Integers, start: Integers, end: Integers, begin: Integers, upper: Integers) -> Integers:
    """How much of each interval lies in its task's time and in no interval before it; sorted by row, then start."""
    length = np.zeros(len(row), np.int64)
    reached = begin.copy()
    for place in range(len(row)):
        low, high = max(start[place], reached[row[place]]), min(end[place], upper[row[place]])
        if low < high:
            length[place] = high - low
            reached[row[place]] = high
    return length


def _rows(frames: Frames, task: Integers) -> pd.DataFrame:
    """The task table's columns that say which task it was."""
    columns = ["task", "kind", "stage", "tile", "cycle", "iteration", "worker", "thread"]
    return frames["tasks"][columns].iloc[task].reset_index(drop=True)


def _summed_by_step(rows: pd.DataFrame, by_step: pd.DataFrame, flight: Integers) -> pd.DataFrame:
    """Sums by step: what intervals say, and under the stage what lies outside them."""
    codes, stages = words_of(rows, "stage")
    rest = np.zeros((len(stages), 2), dtype=np.int64)
    np.add.at(rest, codes, np.stack([flight, integers(rows, "engine")], axis=1))
    outside = pd.DataFrame(rest, index=stages, columns=["transfer", "engine"])
    whole = by_step.add(outside, fill_value=0).reindex(columns=list(CHAIN_ACCOUNTS)).fillna(0).astype("int64")
    whole = whole[whole.any(axis=1)]
    longest_first = whole.sum(axis=1).sort_values(ascending=False, kind="stable").index
    return whole.loc[longest_first].rename_axis("step")

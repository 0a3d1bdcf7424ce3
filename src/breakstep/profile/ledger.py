"""The ledger: every core-second of a run in one account, exactly.

From the first task's start to the last task's end, each thread's time is cut up in whole nanoseconds:

- inside a task: in kernels ``compute`` while the thread had a processor, ``stolen`` while it had none; ``transfer``
  while ghost zones are put together and rims are cut; ``engine`` for the rest, and for all of a task that only serves
  a reduction or a barrier;
- between tasks: what :mod:`breakstep.profile.causes` finds;
- after the thread's last task, or without any: ``unemployed``.

The sum is formed account by account and then compared with threads times span. The two can differ only if
tasks overlap on one thread, or intervals overlap or reach out of their task: the record was wrong then, and
``closure_error`` says by how much.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass, field
from functools import cached_property
from typing import Final

import numpy as np
import pandas as pd

from breakstep.profile.causes import (
    PART_COLUMNS,
    REASONS,
    WAITS,
    Blocks,
    Timeline,
    explain_all,
    explain_one,
)
from breakstep.profile.chain import Chain, chain_of
from breakstep.profile.compiling import compiled_loop
from breakstep.profile.factors import Factors, factors_of
from breakstep.profile.frames import (
    Frames,
    Integers,
    integers,
    positions,
    sums_by,
    thread_keys,
)
from breakstep.profile.inside import Inside, inside_tasks
from breakstep.profile.timeline import timeline_of

ACCOUNTS: Final = ("compute", "stolen", "neighbour", "reduction", "barrier", "transfer", "engine", "unemployed")


@dataclass(frozen=True)
class Ledger:
    """The accounts of one run.

    Attributes
    ----------
    first_ns, last_ns : int
        Start of the first task, end of the last [ns].
    threads : int
        Worker threads, also those that ran nothing.
    by_thread : DataFrame, index (worker, thread), columns ACCOUNTS
        [ns]
    gaps : DataFrame
        One row per idle interval that a task ends: ``worker``, ``thread``, ``task`` (that task's number),
        ``start_ns``, ``end_ns``, and its parts in the accounts of ``WAITS`` [ns].
    waits_by_stage : DataFrame, index stage, columns WAITS
        The same parts by the stage that was found at fault [ns].
    """

    first_ns: int
    last_ns: int
    threads: int
    by_thread: pd.DataFrame
    gaps: pd.DataFrame
    waits_by_stage: pd.DataFrame
    _run: Timeline = field(repr=False)
    _numbers: Integers = field(repr=False)
    _frames: Frames = field(repr=False)
    _inside: Inside = field(repr=False)

    @property
    def span_ns(self) -> int:
        """Time from the first task's start to the last task's end [ns]."""
        return self.last_ns - self.first_ns

    @property
    def accounts_ns(self) -> dict[str, int]:
        """Time of all threads in each account [ns]."""
        return {account: int(self.by_thread[account].sum()) for account in ACCOUNTS}

    @property
    def accounts_seconds(self) -> dict[str, float]:
        """Time of all threads in each account [core-seconds]."""
        return {account: ns * 1e-9 for account, ns in self.accounts_ns.items()}

    @property
    def available_ns(self) -> int:
        """Threads times span [ns]."""
        return self.threads * self.span_ns

    @property
    def closure_error(self) -> float:
        """How far the accounts miss threads times span, as a fraction of it."""
        missed = abs(sum(self.accounts_ns.values()) - self.available_ns)
        return missed / self.available_ns if self.available_ns else 0.0

    @cached_property
    def chain(self) -> Chain:
        """The realised critical chain: what the run's span was spent on."""
        return chain_of(self._frames, self._run, self._inside)

    @cached_property
    def factors(self) -> Factors:
        """Published efficiency factors, to be read beside the accounts."""
        return factors_of(self._frames, self._run, self._inside)

    def explain(self, task: int) -> pd.DataFrame:
        """Why the thread was idle before it took up a task.

        Parameters
        ----------
        task : int
            The number of a task that ends a gap.

        Returns
        -------
        DataFrame
            Columns ``account``, ``reason``, ``task`` (the number of the one at fault), ``start_ns``,
            ``end_ns`` and ``ns``, how much of that interval is meant; the latest first. Empty if there was
            no gap.
        """
        found = self.gaps[self.gaps["task"] == task]
        parts = np.empty((0, len(PART_COLUMNS)), dtype=np.int64)
        if len(found):  # a task ends one gap at most
            place = int(positions(self._numbers, np.array([task]))[0])
            parts = explain_one(self._run, place, int(found["start_ns"].iloc[0]), int(found["end_ns"].iloc[0]))
        frame = pd.DataFrame(parts, columns=list(PART_COLUMNS))
        frame["account"] = [WAITS[code] for code in parts[:, PART_COLUMNS.index("account")]]
        frame["reason"] = [REASONS[code] for code in parts[:, PART_COLUMNS.index("reason")]]
        frame["task"] = self._numbers[parts[:, PART_COLUMNS.index("task")]]
        return frame.sort_values("end_ns", ascending=False, kind="stable", ignore_index=True)


def ledger_of(frames: Frames, timed: Collection[str] = ()) -> Ledger:
    """Make the accounts of a run whose tables are sound.

    Parameters
    ----------
    timed : collection of str
        Steps that wait for a set time instead of computing; they have no use for a processor, so none of their
        time is stolen.
    """
    run, inside = timeline_of(frames), inside_tasks(frames, timed)
    first, last = (int(run.start.min()), int(run.end.max())) if len(run.start) else (0, 0)
    by_thread = _empty_accounts(frames)
    _book_tasks(by_thread, inside, run)
    gaps, waits = _book_gaps(by_thread, frames, run, first)
    by_thread["unemployed"] = _unemployed(run.blocks, len(by_thread), first, last)
    numbers = integers(frames["tasks"], "task")
    return Ledger(first, last, len(by_thread), by_thread, gaps, waits, run, numbers, frames, inside)


def _empty_accounts(frames: Frames) -> pd.DataFrame:
    threads = frames["threads"].sort_values(["worker", "thread"])
    index = pd.MultiIndex.from_frame(threads[["worker", "thread"]])
    return pd.DataFrame(0, index=index, columns=list(ACCOUNTS), dtype="int64")


def _book_tasks(by_thread: pd.DataFrame, inside: Inside, run: Timeline) -> None:
    """Book what lies inside tasks."""
    thread, threads, kernel = run.thread[inside.task], len(by_thread), inside.kernel
    length = inside.end - inside.start
    by_thread["compute"] += sums_by(thread[kernel], (length - inside.stolen)[kernel], threads)
    by_thread["stolen"] += sums_by(thread, inside.stolen, threads)
    by_thread["transfer"] += sums_by(thread[~kernel], length[~kernel], threads)
    # Booked as the part of each task that no interval covers. Intervals that overlap or reach out of their
    # task therefore book more than the task lasted, which the closure shows.
    covered = _covered(inside.task, inside.start, inside.end, run.start, run.end)
    by_thread["engine"] += sums_by(run.thread, run.end - run.start - covered, threads)


@compiled_loop
def _covered(task: Integers, start: Integers, end: Integers, task_start: Integers, task_end: Integers) -> Integers:
    """How much of each task lies inside its intervals, which are sorted by task, then start."""
    covered = np.zeros(len(task_start), np.int64)
    reached = task_start.copy()
    for row in range(len(task)):
        owner = task[row]
        begin, until = max(start[row], reached[owner]), min(end[row], task_end[owner])
        if begin < until:
            covered[owner] += until - begin
            reached[owner] = until
    return covered


def _book_gaps(by_thread: pd.DataFrame, frames: Frames, run: Timeline, first: int) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Book the idle time before each block of tasks."""
    blocks = run.blocks
    low, high = _gap_bounds(blocks, first)
    real = low < high
    low, high, task = low[real], high[real], blocks.opener[real]
    stages = list(frames["tasks"]["stage"].cat.categories)
    by_gap, by_stage = explain_all(run, task, low, high, len(stages))
    for place, account in enumerate(WAITS):
        by_thread[account] += sums_by(run.thread[task], by_gap[:, place], len(by_thread))
    keys = np.sort(thread_keys(frames["threads"]))[run.thread[task]]
    gaps = pd.DataFrame({"worker": keys >> 32, "thread": keys & (2**32 - 1)})
    gaps["task"] = integers(frames["tasks"], "task")[task]
    gaps["start_ns"], gaps["end_ns"] = low, high
    gaps[list(WAITS)] = by_gap
    waits = pd.DataFrame(by_stage, index=pd.Index(stages, name="stage", dtype="str"), columns=list(WAITS))
    return gaps, waits


def _gap_bounds(blocks: Blocks, first: int) -> tuple[Integers, Integers]:
    """Idle time before each block [ns]: since the block before, or since the run's first task."""
    low = np.empty_like(blocks.begin)
    low[1:] = blocks.end[:-1]
    opening = blocks.first[:-1]
    low[opening[opening < blocks.first[1:]]] = first
    return low, blocks.begin


def _unemployed(blocks: Blocks, threads: int, first: int, last: int) -> Integers:
    """Time after each thread's last task [ns]."""
    until = np.full(threads, first, dtype=np.int64)
    some = blocks.first[:-1] < blocks.first[1:]
    until[some] = blocks.end[blocks.first[1:][some] - 1]
    return last - until

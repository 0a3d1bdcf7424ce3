"""Timing on a machine that is not quiet: contenders take turns, and ratios are taken turn by turn.

A noisy neighbour slows whoever runs at that moment. Two contenders measured one after the other would differ
by what happened in between; measured in turns, both meet the same minutes, and each round gives a ratio of
its own. The median of those ratios is the figure, the middle half of them tells how far to trust it. Times
by themselves are the fastest of all rounds, because noise only ever adds.

Knows callables and clocks. Refuses to know what is measured.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

Clock = Callable[[], float]
Work = Callable[[], object]
Samples = Mapping[str, Sequence[float]]

_MOST_CALLS = 1 << 20  # a bound for work that a coarse clock never sees


@dataclass(frozen=True)
class Effort:
    """How much measuring is worth: turns of every contender, and the shortest time to measure at once [s]."""

    rounds: int
    shortest: float


FULL = Effort(rounds=9, shortest=0.02)
QUICK = Effort(rounds=3, shortest=0.003)


@dataclass(frozen=True)
class Spread:
    """The median of some values, and the quartiles between which the middle half of them lies."""

    median: float
    low: float
    high: float

    @classmethod
    def of(cls, values: Sequence[float]) -> Spread:
        """Summarise values, at least one."""
        low, median, high = np.percentile(values, [25.0, 50.0, 75.0])
        return cls(float(median), float(low), float(high))


@dataclass(frozen=True)
class Row:
    """One comparison: what ours takes, what the other takes, and how many times longer that is.

    ``needed`` is the least ratio that is asked for, None where nothing is; ``judged`` is False where the
    machine cannot tell. ``details`` are further plain figures of the same measurement.
    """

    what: str
    ours: float
    other: float
    ratio: Spread
    needed: float | None = None
    judged: bool = True
    details: Mapping[str, Any] | None = None

    @property
    def met(self) -> bool | None:
        """Whether the median reaches what is asked for; None if nothing is, or if it cannot be told."""
        return self.ratio.median >= self.needed if self.needed is not None and self.judged else None

    def as_json(self) -> dict[str, Any]:
        """Plain figures."""
        ratio = {"median": self.ratio.median, "low": self.ratio.low, "high": self.ratio.high}
        figures = {"what": self.what, "ours": self.ours, "other": self.other, "ratio": ratio}
        return {**figures, "needed": self.needed, "met": self.met, **(self.details or {})}


def enough_calls(work: Work, shortest: float, clock: Clock) -> int:
    """How many calls in a row last at least ``shortest`` seconds by the clock: a power of two."""
    calls = 1
    while _seconds(work, calls, clock) < shortest and calls < _MOST_CALLS:
        calls *= 2
    return calls


def _seconds(work: Work, calls: int, clock: Clock) -> float:
    started = clock()
    for _ in range(calls):
        work()
    return clock() - started


def in_turn(names: Iterable[str], number: int) -> list[str]:
    """The order of a round: as given, and backwards in every second round."""
    return list(names)[:: 1 if number % 2 == 0 else -1]


def take_turns(
    contenders: Mapping[str, Work], effort: Effort, clock: Clock = time.thread_time
) -> dict[str, list[float]]:
    """Seconds a call of every contender, one figure a round; every second round in the opposite order.

    Parameters
    ----------
    contenders : mapping of str to callable
        Called once each before anything counts, so that compiling and first touches do not.
    clock : callable, optional
        Seconds. By default the CPU time of the calling thread, which leaves out what other programs take
        but not what they do to caches and memory.
    """
    for work in contenders.values():
        work()
    calls = {name: enough_calls(work, effort.shortest, clock) for name, work in contenders.items()}
    samples: dict[str, list[float]] = {name: [] for name in contenders}
    for number in range(effort.rounds):
        for name in in_turn(contenders, number):
            samples[name].append(_seconds(contenders[name], calls[name], clock) / calls[name])
    return samples


def ratio(samples: Samples, slow: str, fast: str) -> Spread:
    """How many times longer ``slow`` took than ``fast``, round by round."""
    return Spread.of([a / b for a, b in zip(samples[slow], samples[fast], strict=True)])

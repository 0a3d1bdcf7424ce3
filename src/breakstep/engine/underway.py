"""Which calls of kernels are under way in this process, and for how long.

Kept only while somebody limits how long a task may last. The time that a compiler takes is not counted. What is known
is also written to a file, for a kernel that holds the interpreter's lock silences its whole process: the file can be
read from outside. Refuses to know what is too long.
"""

from __future__ import annotations

import breakstep.kernels.compiled  # noqa: F401  # isort: skip  (must precede numba)

import contextlib
import os
import threading
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from numba.core import event

from breakstep.steps.step import Call

SLOT = 256  # bytes of the file a thread; the first slot holds the clock
NAME = 120  # characters of a step's name that are kept


@dataclass(frozen=True)
class Underway:
    """One call that has not returned."""

    step: str
    tile: int
    cycle: int
    iteration: int
    seconds: float

    def where(self) -> str:
        """The call in words."""
        iteration = f", iteration {self.iteration}" if self.iteration >= 0 else ""
        return f"step {self.step}, tile {self.tile}, cycle {self.cycle}{iteration}"


class _Compiling(event.Listener):  # type: ignore[misc]
    """Stops the clock while numba compiles, or loads what it has compiled before."""

    def __init__(self, calls: Calls) -> None:
        self.calls = calls

    def on_start(self, event: object) -> None:
        self.calls.pause()

    def on_end(self, event: object) -> None:
        self.calls.go_on()


class Calls:
    """The calls of one process, by thread."""

    def __init__(self) -> None:
        self.on = False
        self._calls: dict[int, tuple[Call, int]] = {}  # thread -> call, and when it began by the clock below
        self._slots: dict[int, int] = {}
        self._paused, self._since, self._depth = 0, 0, 0  # the clock stands still for compilers [ns]
        self._file: int | None = None
        self._lock = threading.Lock()
        self._listener: _Compiling | None = None

    def keep(self, file: str | None = None) -> None:
        """Keep track from now on, in a file too if there is one by that path."""
        self.forget()
        self._calls.clear()  # those of an earlier run that never returned are not this run's
        with contextlib.suppress(OSError):
            self._file = os.open(file, os.O_WRONLY) if file else None
        if self._listener is None:
            self._listener = _Compiling(self)
            event.register("numba:compiler_lock", self._listener)
        self.on = True
        self._write_clock()

    def forget(self) -> None:
        """Keep track no more."""
        self.on = False
        if self._file is not None:
            os.close(self._file)
        self._file = None

    @contextlib.contextmanager
    def under_way(self, call: Call) -> Iterator[None]:
        """For as long as a kernel runs in the calling thread."""
        thread = threading.get_ident()
        self._calls[thread] = call, self._clock()
        self._write(thread, call)
        try:
            yield
        finally:
            self._calls.pop(thread, None)
            self._write(thread, None)

    def now(self) -> list[Underway]:
        """What is under way, the longest first."""
        clock = self._clock()
        calls = [_line(call, (clock - began) / 1e9) for call, began in list(self._calls.values())]
        return sorted(calls, key=lambda one: -one.seconds)

    def pause(self) -> None:
        """Stop the clock."""
        with self._lock:
            self._depth += 1
            if self._depth == 1:
                self._since = time.perf_counter_ns()
        self._write_clock()

    def go_on(self) -> None:
        """Let the clock go on, once for each :meth:`pause`."""
        with self._lock:
            self._depth -= 1
            if self._depth == 0:
                self._paused += time.perf_counter_ns() - self._since
                self._since = 0
        self._write_clock()

    def _clock(self) -> int:
        return (self._since or time.perf_counter_ns()) - self._paused

    def _write(self, thread: int, call: Call | None) -> None:
        if self._file is None:
            return
        with self._lock:
            slot = self._slots.setdefault(thread, 1 + len(self._slots))
        words = "" if call is None else f"{call.step[:NAME]} {call.tile} {call.cycle} {call.iteration} {self._clock()}"
        self._put(slot, words)

    def _write_clock(self) -> None:
        self._put(0, f"{self._since} {self._paused}")

    def _put(self, slot: int, words: str) -> None:
        with contextlib.suppress(OSError):  # the disk is full, or the file closed by another thread: then nobody reads
            if self._file is not None:
                os.pwrite(self._file, words.encode().ljust(SLOT), slot * SLOT)


def _line(call: Call, seconds: float) -> Underway:
    return Underway(call.step, call.tile, call.cycle, call.iteration, seconds)


def read_underway(file: Path) -> list[Underway]:
    """What a process of this machine wrote, the longest first.

    Linux's monotonic clock, which is Python's ``perf_counter``, is one for all processes.
    """
    data = file.read_bytes().decode(errors="replace")
    slots = [data[at : at + SLOT].split() for at in range(0, len(data), SLOT)]
    if not slots or len(slots[0]) != 2:
        return []
    since, paused = map(int, slots[0])
    clock = (since or time.perf_counter_ns()) - paused
    calls = [
        Underway(words[0], int(words[1]), int(words[2]), int(words[3]), (clock - int(words[4])) / 1e9)
        for words in slots[1:]
        if len(words) == 5
    ]
    return sorted(calls, key=lambda one: -one.seconds)


CALLS = Calls()
"""Those of this process."""

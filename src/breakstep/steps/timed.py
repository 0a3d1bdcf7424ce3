"""Steps without code: kernels that wait for as long as a record says that the real step took.

Knows how long to wait, and what is handed on meanwhile so that real bytes move and bits can be compared. Refuses
to know where records come from, and who runs the steps.

The arithmetic is on whole numbers below 2**53, which floating point holds exactly: the bits of a rehearsal depend
on what was received, and on nothing else.
"""

from __future__ import annotations

import hashlib
import time
import zlib
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from functools import cache
from itertools import product
from typing import TypeAlias
from weakref import WeakValueDictionary

import numpy as np

from breakstep.mesh.mesh import Triple
from breakstep.steps.hydro import interior
from breakstep.steps.step import Array, Call, Step

STATE = "rehearsed"
"""Field of a scenario by timers alone that every step changes."""
MODULUS = 2.0**20  # with at most 2**17 numbers a zone and 26 weighted neighbours, sums stay below 2**50
MOST_NUMBERS = 2**17  # a zone; 1 MB across a face of one zone
RAMP = 1024  # the numbers of a payload differ, so that a part that went astray is noticed

Make: TypeAlias = Callable[[Mapping[str, Array], Call], dict[str, Array]]

_known: WeakValueDictionary[str, Schedule] = WeakValueDictionary()


class Schedule:
    """How long a step took on each tile.

    Parameters
    ----------
    seconds : ndarray, shape (cycles, iterations, tiles)
        [s]; NaN in iterations that a cycle did not need.
    """

    def __init__(self, seconds: Array) -> None:
        self.seconds = np.ascontiguousarray(seconds, dtype=np.float64)
        self.seconds.flags.writeable = False
        self.iterations = np.isfinite(self.seconds[:, :, 0]).sum(axis=1)
        self.digest = hashlib.sha256(repr(self.seconds.shape).encode() + self.seconds.tobytes()).hexdigest()

    def __reduce__(self) -> tuple[Callable[[str, Array], Schedule], tuple[str, Array]]:
        return _schedule, (self.digest, self.seconds)

    def at(self, cycle: int, iteration: int, tile: int) -> float:
        """Seconds of one call; iterations that a lag adds cost what the last recorded one did."""
        return float(self.seconds[cycle, min(max(iteration, 0), int(self.iterations[cycle]) - 1), tile])

    def left(self, cycle: int, iteration: int) -> int:
        """Iterations that a cycle still needs after this one; below 0 behind its last."""
        return int(self.iterations[cycle]) - 1 - max(iteration, 0)


def _schedule(digest: str, seconds: Array) -> Schedule:
    """One schedule a process, however many workers live in it."""
    known = _known.get(digest)
    return known if known is not None else _known.setdefault(digest, Schedule(seconds.copy()))


@dataclass(frozen=True)
class TimedKernel:
    """Kernel: make something cheap, and return when the time that the record gives has passed.

    Parameters
    ----------
    schedule : Schedule
    dilate : float
        Factor applied to every wait; 0 for none.
    make : callable
        ``make(arrays, call) -> arrays``: what is handed on.
    """

    schedule: Schedule
    dilate: float
    make: Make

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        """The arrays, once the wait is over; the call then stands for the time that was asked for."""
        began = time.perf_counter_ns()
        made = self.make(arrays, call)
        seconds = self.schedule.at(call.cycle, call.iteration, call.tile)
        call.stands_for = round(seconds * self.dilate * call.fraction * 1e9)
        wait_until(began + call.stands_for)
        return made


def wait_until(moment: int) -> None:
    """Sleep until this process's clock shows a moment [ns]; the interpreter's lock is free meanwhile."""
    while (left := moment - time.perf_counter_ns()) > 0:
        time.sleep(left * 1e-9)


@dataclass(frozen=True)
class Mix:
    """What a step of a scenario by timers alone hands on: a new state, and payloads for steps that exchange.

    Parameters
    ----------
    received : str
        Field whose ghost zones the step reads; "" for none.
    halo : tuple of int
        Its ghost zones along x, y, z: 0 or 1.
    corners : bool
        Whether diagonal neighbours count.
    payloads : tuple of (str, int)
        Fields to make, and how many numbers a zone of each holds.
    """

    received: str
    halo: Triple
    corners: bool
    payloads: tuple[tuple[str, int], ...]

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        """New arrays; whole numbers throughout."""
        state = 5.0 * arrays[STATE][0] + _salt(call.step) + 7.0 * call.cycle + 3.0 * call.iteration
        if self.received:
            state = state + self._from_neighbours(arrays[self.received], call)
        state = np.fmod(state, MODULUS)[np.newaxis]
        return {STATE: state, **{name: payload(state, numbers) for name, numbers in self.payloads}}

    def _from_neighbours(self, padded: Array, call: Call) -> Array:
        """Every number received, weighted by the direction it came from."""
        sums = padded.sum(axis=0)
        total = np.zeros(call.shape)
        for weight, offset in enumerate(directions(self.halo, self.corners), start=1):
            total += weight * sums[tuple(_shifted(offset, self.halo, call.shape))]
        return np.fmod(total, MODULUS)


def directions(halo: Triple, corners: bool) -> Iterator[Triple]:
    """Where neighbours lie, in a fixed order."""
    for x, y, z in product(*((-1, 0, 1) if width else (0,) for width in halo)):
        away = abs(x) + abs(y) + abs(z)
        if away == 1 or (away and corners):
            yield x, y, z


def _shifted(offset: Triple, halo: Triple, shape: Triple) -> Iterator[slice]:
    for move, width, extent in zip(offset, halo, shape, strict=True):
        yield slice(width + move, width + move + extent)


def payload(state: Array, numbers: int) -> Array:
    """Numbers that tell the zone and their own place, shape (numbers, nx, ny, nz)."""
    return _ramp(numbers) + state


@cache
def _ramp(numbers: int) -> Array:
    return np.asarray(np.arange(numbers) % RAMP, dtype=np.float64).reshape(-1, 1, 1, 1)


@cache
def _salt(step: str) -> float:
    """A number that tells one step from another."""
    return float(zlib.crc32(step.encode()) % int(MODULUS))


@dataclass(frozen=True)
class PassOn:
    """What a step by timer hands on among real ones: the field as it was, in a new array.

    Parameters
    ----------
    field : str
    """

    field: str

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        """A copy of the tile's own zones."""
        return {self.field: interior(arrays[self.field], call.shape).copy()}


@dataclass(frozen=True)
class Counting:
    """The same, and in one value a tile how many iterations the cycle still needs.

    Parameters
    ----------
    make : callable
    field : str
    schedule : Schedule
    """

    make: Make
    field: str
    schedule: Schedule

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        """What ``make`` hands on, and the count."""
        left = float(self.schedule.left(call.cycle, call.iteration))
        return {**self.make(arrays, call), self.field: np.full((1, 1, 1, 1), left)}


def timed_kernel(step: Step) -> TimedKernel | None:
    """The kernel of a step by timer; None for a real step."""
    return step.kernel if isinstance(step.kernel, TimedKernel) else None

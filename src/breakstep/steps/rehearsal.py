"""A rehearsal: a splitting whose steps, some or all, are known by measured times alone.

Where all are, the mesh has one zone a rank. Each step changes one small state, so that it comes behind the step
before it; one that exchanges reads a payload which the step before it made, so that it moves as many bytes as the
real code did. Among real steps a timed one reads and hands on the gas, whose ghost zones are the payload then.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Mesh, Triple
from breakstep.mesh.tiling import Tile
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Item, Repeat, Splitting, lie
from breakstep.steps.step import Array, Call, Read, Step
from breakstep.steps.timed import (
    MODULUS,
    STATE,
    Counting,
    Make,
    Mix,
    PassOn,
    Schedule,
    TimedKernel,
    payload,
    timed_kernel,
)

NUMBER_BYTES = 8


@dataclass(frozen=True)
class TimedStep:
    """A step by timer.

    Attributes
    ----------
    name : str
    schedule : Schedule
    halo : tuple of int
        Ghost zones that it reads along x, y, z; none along any for a step without exchange.
    corners : bool
        Whether it needs diagonal neighbours.
    face_bytes : float
        Bytes that a rank sends to one neighbour; without meaning among real steps.
    lag : int
        Iterations by which it learns late that no more are needed.
    """

    name: str
    schedule: Schedule
    halo: Triple = (0, 0, 0)
    corners: bool = False
    face_bytes: float = NUMBER_BYTES
    lag: int = 0

    @property
    def exchanges(self) -> bool:
        """Whether it reads ghost zones."""
        return any(self.halo)

    @property
    def repeats(self) -> bool:
        """Whether some cycle needs more than one iteration."""
        return int(self.schedule.iterations.max()) > 1

    @property
    def numbers(self) -> int:
        """Numbers that a neighbour is sent."""
        return max(1, round(self.face_bytes / NUMBER_BYTES))

    @property
    def payload(self) -> str:
        """The field that it exchanges."""
        return f"sent_{self.name}"

    @property
    def left(self) -> str:
        """The field, and the reduction, that count iterations."""
        return f"left_{self.name}"


def rehearsal(
    name: str, title: str, mesh: Mesh, steps: Sequence[TimedStep], dt: Reduction | None, cycles: int, dilate: float
) -> Problem:
    """The problem of a scenario by timers alone.

    Parameters
    ----------
    mesh : Mesh
        One zone a rank.
    steps : sequence of TimedStep
        In the order of the cycle.
    dt : Reduction or None
        The value made from all ranks at each cycle's beginning, if the code has one.
    dilate : float
    """
    uses = () if dt is None else (dt.name,)
    items = [_item(step, _mixing(step, steps), (*_ghosts(step), Read(STATE)), uses, dilate) for step in steps]
    first = steps[0]
    return Problem(
        name=name,
        title=title,
        mesh=mesh,
        fields=(Field(STATE, ("count",)), *_payload_fields(steps), *counting_fields(steps)),
        splitting=lie(items, () if dt is None else (dt,)),
        initial=Numbered(((first.payload, first.numbers),) if first.exchanges else ()),
        cycles=cycles,
    )


def timed_among(step: TimedStep, field: str, uses: tuple[str, ...], dilate: float) -> Item:
    """A step by timer among real ones: it reads a field with its ghost zones, and hands it on as it was."""
    return _item(step, PassOn(field), (Read(field, step.halo, step.corners),), uses, dilate)


def without_waits(splitting: Splitting) -> Splitting:
    """The same steps, those by timer without their waits."""
    return replace(splitting, orders=tuple(tuple(_hurried(item) for item in order) for order in splitting.orders))


def _hurried(item: Item) -> Item:
    if isinstance(item, Repeat):
        return replace(item, body=tuple(_hurried_step(step) for step in item.body))
    return _hurried_step(item)


def _hurried_step(step: Step) -> Step:
    kernel = timed_kernel(step)
    return step if kernel is None else replace(step, kernel=replace(kernel, dilate=0.0))


def counting_fields(steps: Sequence[TimedStep]) -> tuple[Field, ...]:
    """The fields that steps with iterations need."""
    return tuple(Field(step.left, ("iterations",), scratch=True, per_tile=True) for step in steps if step.repeats)


def _payload_fields(steps: Sequence[TimedStep]) -> tuple[Field, ...]:
    return tuple(Field(s.payload, ("number",) * s.numbers, scratch=True) for s in steps if s.exchanges)


def _ghosts(step: TimedStep) -> tuple[Read, ...]:
    return (Read(step.payload, step.halo, step.corners),) if step.exchanges else ()


def _mixing(step: TimedStep, steps: Sequence[TimedStep]) -> Mix:
    """What a step makes: the payload of whichever step may come next."""
    following = steps[(steps.index(step) + 1) % len(steps)]
    after = dict.fromkeys((step, following) if step.repeats else (following,))
    made = tuple((other.payload, other.numbers) for other in after if other.exchanges)
    return Mix(step.payload if step.exchanges else "", step.halo, step.corners, made)


def _item(step: TimedStep, make: Make, reads: tuple[Read, ...], uses: tuple[str, ...], dilate: float) -> Item:
    writes = (STATE, *(name for name, _ in make.payloads)) if isinstance(make, Mix) else (reads[0].field,)
    if not step.repeats:
        return Step(step.name, TimedKernel(step.schedule, dilate, make), reads, writes, uses)
    counted = Counting(make, step.left, step.schedule)
    body = Step(step.name, TimedKernel(step.schedule, dilate, counted), reads, (*writes, step.left), uses)
    until = Reduction(step.left, IterationsLeft(step.left), (Read(step.left),), Combine.MAX, as_it_is, step.lag)
    most = int(step.schedule.iterations.max()) + step.lag
    return Repeat(f"iterate_{step.name}", (body,), until, none_left, most)


@dataclass(frozen=True)
class IterationsLeft:
    """A tile's contribution to the verdict."""

    field: str

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> Array:
        """How many iterations the cycle still needs."""
        return arrays[self.field].reshape(1)


def as_it_is(combined: Array, previous: Array | None) -> Array:
    """The largest contribution is the result."""
    return combined


def none_left(value: Array) -> bool:
    """Whether the cycle needs no further iteration."""
    return bool(value[0] <= 0.0)


@dataclass(frozen=True)
class Numbered:
    """Initial state: the number of the rank, and what it would have sent before the first step.

    Parameters
    ----------
    payloads : tuple of (str, int)
    """

    payloads: tuple[tuple[str, int], ...]

    def __call__(self, tile: Tile, mesh: Mesh) -> dict[str, Array]:
        """Arrays of one tile."""
        state = np.full((1, *tile.shape), float(tile.number % int(MODULUS)))
        return {STATE: state, **{name: payload(state, numbers) for name, numbers in self.payloads}}

"""The bench: one step with its samples, called again and again under watch.

Every call gets fresh copies of its inputs in poisoned surroundings. What a call does beside returning arrays
(changing inputs, writing past an array, asking for what was not declared) is noted as an incident.
"""

from __future__ import annotations

import itertools
import time
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from breakstep.audit.calls import Outcome, Part, call_watched
from breakstep.audit.memory import MARGIN, Guarded, Watch, fill_heap, odd_arithmetic, usual_arithmetic
from breakstep.audit.sample import Sample
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Triple
from breakstep.steps.step import Array, Call, Read, Step

FINITE = 1.0  # what surrounds inputs unless a probe says otherwise
SECONDS = 8.0  # for one question to one kernel; only costly kernels come near it
VARIATIONS = 18  # states made up beside the samples
Given = dict[str, Array]


@dataclass
class Base:
    """A state to perturb: a sample's, or one made from it."""

    sample: Sample
    given: Given
    call: Call
    values: dict[str, Array]
    outcome: Outcome | None = None


@dataclass
class Bench:
    """One step or reduction under audit.

    Attributes
    ----------
    private : frozenset of str
        Fields whose order of numbers is the steps' own affair.
    incidents : dict of (kind, field) to str
        What calls did beside returning arrays, with the first evidence of each.
    reads : tuple of Read
        As declared, or as they had to be for the kernel to run at all.
    calls : int
        Kernel calls so far.
    """

    part: Part
    fields: Mapping[str, Field]
    samples: list[Sample]
    private: frozenset[str] = frozenset()
    incidents: dict[tuple[str, str], str] = field(default_factory=dict)
    calls: int = 0
    writable: bool = False
    inside: bool = False  # a kernel is running
    is_erratic: bool = False  # the same call gives other bits

    def __post_init__(self) -> None:
        self.watch = Watch()
        self._odd = odd_arithmetic()
        self.reads: tuple[Read, ...] = self.part.reads
        self._bases: list[Base] = []

    @property
    def is_step(self) -> bool:
        """Whether it is a step rather than a reduction."""
        return isinstance(self.part, Step)

    def zone_fields(self) -> list[str]:
        """Declared writes with a value a zone."""
        return [n for n in self.part.writes if not self.fields[n].per_tile] if isinstance(self.part, Step) else []

    def given(self, sample: Sample, corners: float | None = np.nan) -> Given:
        """The declared reads as the engine would give them.

        Parameters
        ----------
        corners : float or None
            What undeclared corners hold; None for what is really there.
        """
        made: Given = {}
        for read in self.reads:
            wide, reach = sample.padded[read.field], sample.reach[read.field]
            cuts = [slice(r - w, n - (r - w)) for r, w, n in zip(reach, read.halo, wide.shape[1:], strict=True)]
            array = np.ascontiguousarray(wide[(slice(None), *cuts)])
            if not read.corners and corners is not None and sum(w > 0 for w in read.halo) > 1:
                array = array.copy()
                array[:, corner_mask(array.shape[1:], read.halo)] = corners
            made[read.field] = array
        return made

    def run(
        self,
        sample: Sample,
        given: Given | None = None,
        *,
        call: Call | None = None,
        values: Mapping[str, Array] | None = None,
        others: Mapping[str, Array] | None = None,
        poison: float = FINITE,
        fill: int = 0,
    ) -> Outcome:
        """Call the kernel; the outcome's arrays are copies."""
        outcome, _ = self.run_raw(
            sample, given, call=call, values=values, others=others, poison=poison, fill=fill
        )  # fmt: skip
        return outcome.copied()

    def run_raw(
        self,
        sample: Sample,
        given: Given | None = None,
        *,
        call: Call | None = None,
        values: Mapping[str, Array] | None = None,
        others: Mapping[str, Array] | None = None,
        poison: float = FINITE,
        fill: int = 0,
    ) -> tuple[Outcome, dict[str, Guarded]]:
        """Call the kernel; the outcome's arrays are what it returned, beside the inputs it had."""
        declared = self.given(sample) if given is None else given
        guarded = {name: self._guarded(array, poison) for name, array in declared.items()}
        others = sample.fields if others is None else others
        asked = _OnRequest(others, lambda name: guarded.setdefault(name, self._guarded(others[name], poison)).array)
        self.watch.fill, self.watch.overrun = fill, 0
        fill_heap(fill or 0x11)
        self.inside = True
        with np.errstate(all="ignore"):
            outcome = call_watched(
                self.watch,
                self.part,
                {name: guarded[name].array for name in declared},
                call or sample.call,
                asked,
                sample.call.values if values is None else values,
            )
        self.inside = False
        fill_heap(0)
        self.calls += 1
        self._note(sample, outcome, guarded)
        if self.writable or not outcome.refused_to_write():
            return outcome, guarded
        where = outcome.place or sample.where()
        self.incident("changed input", "", f"it writes to an array it was given ({where}: {outcome.error})")
        self.writable = True
        return self.run_raw(sample, given, call=call, values=values, others=others, poison=poison, fill=fill)

    def _guarded(self, array: Array, poison: float) -> Guarded:
        guarded = Guarded(array, poison)
        if not self.writable:
            guarded.protect()
        return guarded

    def incident(self, kind: str, name: str, evidence: str) -> None:
        """Note something once."""
        self.incidents.setdefault((kind, name), evidence)

    def _note(self, sample: Sample, outcome: Outcome, guarded: Mapping[str, Guarded]) -> None:
        for name in outcome.asked_fields:
            self.incident("undeclared field", name, sample.where())
        for name in outcome.asked_values:
            self.incident("undeclared reduction", name, sample.where())
        for name, one in guarded.items():
            places = one.changed()
            inside = places[(places >= 0) & (places < one.array.size)]
            if inside.size:
                zone = np.unravel_index(int(inside[0]), one.array.shape)
                self.incident(
                    "changed input", name,
                    f"{inside.size} numbers of {name!r} changed, first at index {tuple(int(i) for i in zone)}"
                    f" of the array it was given ({sample.where()})",
                )  # fmt: skip
            if inside.size < places.size:
                outside = int(places[(places < 0) | (places >= one.array.size)][0])
                side = (
                    f"{-outside} before the first" if outside < 0 else f"{outside - one.array.size + 1} past the last"
                )
                self.incident(
                    "outside memory", f"written:{name}",
                    f"it wrote outside of {name!r}: the double {side} of the array changed ({sample.where()})",
                )  # fmt: skip
        self._note_arithmetic()
        if self.watch.check():
            self.incident(
                "outside memory", "made",
                f"it wrote past an array that it had made, by up to {self.watch.overrun} bytes ({sample.where()})",
            )  # fmt: skip
            self.watch.overrun = 0

    def _note_arithmetic(self) -> None:
        odd = "" if self._odd else odd_arithmetic()
        if odd:
            self.incident("side effect", "", f"it makes the processor {odd}, for all that its thread runs later")
            usual_arithmetic()

    def bases(self) -> Iterator[Base]:
        """States to perturb, made once: the samples, then states made up from them, each with its outcome."""
        for number in itertools.count():
            if number >= len(self.samples) + VARIATIONS:
                return
            if number >= len(self._bases):
                base = self._made_up(number)
                base.outcome = self.run(base.sample, base.given, call=base.call, values=base.values)
                self._bases.append(base)
            yield self._bases[number]

    def in_time(self) -> Iterator[Base]:
        """The same states, as many of them as a few seconds allow."""
        began = time.monotonic()
        for base in self.bases():
            yield base
            if time.monotonic() - began > SECONDS:
                return

    def again(self, base: Base, *, poison: float = FINITE, fill: int = 0) -> Outcome:
        """Call on a state once more."""
        return self.run(base.sample, base.given, call=base.call, values=base.values, poison=poison, fill=fill)

    def _made_up(self, number: int) -> Base:
        count = len(self.samples)
        sample = self.samples[number % count]
        given, call = self.given(sample), sample.call
        values = {name: value.copy() for name, value in call.values.items()}
        if number < count:
            return Base(sample, given, call, values)
        turn = number - count
        rng = np.random.default_rng(1000 + turn)
        kind = turn % 6
        for name, array in given.items():
            given[name] = _varied(array, kind, turn // 6, rng)
        if kind in (2, 5):
            values = {name: value * 10.0 ** rng.uniform(-3, 3) for name, value in values.items()}
        origin = call.origin if turn % 2 else _moved(call, rng)
        call = replace(call, cycle=call.cycle + turn, origin=origin)
        return Base(sample, given, call, values)


class _OnRequest(dict[str, Array]):
    """Arrays that are made when they are asked for."""

    def __init__(self, names: Iterable[str], make: Callable[[str], Array]) -> None:
        super().__init__({name: np.empty(0) for name in names})
        self._make = make

    def __getitem__(self, name: str) -> Array:
        return self._make(name)


def _varied(array: Array, kind: int, turn: int, rng: np.random.Generator) -> Array:
    """A state that a run did not meet: noisy, jumping, scaled, negative, or shuffled."""
    noise = rng.standard_normal(array.shape)
    with np.errstate(all="ignore"):
        if kind == 0:
            return np.asarray(array * (1.0 + 0.1 * noise))
        if kind == 1:
            return np.asarray(array * np.exp(2.0 * noise) + np.where(array == 0.0, noise, 0.0))
        if kind == 2:
            return np.asarray(array * 10.0 ** (7, -7, 12)[turn % 3])
        if kind == 3:
            return np.asarray(-array)
        if kind == 4:
            return np.asarray(rng.permutation(array.reshape(array.shape[0], -1), axis=1).reshape(array.shape))
        size = float(np.nanmax(np.abs(array), initial=1.0)) or 1.0
        return np.asarray(noise * size * 10.0 ** (2, -4, 8)[turn % 3])


def _moved(call: Call, rng: np.random.Generator) -> Triple:
    moved = [int(o + rng.integers(0, 50)) if a else 0 for o, a in zip(call.origin, call.active, strict=True)]
    return (moved[0], moved[1], moved[2])


def corner_mask(shape: tuple[int, ...], halo: Triple) -> NDArray[np.bool_]:
    """Ghost zones that lie outside along two axes or three; shape of the padded array without components."""
    outside = np.zeros(shape, np.int8)
    for axis, width in enumerate(halo):
        place = np.arange(shape[axis])
        beyond = (place < width) | (place >= shape[axis] - width)
        outside += beyond.reshape([-1 if a == axis else 1 for a in range(3)]).astype(np.int8)
    return outside > 1


def layer_mask(shape: tuple[int, ...], halo: Triple, axis: int, side: int, distance: int) -> NDArray[np.bool_]:
    """The ghost zones at a distance from the tile beyond one of its faces, corners left out."""
    mask = np.zeros(shape, bool)
    cuts = [slice(w, n - w) for w, n in zip(halo, shape, strict=True)]
    width, zones = halo[axis], shape[axis]
    place = width - distance if side == 0 else zones - width + distance - 1
    cuts[axis] = slice(place, place + 1)
    mask[tuple(cuts)] = True
    return mask


__all__ = ["MARGIN", "Base", "Bench", "Given", "corner_mask", "layer_mask"]

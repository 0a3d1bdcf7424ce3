"""Calling one kernel alone, and noting everything it does with what it is given."""

from __future__ import annotations

import traceback
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from breakstep.audit.memory import Watch
from breakstep.errors import BreakstepError
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Triple
from breakstep.steps.reduction import Reduction
from breakstep.steps.step import Array, Call, Step

Part: TypeAlias = Step | Reduction


class Served(dict[str, Array]):
    """What was declared, and on request what was not: that is noted in ``asked``."""

    def __init__(self, declared: Mapping[str, Array], others: Mapping[str, Array]) -> None:
        super().__init__(declared)
        self.others = others
        self.asked: list[str] = []

    def __missing__(self, name: str) -> Array:
        if name not in self.others:
            raise KeyError(name)
        if name not in self.asked:
            self.asked.append(name)
        return self.others[name]


@dataclass
class Outcome:
    """What a call yielded.

    Attributes
    ----------
    arrays : dict of str to ndarray or None
        None if it raised; a reduction's vector stands under "".
    error, kind, place : str
        What was raised: message, class, and the line of the user's file.
    asked_fields, asked_values : tuple of str
        What it asked for without having declared it.
    """

    arrays: dict[str, Array] | None
    error: str = ""
    kind: str = ""
    place: str = ""
    asked_fields: tuple[str, ...] = ()
    asked_values: tuple[str, ...] = ()
    counters: dict[str, int] = field(default_factory=dict)

    def bits(self) -> object:
        """Something that is equal for equal outcomes only."""
        if self.arrays is None:
            return self.kind, self.error
        return {n: (a.shape, a.dtype.str, np.ascontiguousarray(a).tobytes()) for n, a in self.arrays.items()}

    def same(self, other: Outcome) -> bool:
        """Whether two outcomes agree to the bit; errors agree if they say the same."""
        if self.arrays is None or other.arrays is None:
            return self.arrays is None and other.arrays is None and self.bits() == other.bits()
        return self.arrays.keys() == other.arrays.keys() and all(
            same_bits(array, other.arrays[name]) for name, array in self.arrays.items()
        )

    def finite(self) -> bool:
        """Whether there is a result and all of it is finite."""
        return self.arrays is not None and all(np.isfinite(array).all() for array in self.arrays.values())

    def refused_to_write(self) -> bool:
        """Whether NumPy ("read-only") or Numba ("readonly") would not let it write to an array."""
        return self.arrays is None and ("read-only" in self.error or "readonly" in self.error)

    def copied(self) -> Outcome:
        """The same with arrays of its own."""
        if self.arrays is None:
            return self
        return replace(self, arrays={name: array.copy() for name, array in self.arrays.items()})


def same_bits(one: Array, two: Array) -> bool:
    """Whether two arrays agree to the bit, NaN included."""
    if one.shape != two.shape or one.dtype != two.dtype:
        return False
    if one.dtype == np.float64:
        return bool(np.array_equal(np.ascontiguousarray(one).view(np.int64), np.ascontiguousarray(two).view(np.int64)))
    return one.tobytes() == two.tobytes()


def unlike(one: Array, two: Array) -> NDArray[np.bool_]:
    """Where two arrays of one shape differ in their bits; NaN equals NaN."""
    return np.asarray((one != two) & ~(np.isnan(one) & np.isnan(two)))


def call_part(
    part: Part, given: Mapping[str, Array], call: Call, others: Mapping[str, Array], values: Mapping[str, Array]
) -> Outcome:
    """Call a step's kernel, or a reduction's, as the engine does.

    Parameters
    ----------
    given : mapping
        The declared reads.
    others, values : mapping
        Every field and every reduction there is; handed out only on request.
    """
    uses = part.uses if isinstance(part, Step) else ()
    served = Served(given, others)
    known = Served({name: values[name] for name in uses if name in values}, values)
    own = replace(call, values=known, counters={})
    made: Any = None
    outcome = Outcome(None)
    try:
        made = part.kernel(served, own)
    except Exception as error:
        outcome = Outcome(None, str(error), type(error).__name__, _place(error))
    else:
        outcome = _taken(made, part)
    outcome.asked_fields, outcome.asked_values = tuple(served.asked), tuple(known.asked)
    outcome.counters = own.counters
    return outcome


def call_watched(
    watch: Watch,
    part: Part,
    given: Mapping[str, Array],
    call: Call,
    others: Mapping[str, Array],
    values: Mapping[str, Array],
) -> Outcome:
    """The same while NumPy's memory is watched.

    Freeing watched memory loses an error that NumPy has set already and leaves a SystemError; the call is then
    repeated unwatched, for its own error.
    """
    with watch.on():
        outcome = call_part(part, given, call, others, values)
    return call_part(part, given, call, others, values) if outcome.kind == "SystemError" else outcome


def _taken(made: Any, part: Part) -> Outcome:
    if isinstance(part, Reduction):
        try:
            return Outcome({"": np.asarray(made, np.float64)})
        except (TypeError, ValueError) as error:
            return Outcome(None, f"returned {type(made).__name__}: {error}", "returned")
    if not isinstance(made, Mapping):
        return Outcome(None, f"returned {type(made).__name__}, not a mapping of field to array", "returned")
    strange = [str(name) for name, array in made.items() if not isinstance(array, np.ndarray)]
    if strange:
        return Outcome(None, f"returned something else than arrays for {', '.join(strange)}", "returned")
    return Outcome(dict(made))


def _place(error: Exception) -> str:
    if isinstance(error, BreakstepError):
        return ""
    frames = [frame for frame in traceback.extract_tb(error.__traceback__) if frame.filename != __file__]
    return f"{Path(frames[-1].filename).name}, line {frames[-1].lineno}" if frames else ""


def name_writes(outcome: Outcome, part: Part, fields: Mapping[str, Field], shape: Triple) -> list[str]:
    """What is wrong with the names, shapes and types of what a step returned, a clause each."""
    if outcome.arrays is None or isinstance(part, Reduction):
        return []
    wrong = [f"returns {name!r}, which it does not declare" for name in sorted(outcome.arrays.keys() - part.writes)]
    wrong += [f"does not return {name!r}, which it declares" for name in part.writes if name not in outcome.arrays]
    for name in part.writes:
        array, expected = outcome.arrays.get(name), fields[name].shape(shape)
        if array is not None and (array.shape != expected or array.dtype != np.float64):
            wrong.append(
                f"returns {name!r} as {array.dtype} of shape {array.shape} where float64 of {expected} belongs"
            )
    return wrong


def first_difference(one: Outcome, two: Outcome, origin: Triple = (0, 0, 0)) -> str:
    """Where two outcomes differ most, in words."""
    if one.arrays is None or two.arrays is None:
        said = [o.error.splitlines()[0][:80] if o.arrays is None and o.error else "a result" for o in (one, two)]
        return f"{said[0]!r} against {said[1]!r}"
    best, words = -1.0, "shapes or names differ"
    for name in sorted(one.arrays.keys() & two.arrays.keys()):
        a, b = one.arrays[name], two.arrays[name]
        if a.shape != b.shape or same_bits(a, b):
            continue
        with np.errstate(all="ignore"):
            gap = np.where(np.isfinite(a) & np.isfinite(b), np.abs(a - b) / (np.abs(a).max() or 1.0), 1e300)
        gap[~unlike(a, b)] = -1.0
        place = np.unravel_index(int(np.argmax(gap)), gap.shape)
        if gap[place] > best:
            best = float(gap[place])
            words = f"{_named(name, place, origin)}: {a[place]:.6g} against {b[place]:.6g}"
    return words


def _named(name: str, place: tuple[Any, ...], origin: Triple) -> str:
    if not name:
        return f"entry {int(place[0])}"
    zone = tuple(int(p) + o for p, o in zip(place[1:], origin, strict=True))
    component = f"[{int(place[0])}]" if place[0] else ""
    return f"{name}{component} in zone {zone}"


def largest_gap(one: Outcome, two: Outcome) -> float:
    """Largest difference between two outcomes, relative to each array's largest value; infinite for NaN or errors."""
    if one.arrays is None or two.arrays is None or one.arrays.keys() != two.arrays.keys():
        return np.inf
    largest = 0.0
    for name, a in one.arrays.items():
        b = two.arrays[name]
        if a.shape != b.shape:
            return np.inf
        if same_bits(a, b) or not a.size:
            continue
        with np.errstate(all="ignore"):
            gap = np.abs(a - b) / (max(np.abs(a).max(), np.abs(b).max()) or 1.0)
        largest = max(largest, float(np.nan_to_num(gap, nan=np.inf, posinf=np.inf).max()))
    return largest

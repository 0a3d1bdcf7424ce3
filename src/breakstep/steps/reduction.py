"""A reduction: one small vector made from all tiles and used by all.

Each tile contributes a vector; vectors are combined entry by entry along a fixed tree over tile numbers,
so that the bits depend neither on placement nor on timing; the root turns the combined vector into the
result that steps use. Its ``lag`` says how late that result may be used.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from enum import StrEnum
from typing import TypeAlias

import numpy as np

from breakstep.errors import DeclarationError, KernelError
from breakstep.steps.calling import call_user
from breakstep.steps.step import Array, Call, Read, check_name, check_reads

Partial: TypeAlias = Callable[[Mapping[str, Array], Call], Array]
Finish: TypeAlias = Callable[[Array, Array | None], Array]


class Combine(StrEnum):
    """How two vectors become one, entry by entry."""

    MIN = "min"
    MAX = "max"
    SUM = "sum"


_OPERATIONS = {Combine.MIN: np.minimum, Combine.MAX: np.maximum, Combine.SUM: np.add}


@dataclass(frozen=True)
class Reduction:
    """A value made from all tiles.

    Parameters
    ----------
    name : str
    kernel : callable
        ``kernel(arrays, call) -> vector`` for one tile; reads its own zones only.
    reads : tuple of Read
    combine : Combine
        NaN in any contribution survives every kind.
    finish : callable
        ``finish(combined, previous result or None) -> result``; pure.
    lag : int
        How many cycles (or iterations, in a repeat) late the result is used; 0 is the classical code.
    """

    name: str
    kernel: Partial
    reads: tuple[Read, ...]
    combine: Combine
    finish: Finish
    lag: int = 0

    def __post_init__(self) -> None:
        check_name("reduction", self.name)
        check_reads(f"reduction {self.name!r}", self.reads)
        if not isinstance(self.lag, int) or self.lag < 0:
            raise DeclarationError(f"reduction {self.name!r}: lag must be a whole number, 0 or more, not {self.lag!r}")
        if self.combine not in tuple(Combine):
            known = ", ".join(Combine)
            raise DeclarationError(f"reduction {self.name!r} combines by one of {known}, not {self.combine!r}")
        object.__setattr__(self, "combine", Combine(self.combine))
        if not all(read.is_local for read in self.reads):
            raise DeclarationError(f"reduction {self.name!r} reads ghost zones; it may read its own zones only")


def combine(kind: Combine, vectors: list[Array | None]) -> Array | None:
    """Combine vectors in the order given; None stands for "passed through" and is left out."""
    present = [vector for vector in vectors if vector is not None]
    if not present:
        return None
    if any(vector.shape != present[0].shape for vector in present):
        sizes = ", ".join(sorted({str(vector.size) for vector in present}))
        raise KernelError(f"tiles contribute vectors of different lengths ({sizes}) to a reduction; return one length")
    total: Array = present[0].copy()
    operation: Callable[[Array, Array], Array] = _OPERATIONS[kind]
    for vector in present[1:]:
        total = np.asarray(operation(total, vector))
    return np.asarray(total, dtype=np.float64)


def finish_rows(reduction: Reduction, combined: Array | None, previous: Array | None, rows: int) -> Array:
    """The result at the root, shape (rows, n): each row is finished from the one before it.

    A reduction that every tile passed through repeats its previous result.
    """
    made = []
    if combined is not None:
        combined.flags.writeable = False
    for _ in range(rows):
        if combined is not None:
            previous = _finished(reduction, combined, previous)
        if previous is None:
            raise DeclarationError(f"reduction {reduction.name!r} was passed through before it had a result")
        made.append(previous)
    result = np.stack(made)
    result.flags.writeable = False
    return result


def _finished(reduction: Reduction, combined: Array, previous: Array | None) -> Array:
    where = f"finish of reduction {reduction.name}"
    result = call_user(np.array, call_user(reduction.finish, combined, previous, where=where), where=where)
    if result.ndim != 1 or (previous is not None and result.shape != previous.shape):
        expected = "a vector" if previous is None else f"a vector of {previous.size}, as before"
        raise KernelError(f"{where}: expected {expected}, got shape {result.shape}")
    vector: Array = result.astype(np.float64)
    return vector

"""Bytes of the arrays that a worker holds, each array counted once however many phases hold it.

A task whose repeat has converged hands its inputs on, and a kernel may return an input: then two phases hold the
same array, and it lives until both have let it go.
"""

from __future__ import annotations

from collections.abc import Mapping

from breakstep.steps.step import Array


class LiveBytes:
    """Counts bytes.

    Attributes
    ----------
    now, peak : int
        Bytes held at this moment, and most ever.
    moving : int
        The part of ``now`` that is on its way to other workers.
    """

    def __init__(self) -> None:
        self.now = self.peak = self.moving = 0
        self._holders: dict[int, int] = {}  # by the id of an array, which is unique while somebody holds it

    def hold(self, arrays: Mapping[str, Array]) -> None:
        """These arrays have one holder more."""
        holders = self._holders
        for array in arrays.values():
            before = holders.get(id(array), 0)
            holders[id(array)] = before + 1
            if before == 0:
                self.add(array.nbytes)

    def let_go(self, arrays: Mapping[str, Array]) -> None:
        """These arrays have one holder fewer."""
        holders = self._holders
        for array in arrays.values():
            left = holders[id(array)] - 1
            if left:
                holders[id(array)] = left
            else:
                del holders[id(array)]
                self.now -= array.nbytes

    def add(self, nbytes: int) -> None:
        """Something else is held (negative: no longer)."""
        self.now += nbytes
        if self.now > self.peak:
            self.peak = self.now

    def move(self, nbytes: int) -> None:
        """Bytes set out for other workers (negative: have got there)."""
        self.moving += nbytes
        self.add(nbytes)

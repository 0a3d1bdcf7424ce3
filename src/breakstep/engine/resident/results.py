"""Results of reductions on one worker: which are known, which are still to come, and who waits for them.

Instances are numbered in the order in which phases that make them are emitted, so that everything below
``announced`` is known here, is expected, or has been forgotten: a result that comes again can be told from one
that comes early.
"""

from __future__ import annotations

from collections.abc import Sequence

from breakstep.engine.resident.states import Waiter
from breakstep.steps.step import Array


class Results:
    """Results by instance.

    Parameters
    ----------
    given : sequence of ndarray
        Results that the run begins with.
    cycle : int
        The cycle before the first, in which they count as made.

    Attributes
    ----------
    known : dict of int to ndarray
    expected : dict of int to int
        Cycle of results that are not known, of phases emitted here.
    announced : int
    """

    def __init__(self, given: Sequence[Array], cycle: int) -> None:
        self.known: dict[int, Array] = dict(enumerate(given))
        self.expected: dict[int, int] = {}
        self.announced = len(given)
        self.waiting: dict[int, list[Waiter]] = {}
        self._made_in = dict.fromkeys(self.known, cycle)

    def announce(self, instance: int, cycle: int) -> bool:
        """A phase that makes a result has been emitted; whether the result is still to come."""
        self.announced = instance + 1
        self._made_in[instance] = cycle
        if instance in self.known:  # others were ahead
            return False
        self.expected[instance] = cycle
        return True

    def need(self, instance: int, waiter: Waiter) -> None:
        """Somebody needs a result, and waits for it if it is not known yet."""
        if instance not in self.known:
            waiter.missing += 1
            self.waiting.setdefault(instance, []).append(waiter)

    def is_new(self, instance: int) -> bool:
        """Whether a result that has come was not here before."""
        return instance in self.expected or (instance >= self.announced and instance not in self.known)

    def put(self, instance: int, vector: Array) -> tuple[list[Waiter], int | None]:
        """A result has come: who waited for it, and the cycle that expected it."""
        vector.flags.writeable = False  # steps are handed a view of it, here as at the root
        self.known[instance] = vector
        return self.waiting.pop(instance, []), self.expected.pop(instance, None)

    def forget(self, before: int) -> None:
        """Drop results made before a cycle: no phase, node or checkpoint to come can use them."""
        for instance in [i for i, cycle in self._made_in.items() if cycle < before]:
            del self._made_in[instance], self.known[instance]

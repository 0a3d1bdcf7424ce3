"""Results: early, expected, come again, forgotten."""

from __future__ import annotations

import numpy as np

from breakstep.engine.resident.results import Results
from breakstep.engine.resident.states import Waiter

VECTOR = np.ones((1, 2))


def test_a_result_that_is_expected() -> None:
    results, waiter = Results([], -1), Waiter()
    assert results.announce(0, cycle=3)
    results.need(0, waiter)
    assert waiter.missing == 1
    assert results.is_new(0)
    assert results.put(0, VECTOR) == ([waiter], 3)
    assert not results.is_new(0)
    late = Waiter()
    results.need(0, late)
    assert late.missing == 0


def test_a_result_that_comes_before_its_phase_is_emitted_here() -> None:
    results = Results([], -1)
    assert results.is_new(2)
    assert results.put(2, VECTOR) == ([], None)
    assert not results.is_new(2)
    assert results.announce(0, 0)
    assert results.announce(1, 0)
    assert not results.announce(2, 0), "it is not to come any more"
    assert results.expected == {0: 0, 1: 0}


def test_a_result_that_is_forgotten_is_not_taken_for_new() -> None:
    results = Results([VECTOR], cycle=-1)
    for instance, cycle in ((1, 0), (2, 1)):
        results.announce(instance, cycle)
        results.put(instance, VECTOR)
    results.forget(before=1)
    assert list(results.known) == [2]
    assert not any(results.is_new(instance) for instance in (0, 1, 2))
    assert results.is_new(3)

"""Cycles are done and closed in order, and bound how far ahead phases are emitted."""

from __future__ import annotations

import pytest

from breakstep.engine.resident.cycles import Cycles, cycles_kept, longest_lag
from tests.mixtures import measured


def emitted(cycles: Cycles, tasks: int, upto: int) -> None:
    """Emit whole cycles up to and without this one."""
    for cycle in range(cycles.emitted + 1, upto):
        cycles.emit(cycle, tasks)
        cycles.whole = cycle + 1


def test_a_cycle_is_done_without_and_closed_with_its_controls() -> None:
    cycles = Cycles(0, window=3, lag=0)
    emitted(cycles, 2, upto=2)
    cycles.of(0).controls += 1
    cycles.settle()
    assert (cycles.done, cycles.closed) == (0, 0)
    cycles.of(1).tasks -= 2
    assert not cycles.settle(), "cycle 1 must wait for cycle 0"
    cycles.of(0).tasks -= 2
    assert cycles.settle()
    assert (cycles.done, cycles.closed) == (2, 0)
    cycles.of(0).controls -= 1
    assert cycles.settle()
    assert (cycles.closed, cycles.open) == (2, {})
    assert not cycles.settle()


def test_a_cycle_that_is_not_whole_is_not_done() -> None:
    cycles = Cycles(0, window=2, lag=0)
    cycles.emit(0, 0)
    cycles.settle()
    assert cycles.done == 0
    cycles.whole = 1
    cycles.settle()
    assert (cycles.done, cycles.closed) == (1, 1)


def test_the_first_measurement_is_a_cycle_of_its_own() -> None:
    """It counts as no cycle done, however early it is."""
    cycles = Cycles(0, window=1, lag=0)
    cycles.emit(-1, 3)
    cycles.whole = 0
    cycles.settle()
    assert (cycles.done, cycles.closed) == (0, -1)
    assert cycles.may_emit(0)
    assert not cycles.may_emit(1)


@pytest.mark.parametrize(("window", "lag", "kept"), [(1, 0, 2), (1, 2, 4), (4, 1, 6)])
def test_the_window_and_what_is_kept(window: int, lag: int, kept: int) -> None:
    """With all tasks done but nothing closed, a cycle is emitted while so many are open."""
    assert cycles_kept(window, lag) == kept
    cycles = Cycles(5, window, lag)
    emitted(cycles, 0, upto=30)
    cycles.of(5).controls += 1
    cycles.settle()
    assert (cycles.done, cycles.closed) == (30, 5)
    assert cycles.may_emit(4 + kept)
    assert not cycles.may_emit(5 + kept)
    cycles.of(5).controls -= 1
    cycles.settle()
    assert cycles.may_emit(29 + window)
    assert not cycles.may_emit(30 + window)


def test_the_longest_lag() -> None:
    assert longest_lag([]) == 0
    assert longest_lag([measured("x", "a", lag=2), measured("y", "a", lag=1)]) == 2

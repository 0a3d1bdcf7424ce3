"""The only moves that a task can make."""

from __future__ import annotations

from itertools import product

import pytest

from breakstep.engine.resident.states import DONE, MOVES, READY, RUNNING, WAITING, PhaseState, TaskState, Waiter
from tests.unit.engine.resident.hands import line, phase_like

STATES = (WAITING, READY, RUNNING, DONE)
LEGAL = {(WAITING, READY), (READY, RUNNING), (RUNNING, DONE)}


def task_in(state: str) -> TaskState:
    task = TaskState(PhaseState(1, phase_like(line())), 2, (0, 0, 1))
    task.state = state
    return task


@pytest.mark.parametrize(("state", "to"), list(product(STATES, STATES)))
def test_every_move_but_three_is_refused(state: str, to: str) -> None:
    task = task_in(state)
    if (state, to) in LEGAL:
        task.move(to)
        assert task.state == to
        return
    with pytest.raises(AssertionError, match=f"cycle 0, tile 2.: from {state} to {to} is no legal move"):
        task.move(to)
    assert task.state == state


def test_a_life_has_three_moves() -> None:
    assert set(MOVES.items()) == LEGAL


def test_readers_are_counted_and_wait_only_for_what_is_not_there() -> None:
    phase, reader = PhaseState(1, None), Waiter()
    phase.held[3] = {}
    phase.read((2, 3, 4), reader)
    phase.read((3,), Waiter())
    assert phase.readers == {2: 1, 3: 2, 4: 1}
    assert reader.missing == 2
    assert phase.waiting == {2: [reader], 4: [reader]}

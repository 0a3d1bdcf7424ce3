"""Unrolling in small: what is emitted before which value is asked for."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.errors import ConvergenceError, KernelError
from breakstep.graph.stages import build_template
from breakstep.graph.unroll import INITIAL, Need, Phase, Unroller, ValueRef
from breakstep.steps.splitting import lie
from breakstep.steps.step import Array, Read, Step
from tests import toys
from tests.toys import Toy, dt_reduction

Event = Phase | Need


def unroller(toy: Toy, **options: object) -> Unroller:
    """An unroller of a toy."""
    return Unroller(build_template(toy.splitting()), toy.cycles, **options)  # type: ignore[arg-type]


def drive(unrolling: Unroller, residuals: list[float]) -> list[Event]:
    """All events, when verdicts come out as listed, one an iteration; other values are 1."""
    events: list[Event] = []
    verdicts = iter(residuals)
    known: dict[int, float] = {}
    run, answer = unrolling.run(), None
    while True:
        try:
            event = run.send(answer)
        except StopIteration:
            return events
        events.append(event)
        answer = None
        if isinstance(event, Phase):
            known |= {making.instance: next(verdicts) for making in event.makes if event.stage.repeat}
        else:
            answer = [np.full((9, 1), known.get(i, 1.0)) for i in event.instances]


def shape_of(events: list[Event]) -> str:
    """One letter an event: the initial of a stage's name, or ``?`` for a need."""
    return "".join("?" if isinstance(e, Need) else e.stage.name[0] for e in events)


def phases_of(events: list[Event]) -> list[Phase]:
    """The phases alone."""
    return [event for event in events if isinstance(event, Phase)]


def test_without_repeats_nothing_is_asked() -> None:
    events = drive(unroller(Toy((12,), repeats=False, cycles=2)), [])
    assert shape_of(events) == "d" + "sdgb" * 2
    assert [phase.number for phase in phases_of(events)] == list(range(1, 10))


def test_the_first_cycle_asks_after_each_iteration() -> None:
    events = drive(unroller(Toy((12,), cycles=1)), [1.0, 1.0, 0.0])
    assert shape_of(events) == "d" + "sdgb" + "r?r?r?" + "d"


def test_later_cycles_emit_what_the_last_one_needed_before_they_ask() -> None:
    """Three iterations in the first cycle; the second stops after two, so that the third passes through."""
    events = drive(unroller(Toy((12,), cycles=2)), [1.0, 1.0, 0.0, 1.0, 0.0, 0.0])
    assert shape_of(events) == "d" + "sdgb" + "r?r?r?" + "d" + "sdgb" + "rrr?" + "d"
    gates = [phase.gate is not None for phase in phases_of(events) if phase.stage.repeat]
    assert gates == [False, True, True] * 2


def test_a_cycle_that_needs_more_than_foreseen_goes_on_asking() -> None:
    unrolling = unroller(Toy((12,), cycles=2))
    events = drive(unrolling, [0.0, 1.0, 1.0, 0.0])
    assert shape_of(events) == "d" + "sdgb" + "r?" + "d" + "sdgb" + "r?r?r?" + "d"
    assert unrolling.iterations("solve") == 3
    assert unrolling.iterations("unknown") == 0


def test_with_a_lag_the_next_iteration_is_emitted_while_a_verdict_is_out() -> None:
    """The verdict asked for is the one before the newest, else a lag would hide nothing."""
    events = drive(unroller(Toy((12,), cycles=1, residual_lag=1)), [1.0, 0.0, 0.0])
    assert shape_of(events) == "d" + "sdgb" + "rr?r?" + "d"
    asked = [event.instances for event in events if isinstance(event, Need)]
    verdicts = [making.instance for phase in phases_of(events) if phase.stage.repeat for making in phase.makes]
    assert asked == [(verdicts[0],), (verdicts[1],)]


def test_gates_look_back_by_one_and_the_lag() -> None:
    events = drive(unroller(Toy((12,), cycles=1, residual_lag=2)), [1.0, 1.0, 0.0, 0.0, 0.0])
    solving = [phase for phase in phases_of(events) if phase.stage.repeat]
    made = [phase.makes[0].instance for phase in solving]
    assert [phase.gate for phase in solving] == [None, None, None, ValueRef(made[0]), ValueRef(made[1])]
    assert [phase.makes[0].previous for phase in solving] == [None, *made[:-1]]


@pytest.mark.parametrize("lag", [0, 1, 3])
def test_each_cycle_uses_the_value_measured_a_lag_before(lag: int) -> None:
    """Instance 0 is measured at the start and has a row for each of the first cycles; c + 1 at the end of c."""
    events = drive(unroller(Toy((12,), repeats=False, cycles=6, dt_lag=lag)), [])
    phases = phases_of(events)
    (first,) = phases[0].makes
    assert first.rows == 1 + lag
    measured_at_end = {phase.cycle: making.instance for phase in phases for making in phase.makes}
    for phase in phases:
        if phase.values:
            beginning = phase.cycle - lag
            instance = measured_at_end[beginning - 1] if beginning > 0 else first.instance
            assert phase.values["dt"] == ValueRef(instance, 0 if beginning > 0 else phase.cycle)


def test_a_repeat_that_does_not_converge_says_so() -> None:
    with pytest.raises(ConvergenceError) as caught:
        drive(unroller(Toy((12,), cycles=1, at_most=3)), [1.0, 0.5, 0.25])
    assert str(caught.value).startswith("solve did not converge in cycle 0: after 3 iterations its residual is 0.25;")
    assert caught.value.details == {"repeat": "solve", "cycle": 0, "value": [0.25]}


def test_nan_never_converges() -> None:
    with pytest.raises(ConvergenceError, match="its residual is nan"):
        drive(unroller(Toy((12,), cycles=1, at_most=2)), [np.nan, np.nan])


def test_a_verdict_within_the_lag_of_the_last_iteration_counts() -> None:
    unrolling = unroller(Toy((12,), cycles=1, at_most=3, residual_lag=2))
    assert shape_of(drive(unrolling, [1.0, 1.0, 0.0])).count("r") == 3
    assert unrolling.iterations("solve") == 3


def test_a_run_ends_before_the_cycle_whose_value_says_so() -> None:
    seen: list[Array] = []

    def ended(value: Array) -> bool:
        seen.append(value)
        return len(seen) == 3

    events = drive(unroller(Toy((12,), repeats=False, cycles=9, dt_lag=1), ended=ended), [])
    assert shape_of(events) == "d" + "?sdgb" * 2 + "?"


def test_a_faulty_stop_function_is_told_from_a_defect() -> None:
    with pytest.raises(KernelError, match="stop of repeat solve, cycle 0: the user's function raised TypeError"):
        drive(unroller(Toy((12,), cycles=1)), [None])  # type: ignore[list-item]


def test_phases_wait_for_the_barrier_before_them() -> None:
    phases = phases_of(drive(unroller(Toy((12,), repeats=False, cycles=1), barriers=("drift",)), []))
    waits = {phase.stage.name: phase.waits_for for phase in phases[1:]}
    drift = next(phase.number for phase in phases if phase.stage.name == "drift")
    assert waits["grow+trade"] == drift
    assert waits["smooth"] is waits["drift"] is None


def test_scratch_fields_are_let_go_after_their_cycle() -> None:
    make = Step("make", toys.smooth, (Read("u", (1, 0, 0)),), ("v",))
    use = Step("use", toys.smooth, (Read("v", (1, 0, 0)),), ("u",))
    unrolling = Unroller(build_template(lie([make, use], [dt_reduction()])), 2)
    live = {}
    for event in unrolling.run():
        assert isinstance(event, Phase)
        live[event.number] = unrolling.live_phases(["u"])
    # 1 measures; 2 makes, 3 uses; 4 makes, 5 uses
    assert live == {1: {INITIAL}, 2: {INITIAL, 2}, 3: {2, 3}, 4: {3, 4}, 5: {4, 5}}

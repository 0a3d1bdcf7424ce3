"""The state machine by hand: who sends what when, what is held, and in what order a cycle goes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from breakstep.engine.program import Program
from breakstep.engine.resident.core import Save, SendItem, SendRims
from breakstep.engine.resident.inputs import cut_rims
from breakstep.engine.resident.invariants import check
from breakstep.engine.run import RunOptions
from breakstep.engine.serial import SerialDispatch
from breakstep.steps.step import Read
from tests.mixtures import Ends, measured, mixing
from tests.simulated import Beginning, SimulatedCluster
from tests.unit.engine.resident.hands import (
    DT,
    LOCAL,
    SMOOTH,
    STEERED,
    ended,
    finish,
    go_on,
    line,
    machine,
    obeyed,
    take,
)

HALVES = [0, 0, 1, 1]


def rims(order: object) -> tuple[int, int, int, int]:
    assert isinstance(order, SendRims)
    return order.worker, order.phase, order.tile, order.source


def test_rims_are_sent_when_a_reader_is_emitted_or_their_tile_is_done() -> None:
    """Tile 1 lies at the seam; three cycles of one halo step are phases 1, 2 and 3."""
    core = machine(line(), HALVES)
    assert [rims(order) for order in core.start()] == [(1, 1, 1, 0)]
    first = take(core)
    assert first.tile == 0, "tile 1 misses rims of tile 2"
    assert finish(core, first) == []
    assert core.take() is None
    (order,) = machine(line(), HALVES, worker=1).start()
    assert isinstance(order, SendRims)
    core.arrive(("rims", 1, 2, 0), cut_rims(order, order.arrays))
    second = take(core)
    assert second.tile == 1
    owed = [rims(order) for order in core.owed(second)]
    made = finish(core, second)
    assert [rims(order) for order in made] == owed == [(1, 2, 1, 1)]
    assert take(core).phase.number == 2


def test_rims_that_come_before_the_start_are_there_when_it_comes() -> None:
    core, other = machine(line(), HALVES), machine(line(), HALVES, worker=1)
    (order,) = other.start()
    assert isinstance(order, SendRims)
    core.arrive(("rims", 1, 2, 0), cut_rims(order, order.arrays))
    check(core)
    core.start()
    check(core)
    assert core.ready_count == 2


def test_a_task_cannot_be_finished_twice() -> None:
    core = machine(line())
    core.start()
    task = take(core)
    finish(core, task)
    with pytest.raises(AssertionError, match="from done to done is no legal move"):
        finish(core, task)


def test_an_item_of_no_known_kind_is_refused() -> None:
    with pytest.raises(AssertionError, match="is no item that workers send each other"):
        machine(line()).arrive(("gossip", 1), None)


def test_the_window_holds_back_and_phases_are_announced_in_order() -> None:
    core = machine(line(cycles=5), window=2)
    seen: list[int] = []
    core.on_phase = lambda phase: seen.append(phase.number)
    core.start()
    assert seen == [1, 2]
    for _ in range(4):
        finish(core, take(core))
    assert core.cycles_done == 1
    assert seen == [1, 2, 3]
    go_on(core)
    assert seen == [1, 2, 3, 4, 5]
    assert core.finished
    assert core.cycles_done == 5


def test_arrays_are_let_go_once_neighbours_have_read_them() -> None:
    """Of ``a`` the old version of a tile goes when its neighbours' tasks are done; ``b`` and ``c`` stay."""
    core = machine(line(cycles=1))
    state = 4 * 3 * 16  # tiles x fields x bytes of two zones
    core.start()
    assert core.live_bytes == state
    for _ in range(4):
        finish(core, take(core))
    assert core.finished
    # The initial arrays of a tile are held as one, and those of ``b`` and ``c`` are still the newest.
    assert core.live_bytes == state + 4 * 16
    assert core.peak_bytes == state + 4 * 16


def test_what_a_task_hands_on_counts_once() -> None:
    """As in an iteration after the verdict, or when a kernel returns what it was given."""
    core = machine(line([mixing("pass_on", [Read("a")], ["a"])], cycles=2))
    core.start()
    state = core.live_bytes
    while (task := core.take()) is not None:
        core.finish(task, {"a": core.own_arrays(task)["a"]}, {})
        check(core)
    assert core.finished
    assert core.live_bytes == core.peak_bytes == state


def test_a_worker_alone_makes_each_result_and_sends_nothing() -> None:
    core = machine(line([STEERED], reductions=[DT]))
    made = core.start() + go_on(core)
    assert made == []
    assert core.finished
    expected = SerialDispatch().run(core.program, RunOptions()).values
    (newest,) = core.unroller.last_values().values()
    assert np.array_equal(core.values[newest], expected["dt"])


def test_a_result_goes_to_every_other_worker_and_no_part_that_can_stay_leaves() -> None:
    core = machine(line([LOCAL], reductions=[measured("sum", "b")], cycles=1), [0, 0, 1, 1])
    sent = [order for order in core.start() + go_on(core) if isinstance(order, SendItem)]
    assert sent == []
    other = machine(line([LOCAL], reductions=[measured("sum", "b")], cycles=1), [0, 0, 1, 1], worker=1)
    parts = [order for order in other.start() + go_on(other) if isinstance(order, SendItem)]
    assert [order.key for order in parts] == [("part", i, 0, tile) for i in (0, 1) for tile in (2, 3)]
    made = [order for part in parts for order in obeyed(core, core.arrive(part.key, part.vector))]
    assert [(o.worker, o.key) for o in made if isinstance(o, SendItem)] == [(1, ("value", 0)), (1, ("value", 1))]


def test_control_is_told_of_nodes_counters_and_releases() -> None:
    told: list[tuple[str, int, tuple[int, ...]]] = []
    program = line([STEERED], cycles=1, reductions=[DT], fuse=True)
    names = program.template.barrier_names()
    core = machine(program, barriers=names, control=lambda kind, phase, place: told.append((kind, phase.number, place)))
    ended(core)
    assert told == [
        ("count", 1, (0,)),
        ("release", 1, ()),
        ("combine", 1, (0, 0, 0)),  # a root: when its result has been worked out
        ("count", 2, (0,)),
        ("release", 2, ()),
        ("combine", 2, (1, 0, 0)),
    ]


def test_a_checkpoint_pins_its_state_until_it_is_saved() -> None:
    """With a window of one, cycle 1 overwrites the state of cycle 0 while that is still to be written."""
    core = machine(line(cycles=3), window=1, checkpoint_every=1)
    core.start()
    saves = go_on(core)
    assert [order.cycle for order in saves if isinstance(order, Save)] == [0, 1]
    assert not core.finished, "cycle 2 is not emitted while two checkpoints are open"
    check(core)
    before = core.live_bytes
    (first, _) = saves
    assert isinstance(first, Save)
    assert all(not array.flags.writeable for fields in first.tiles.values() for array in fields.values())
    core.saved(0)
    check(core)
    assert core.live_bytes < before
    last = go_on(core)
    assert [order.cycle for order in last if isinstance(order, Save)] == [2]
    core.saved(1)
    assert not core.finished
    core.saved(2)
    assert core.finished


def test_a_limit_lets_the_oldest_phase_alone_go_on() -> None:
    """Tile 0 may run ahead to phase 2 when tile 1 is done, but not under a limit."""
    for limit, phases in ((0, [1, 1, 2]), (1, [1, 1, 1])):
        core = machine(line([SMOOTH], tiles=3), limit=limit)
        core.start()
        running = [take(core), take(core)]
        late = take(core)
        assert [task.tile for task in (*running, late)] == [0, 1, 2]
        for task in running:
            finish(core, task)
        ahead = core.take()
        assert (ahead.phase.number if ahead is not None else 1) == phases[2]
        assert core.ready_count == (0 if limit == 0 else 1)


def test_what_arrives_counts_as_live_and_what_leaves_until_it_is_gone() -> None:
    core = machine(line(), HALVES)
    core.start()
    before = core.live_bytes
    core.in_flight(80)
    core.arrive(("rims", 1, 2, 0), {("a", 1, (1, 0, 0)): np.zeros((1, 1, 1, 1))})
    assert core.live_bytes == before + 80 + 8
    core.in_flight(-80)
    assert core.live_bytes == before + 8
    check(core)


@pytest.mark.parametrize("lag", [0, 1, 2])
def test_another_run_goes_on_from_what_is_handed_over(lag: int) -> None:
    """Three cycles, then three more with other owners, against six in one go."""
    dt = measured("dt", "a", lag=lag)
    expected = SerialDispatch().run(line([STEERED], cycles=6, reductions=[dt]), RunOptions())
    half = SimulatedCluster(line([STEERED], cycles=3, reductions=[dt]), HALVES, 2, seed=lag)
    half.run()
    tiles = {tile: fields for core in half.cores for tile, fields in core.final().items()}
    begin = Beginning(3, tiles, half.cores[1].handover())
    whole = line([STEERED], cycles=6, reductions=[dt])
    rest = SimulatedCluster(whole, [1, 0, 2, 0], 3, seed=lag, begin=begin, after_each=check)
    fields = rest.run()
    for name, arrays in expected.fields.items():
        assert all(np.array_equal(ours, theirs) for ours, theirs in zip(fields[name], arrays, strict=True))
    assert np.array_equal(rest.values()["dt"][-1], expected.values["dt"][-1])


def test_answers_are_kept_in_the_order_in_which_they_were_asked_for() -> None:
    """An end that depends on a value is looked at before each cycle."""
    problem = line([SMOOTH], cycles=9, reductions=[DT]).problem
    core = ended(machine(Program(replace(problem, ended=Ends(2)), (2,))))
    assert core.cycles_done == 2
    assert [answer[0][:, 1].tolist() for answer in core.answers] == [[0.0, 1.0], [0.0, 1.0], [2.0]]

"""Every rule finds the fault that it is there for: one thing is changed behind the state machine's back."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest

from breakstep.engine.resident.core import Core, CoreOptions
from breakstep.engine.resident.invariants import RULES, View, check
from breakstep.engine.resident.states import DONE, READY, WAITING, PhaseState, TaskState
from tests.mixtures import measured
from tests.simulated import SimulatedCluster
from tests.unit.engine.resident.hands import STEERED, ended, line, machine


def tasks(core: Core, state: str) -> list[TaskState]:
    return [task for phase in core._phases.values() for task in phase.tasks.values() if task.state == state]


def is_busy(core: Core) -> bool:
    """Whether there is something of every kind to spoil."""
    return all(
        (
            tasks(core, WAITING),
            tasks(core, READY),
            any(bundle.readers for bundle in core._bundles.values()),
            core._bundle_waiting,
            core._results.waiting,
            core._results.known,
            core._reductions.nodes,
            core._barriers.open,
            core._checkpoints.open,
            any(phase.owed for phase in core._phases.values()),
            any(phase.waiting for phase in core._phases.values()),
        )
    )


def busy() -> Core:
    """A worker in the thick of a run, in good order."""
    program = line([STEERED], tiles=12, cycles=6, reductions=[measured("dt", "a", lag=1)])
    names = program.template.barrier_names()
    options = CoreOptions(window=3, limit=10**9, checkpoint_every=1)
    for seed in range(20):
        owners = [0, 0, 1, 1, 0, 0, 1, 1, 0, 0, 1, 1]
        cluster = SimulatedCluster(program, owners, 2, barriers=names, options=options, seed=seed)
        while not all(core.finished for core in cluster.cores):
            cluster.step()
            if is_busy(cluster.cores[0]):
                check(cluster.cores[0])
                return cluster.cores[0]
    raise AssertionError("no schedule made a worker busy enough")


def bump(counts: dict[Any, int]) -> None:
    counts[next(iter(counts))] += 1


def of_kind(core: Core, what: Callable[[PhaseState], bool]) -> PhaseState:
    return next(phase for phase in core._phases.values() if what(phase))


def miss_more(core: Core) -> None:
    tasks(core, WAITING)[0].missing += 1


def be_ready_too_soon(core: Core) -> None:
    tasks(core, WAITING)[0].state = READY


def wait_twice(core: Core) -> None:
    waiters = next(iter(core._results.waiting.values()))
    waiters.append(waiters[0])


def let_a_stranger_wait(core: Core) -> None:
    stranger = TaskState(of_kind(core, lambda phase: phase.phase is not None), 0, (0, 0, 0))
    next(iter(core._bundle_waiting.values())).append(stranger)


def lose_a_part(core: Core) -> None:
    next(iter(core._reductions.nodes.values())).missing += 1


def lose_a_version(core: Core) -> None:
    phase = of_kind(core, lambda phase: bool(phase.held))
    core._bytes.let_go(phase.held.pop(next(iter(phase.held))))


def count_a_reader_twice(core: Core) -> None:
    bump(of_kind(core, lambda phase: bool(phase.readers)).readers)


def keep_a_dead_phase(core: Core) -> None:
    core._phases[99] = PhaseState(99, None)
    core._phases[99].live = False


def call_a_dead_phase_live(core: Core) -> None:
    core._live = core._live | {of_kind(core, lambda phase: not phase.live).number}


def forget_a_debt(core: Core) -> None:
    of_kind(core, lambda phase: bool(phase.owed)).owed.clear()


def wait_for_what_is_there(core: Core) -> None:
    phase = of_kind(core, lambda phase: bool(phase.waiting))
    tile, waiters = next(iter(phase.waiting.items()))
    phase.waiting[5000 + tile] = waiters
    del phase.waiting[tile]


def count_a_rim_reader_twice(core: Core) -> None:
    next(bundle for bundle in core._bundles.values() if bundle.readers).readers += 1


def weigh_rims_wrongly(core: Core) -> None:
    next(iter(core._bundles.values())).nbytes += 8


def weigh_wrongly(core: Core) -> None:
    core._bytes.add(8)


def miscount_tasks(core: Core) -> None:
    next(iter(core._cycles.open.values())).tasks += 1


def miscount_controls(core: Core) -> None:
    next(iter(core._cycles.open.values())).controls += 1


def close_too_soon(core: Core) -> None:
    del core._cycles.open[min(core._cycles.open)]


def run_ahead(core: Core) -> None:
    core._cycles.emitted += 9


def oversee_the_end_of_a_cycle(core: Core) -> None:
    core._cycles._done -= 1


def keep_an_old_result(core: Core) -> None:
    core._results._made_in[next(iter(core._results.known))] = -9


def expect_what_is_known(core: Core) -> None:
    core._results.expected[next(iter(core._results.known))] = core._cycles.emitted
    core._cycles.of(core._cycles.emitted).controls += 1


def keep_a_node(core: Core) -> None:
    instance = next(iter(core._reductions.nodes))[0]
    core._cycles.of(core._results.expected.pop(instance)).controls -= 1
    core._results.known[instance] = core._results.known[next(iter(core._results.known))]


def keep_an_early_part(core: Core) -> None:
    core._reductions.early[0] = {(0, 0): None}


def keep_an_early_report(core: Core) -> None:
    core._barriers.early[1] = {1}


def report_too_soon(core: Core) -> None:
    next(b for n, b in core._barriers.open.items() if core._phases[n].tasks).missing.discard(0)


def queue_twice(core: Core) -> None:
    core._ready._heap.append(core._ready._heap[-1])


def unsettle_the_queue(core: Core) -> None:
    priority, entries, task = core._ready._heap[0]
    core._ready._heap[0] = ((priority[0] + 9, *priority[1:]), entries, task)
    core._ready._heap.append(((-1, 0, 0), 0, tasks(core, READY)[0]))


def hurry(core: Core) -> None:
    task = tasks(core, WAITING)[0]
    task.priority = (task.priority[0] - 1, *task.priority[1:])


def keep_a_done_task(core: Core) -> None:
    tasks(core, WAITING)[0].state = DONE


def lose_the_oldest(core: Core) -> None:
    core._unfinished.popleft()


def lose_a_phases_ready_task(core: Core) -> None:
    tasks(core, READY)[0].where.ready.clear()


def end_too_soon(core: Core) -> None:
    core.finished = True


FAULTS = {
    miss_more: "inputs missing and waits in",
    be_ready_too_soon: "is ready with [1-9] inputs absent",
    wait_twice: "inputs missing and waits in",
    let_a_stranger_wait: "are neither tasks nor nodes nor checkpoints",
    lose_a_part: "inputs missing and waits in",
    lose_a_version: "not held, but needed",
    count_a_reader_twice: "readers counted",
    keep_a_dead_phase: "phase 99 is kept for nothing",
    call_a_dead_phase_live: "counts as not live",
    forget_a_debt: "owes .* too little",
    wait_for_what_is_there: "somebody waits for tiles .*, which are done",
    count_a_rim_reader_twice: "rims .* readers counted",
    weigh_rims_wrongly: "rims .* are not of .* bytes",
    weigh_wrongly: "live bytes counted",
    miscount_tasks: "counts .* tasks and .* others, but misses",
    miscount_controls: "counts .* tasks and .* others, but misses",
    close_too_soon: "are closed and miss something",
    run_ahead: "too far ahead",
    oversee_the_end_of_a_cycle: "out of order|nobody has noticed",
    keep_an_old_result: "of cycle -9 is kept",
    expect_what_is_known: "both known and expected",
    keep_a_node: "is open, but its result is not expected",
    keep_an_early_part: "are kept for phases that are emitted",
    keep_an_early_report: "are kept, which are emitted",
    report_too_soon: "barrier of phase .* waits for",
    queue_twice: "the queue holds",
    unsettle_the_queue: "the queue is out of order",
    hurry: "has priority",
    keep_a_done_task: "is kept as done",
    lose_the_oldest: "counts as the oldest of",
    lose_a_phases_ready_task: "cannot be found by its phase",
    end_too_soon: "finished is True",
}


@pytest.mark.parametrize(("spoil", "sentence"), FAULTS.items(), ids=lambda value: getattr(value, "__name__", ""))
def test_a_fault_is_found_and_said(spoil: Callable[[Core], None], sentence: str) -> None:
    core = busy()
    spoil(core)
    with pytest.raises(AssertionError, match=sentence):
        check(core)


def test_leftovers_after_the_end_are_found() -> None:
    core = ended(machine(line()))
    check(core)
    core._bundle_waiting[1, 2, 3] = []
    with pytest.raises(AssertionError, match=r"the run is over, but there is left .*'rims': 1"):
        check(core)


def test_each_rule_is_broken_by_a_fault_above() -> None:
    """So that no rule is there which cannot fail."""
    broken: set[str] = set()
    for spoil in FAULTS:
        core = busy()
        spoil(core)
        view = View(core)
        broken |= {rule.__name__ for rule in RULES if any(True for _ in rule(view))}
    assert broken == {rule.__name__ for rule in RULES}

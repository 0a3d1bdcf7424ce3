"""The invariants of :mod:`breakstep.engine.resident.core`, verified the slow way; for tests.

Everything that the state machine counts as it goes is worked out here from the phases, the plan and what is held,
and compared. A fault is a sentence with the facts.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
from typing import TypeAlias

from breakstep.engine.resident.checkpoints import Checkpoint
from breakstep.engine.resident.core import BundleKey, Core
from breakstep.engine.resident.plan import Reach
from breakstep.engine.resident.reductions import ABSENT, Node
from breakstep.engine.resident.states import READY, RUNNING, WAITING, PhaseState, TaskState, Waiter
from breakstep.graph.unroll import INITIAL, Phase

Faults: TypeAlias = Iterator[str]


def check(core: Core) -> None:
    """Verify every invariant; to be called between two events.

    Raises
    ------
    AssertionError
        With one sentence for each fault.
    """
    view = View(core)
    faults = [fault for rule in RULES for fault in rule(view)]
    if faults:
        raise AssertionError(f"worker {core.me}: " + "; ".join(faults))


class View:
    """A state machine, and what its tasks read according to the plan.

    Attributes
    ----------
    tasks : list of TaskState
        All that are not done.
    arrays : dict of TaskState to list of (PhaseState, int)
        Own phases and tiles that each reads.
    rims : dict of TaskState to list of BundleKey
        Rims from other workers that each reads.
    """

    def __init__(self, core: Core) -> None:
        self.core = core
        self.tasks: list[TaskState] = []
        self.arrays: dict[TaskState, list[tuple[PhaseState, int]]] = {}
        self.rims: dict[TaskState, list[BundleKey]] = {}
        for state in core._phases.values():
            if state.tasks and state.phase is not None:
                self._read(state, core.plan.reaches(state.phase))

    def _read(self, where: PhaseState, reaches: list[tuple[int, Reach]]) -> None:
        phases = self.core._phases
        for tile, task in where.tasks.items():
            self.tasks.append(task)
            self.arrays[task] = [(phases[source], other) for source, reach in reaches for other in reach.here[tile]]
            self.rims[task] = [
                (where.number, other, source) for source, reach in reaches for other in reach.there[tile]
            ]


def _instances(phase: Phase) -> set[int]:
    gate = {phase.gate.instance} if phase.gate is not None else set()
    return gate | {ref.instance for ref in phase.values.values()}


def _absent(view: View, waiter: Waiter) -> int:
    """How many of its inputs are not there."""
    core = view.core
    if isinstance(waiter, TaskState):
        phase = waiter.phase
        arrays = sum(tile not in state.held for state, tile in view.arrays[waiter])
        rims = sum(key not in core._bundles for key in view.rims[waiter])
        values = sum(instance not in core.values for instance in _instances(phase))
        return arrays + rims + values + (phase.waits_for in core._barriers.open)
    if isinstance(waiter, Checkpoint):
        arrays = sum(tile not in state.held for state in waiter.phases() for tile in core.plan.tiles)
        instances = {ref.instance for refs in waiter.values.values() for ref in refs}
        return arrays + sum(instance not in core.values for instance in instances)
    assert isinstance(waiter, Node)
    return _parts_absent(waiter) + _waits_for_previous(core, waiter)


def _parts_absent(node: Node) -> int:
    return sum(part is ABSENT for part in node.parts)


def _waits_for_previous(core: Core, node: Node) -> bool:
    previous, is_root = node.making.previous, node.place[1] == core._reductions.tree.top
    return is_root and previous is not None and previous not in core.values


def _registered(core: Core) -> Counter[int]:
    """How often each waiter stands in a list of those that wait."""
    lists: list[Sequence[Waiter]] = [
        *(waiters for state in core._phases.values() for waiters in state.waiting.values()),
        *core._bundle_waiting.values(),
        *core._results.waiting.values(),
        *(barrier.waiters for barrier in core._barriers.open.values()),
    ]
    return Counter(id(waiter) for waiters in lists for waiter in waiters)


def inputs_are_counted(view: View) -> Faults:
    """Invariant 1."""
    core = view.core
    registered = _registered(core)
    waiters: list[Waiter] = [*view.tasks, *core._checkpoints.open.values(), *core._reductions.nodes.values()]
    for waiter in waiters:
        absent, entered = _absent(view, waiter), registered.pop(id(waiter), 0)
        parts = _parts_absent(waiter) if isinstance(waiter, Node) else 0  # they come without being waited for
        if not waiter.missing == absent == entered + parts:
            yield f"{waiter} counts {waiter.missing} inputs missing and waits in {entered} lists; {absent} are absent"
        if isinstance(waiter, TaskState) and (absent > 0) != (waiter.state == WAITING):
            yield f"{waiter} is {waiter.state} with {absent} inputs absent"
    if registered:
        yield f"{len(registered)} that wait are neither tasks nor nodes nor checkpoints"


def arrays_are_held_while_needed(view: View) -> Faults:
    """Invariant 2: arrays."""
    core = view.core
    readers = Counter((state.number, tile) for task in view.tasks for state, tile in view.arrays[task])
    for checkpoint in core._checkpoints.open.values():
        readers.update((state.number, tile) for state in checkpoint.phases() for tile in core.plan.tiles)
    for state in core._phases.values():
        for tile in core.plan.tiles:
            reading, counted = readers[state.number, tile], state.readers.get(tile, 0)
            if counted != reading:
                yield f"phase {state.number}, tile {tile}: {counted} readers counted, {reading} found"
            needed = tile not in state.tasks and (state.live or reading > 0)
            if needed != (tile in state.held):
                yield f"phase {state.number}, tile {tile}: {'not held, but' if needed else 'held, but not'} needed"
        if not set(state.held) | set(state.readers) | set(state.tasks) <= set(core.plan.tiles):
            yield f"phase {state.number} knows tiles that are not of this worker"


def phases_are_kept_while_needed(view: View) -> Faults:
    """Invariant 2: phases, and what waits for and is owed by tasks."""
    core = view.core
    for number, state in core._phases.items():
        if not (state.live or state.tasks or state.held):
            yield f"phase {number} is kept for nothing"
        if state.live != (number in core._live):
            yield f"phase {number} counts as {'' if state.live else 'not '}live"
        if not state.tasks and (state.reads or state.ready):
            yield f"phase {number} is done and keeps what it read"
        if not set(state.waiting) <= set(state.tasks):
            yield f"phase {number}: somebody waits for tiles {set(state.waiting) - set(state.tasks)}, which are done"
    owed = {(n, t, *d[:2]) for n, state in core._phases.items() for t, debts in state.owed.items() for d in debts}
    debts = _debts(core)
    if owed != debts:
        yield f"owes {sorted(owed - debts)} too much and {sorted(debts - owed)} too little"
    coming = core.unroller.live_phases(core.program.state_fields)
    if not {number for number in coming if number <= core._emitted} <= set(core._phases):
        yield f"phases {sorted(coming)} may be read, and some are gone"


def _debts(core: Core) -> set[tuple[int, int, int, int]]:
    """Phase, tile, worker and reading phase of rims that cannot have been sent."""
    return {
        (source, tile, worker, reader.number)
        for reader in core._phases.values()
        if reader.tasks and reader.phase is not None
        for source, reach in core.plan.reaches(reader.phase)
        for tile, workers in reach.cuts.items()
        if tile in core._phases[source].tasks
        for worker in workers
    }


def bundles_are_held_while_needed(view: View) -> Faults:
    """Invariants 2 and 7: rims from other workers."""
    core = view.core
    readers = Counter(key for task in view.tasks for key in view.rims[task])
    for key, bundle in core._bundles.items():
        if bundle.readers != readers[key] or (readers[key] == 0) != (key[0] > core._emitted):
            yield f"rims {key}: {bundle.readers} readers counted, {readers[key]} found"
        if bundle.nbytes != sum(array.nbytes for array in bundle.arrays.values()):
            yield f"rims {key} are not of {bundle.nbytes} bytes"
    both = core._bundles.keys() & core._bundle_waiting.keys()
    if both:
        yield f"rims {sorted(both)} are there and waited for"


def bytes_are_the_sum_of_what_is_held(view: View) -> Faults:
    """Invariant 3."""
    core = view.core
    held = [arrays for state in core._phases.values() for arrays in state.held.values()]
    own = sum({id(array): array.nbytes for arrays in held for array in arrays.values()}.values())
    rims = sum(bundle.nbytes for bundle in core._bundles.values())
    total = own + rims + core._bytes.moving
    if core.live_bytes != total or core.peak_bytes < total or core._bytes.moving < 0:
        moving = core._bytes.moving
        yield f"{core.live_bytes} live bytes counted, {own} held + {rims} of rims + {moving} on their way found"


def cycles_are_counted(view: View) -> Faults:
    """Invariant 4: what cycles miss."""
    core = view.core
    cycles = core._cycles
    tasks = Counter(task.phase.cycle for task in view.tasks)
    controls = Counter(core._results.expected.values())
    controls.update(barrier.phase.cycle for barrier in core._barriers.open.values())
    controls.update(core._checkpoints.open.keys())
    if {*tasks, *controls} - cycles.open.keys():
        yield f"cycles {sorted({*tasks, *controls} - cycles.open.keys())} are closed and miss something"
    for cycle, found in cycles.open.items():
        if (found.tasks, found.controls) != (tasks[cycle], controls[cycle]):
            counted = f"{found.tasks} tasks and {found.controls} others"
            yield f"cycle {cycle} counts {counted}, but misses {tasks[cycle]} and {controls[cycle]}"


def cycles_go_in_order(view: View) -> Faults:
    """Invariant 4: done and closed as far as can be, and nothing kept of what is closed."""
    core = view.core
    cycles, done = core._cycles, core._cycles._done
    if not cycles.closed <= done <= cycles.whole <= cycles.emitted + 1:
        yield f"closed {cycles.closed}, done {done}, whole {cycles.whole}, emitted {cycles.emitted} are out of order"
    if any(not cycles.closed <= cycle <= cycles.emitted for cycle in cycles.open):
        yield f"cycles {sorted(cycles.open)} are open, but {cycles.closed} to {cycles.emitted} can be"
    if any(cycle < done and found.tasks for cycle, found in cycles.open.items()):
        yield f"a cycle before {done} has tasks that are not done"
    for name, end, limit in (("done", done, cycles.whole), ("closed", cycles.closed, done)):
        left = cycles.open.get(end)
        if end < limit and (left is None or not (left.tasks if name == "done" else left.controls)):
            yield f"cycle {end} is {name}, and nobody has noticed"
    if cycles.emitted - cycles.done >= core.options.window or cycles.emitted - cycles.closed >= cycles._kept:
        yield f"cycle {cycles.emitted} is emitted, too far ahead of {cycles.done}, or of {cycles.closed}, which is open"


def results_are_kept_while_needed(view: View) -> Faults:
    """Invariants 4 and 7: results of reductions."""
    core = view.core
    results, oldest = core._results, core._cycles.closed - 1 - core._longest_lag
    for instance in results.known:
        cycle = results._made_in.get(instance)
        if cycle is None and instance < results.announced:
            yield f"result {instance} is kept, of an unknown cycle"
        if cycle is not None and cycle < oldest:
            yield f"result {instance} of cycle {cycle} is kept, but {oldest} is the oldest that may be used"
    for instance in results._made_in:
        if (instance in results.known) == (instance in results.expected):
            yield f"result {instance} is both known and expected, or neither"
    if results.waiting.keys() & results.known.keys():
        yield f"somebody waits for results {sorted(results.waiting.keys() & results.known.keys())}, which are known"


def trees_wait_for_open_results(view: View) -> Faults:
    """Invariants 4 and 7: nodes and parts that came early; reports that came early."""
    core = view.core
    for place in core._reductions.nodes:
        if place[0] not in core._results.expected:
            yield f"node {place} is open, but its result is not expected"
    if any(instance < core._results.announced for instance in core._reductions.early):
        yield f"parts of {sorted(core._reductions.early)} are kept for phases that are emitted"
    if any(number <= core._emitted for number in core._barriers.early):
        yield f"reports of phases {sorted(core._barriers.early)} are kept, which are emitted"


def barriers_wait_for_workers(view: View) -> Faults:
    """A worker has not reported while own tasks are not done."""
    core = view.core
    for number, barrier in core._barriers.open.items():
        state = core._phases.get(number)
        if (core.me in barrier.missing) != (state is not None and bool(state.tasks)):
            yield f"barrier of phase {number} waits for {barrier.missing}, own tasks {state and sorted(state.tasks)}"


def queue_holds_ready_tasks(view: View) -> Faults:
    """Invariant 6."""
    core = view.core
    queue, heap = core._ready, core._ready._heap
    ready = sorted(id(task) for task in view.tasks if task.state == READY)
    if sorted(id(task) for task in queue.tasks()) != ready or len(queue) != len(ready):
        yield f"the queue holds {len(queue)} tasks, {len(ready)} are ready"
    if any(heap[place][:2] < heap[(place - 1) // 2][:2] for place in range(1, len(heap))):
        yield "the queue is out of order"
    if 2 * queue._leftovers > len(heap):
        yield f"{queue._leftovers} leftovers among {len(heap)} entries"
    for task in view.tasks:
        if task.state not in (WAITING, READY, RUNNING):
            yield f"{task} is kept as {task.state}"
        if (task.priority[0], task.priority[2]) != (task.phase.cycle, task.phase.number):
            yield f"{task} has priority {task.priority}"


def oldest_phase_is_known(view: View) -> Faults:
    """On which progress under a limit on live bytes rests."""
    core = view.core
    unfinished = [number for number, state in core._phases.items() if state.tasks]
    found = core._oldest()
    if (found.number if found is not None else None) != min(unfinished, default=None):
        yield f"phase {found and found.number} counts as the oldest of {unfinished}"
    if core.options.limit:
        waiting = {id(task) for state in core._phases.values() for _, _, task in state.ready}
        if any(task.state == READY and id(task) not in waiting for task in view.tasks):
            yield "a ready task cannot be found by its phase"


def end_is_noticed(view: View) -> Faults:
    """Invariant 8, and that nothing is left then but the state and the newest results."""
    core = view.core
    over = core._exhausted and not core._cycles.open
    if core.finished != over:
        yield f"finished is {core.finished}, open cycles {sorted(core._cycles.open)}, exhausted {core._exhausted}"
    if over:
        left = {
            "tasks": len(view.tasks),
            "rims": len(core._bundles) + len(core._bundle_waiting),
            "nodes": len(core._reductions.nodes) + len(core._reductions.early),
            "barriers": len(core._barriers.open) + len(core._barriers.early),
            "checkpoints": len(core._checkpoints.open),
            "ready": len(core._ready._heap),
            "phases": len(core._phases.keys() - core._live - {INITIAL}),
        }
        if any(left.values()):
            yield f"the run is over, but there is left {left}"


RULES = (
    inputs_are_counted,
    arrays_are_held_while_needed,
    phases_are_kept_while_needed,
    bundles_are_held_while_needed,
    bytes_are_the_sum_of_what_is_held,
    cycles_are_counted,
    cycles_go_in_order,
    results_are_kept_while_needed,
    trees_wait_for_open_results,
    barriers_wait_for_workers,
    queue_holds_ready_tasks,
    oldest_phase_is_known,
    end_is_noticed,
)

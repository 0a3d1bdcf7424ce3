"""The resident dispatch on one worker, as a state machine: events in, instructions out, no input or output.

Each worker unrolls the same phases in the same order, for what is emitted depends on values alone. Of each
phase it keeps the tasks of its own tiles; for tiles at the seam it owes rims to other workers, and expects
theirs. Nothing is ever asked for: whoever makes something knows who needs it and sends it.

Events (method, what happened)
------------------------------
start        the run may begin: phases are emitted as far as the window and known values allow
take         a thread asks for work: the most urgent ready task, or None
finish       a thread has run a task: its arrays and contributions are here
arrive       another worker's item is here: rims, a contribution, a node, a value, a count or a release
saved        a checkpoint of a cycle has been written

Instructions (what the host must do)
------------------------------------
SendRims     cut these rims from a finished task and send them to a worker
SendItem     send a small item to a worker
Save         write the state of own tiles at the end of a cycle

Life of a task
--------------
==========  ====================================  ========================================
state       moves on                              to
==========  ====================================  ========================================
waiting     last missing input is there           ready
ready       taken by a thread                     running
running     finished                              done (its state is dropped)
==========  ====================================  ========================================

There are no other moves; a failed run drops everything at once.

Invariants (checked by :meth:`Core.check` after every event in the tests)
-------------------------------------------------------------------------
1. A waiting task misses exactly as many inputs as it is registered for; a ready or running one misses none.
2. An array is held while a task that reads it is not done, while rims are owed from it, while a checkpoint
   needs it, or while its phase holds the newest version of a field; and no longer.
3. Live bytes are the sum of what is held.
4. Unfinished own tasks of a cycle are counted exactly; cycles complete in order.
5. An item that arrives twice changes nothing (the host drops repeated messages by their numbers).

Progress under a limit on live bytes: a task of the oldest phase that has unfinished own tasks may always
run. Over all workers, the tasks of the oldest unfinished phase have all their inputs on the way or there,
so some worker can always go on, whatever the limit; run-ahead is what is held back.
"""

from __future__ import annotations

import heapq
from collections.abc import Callable, Generator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, TypeAlias

import numpy as np

from breakstep.engine.resident.plan import Cut, ReductionTree, WorkerPlan
from breakstep.engine.resident.ranks import Ranks
from breakstep.graph.tasks import TREE_ARITY
from breakstep.graph.unroll import INITIAL, Making, Need, Phase, Unroller, ValueRef
from breakstep.steps.reduction import combine
from breakstep.steps.step import Array

WORKER_ARITY = 8  # children of a worker in the barrier tree

WAITING, READY, RUNNING, DONE = range(4)


@dataclass(frozen=True)
class SendRims:
    """Cut rims from a tile's arrays and send them: item ("rims", phase, tile, source) with the arrays."""

    worker: int
    phase: int
    tile: int
    source: int
    cuts: tuple[Cut, ...]
    arrays: Mapping[str, Array]


@dataclass(frozen=True)
class SendItem:
    """Send a small item: its key and, where it carries one, a vector."""

    worker: int
    key: tuple[Any, ...]
    vector: Array | None = None


@dataclass(frozen=True)
class Save:
    """Write the state of own tiles at the end of a cycle, then report :meth:`Core.saved`."""

    cycle: int
    tiles: Mapping[int, Mapping[str, Array]]
    values: Mapping[str, Array]


Instruction: TypeAlias = SendRims | SendItem | Save


@dataclass(slots=True)
class Held:
    """Arrays of one finished task of this worker."""

    arrays: Mapping[str, Array]
    nbytes: int


class PhaseState:
    """One phase on this worker: its tasks, the arrays they made, and who reads them."""

    __slots__ = ("held", "live", "number", "owed", "phase", "readers", "remaining", "tasks", "waiting")

    def __init__(self, number: int, phase: Phase | None) -> None:
        self.number = number
        self.phase = phase
        self.live = True
        self.held: dict[int, Held] = {}  # tile -> arrays
        self.readers: dict[int, int] = {}  # tile -> readers not done
        self.waiting: dict[int, list[Waiter]] = {}  # tile -> who misses it
        self.owed: dict[int, list[tuple[int, int, tuple[Cut, ...]]]] = {}  # tile -> (worker, phase, cuts)
        self.tasks: dict[int, TaskState] = {}
        self.remaining = 0


class TaskState:
    """One own task that is not done."""

    __slots__ = ("bundles", "missing", "priority", "reads", "state", "tile", "where")

    def __init__(self, where: PhaseState, tile: int) -> None:
        self.where = where
        self.tile = tile
        self.state = WAITING
        self.missing = 0
        self.priority: tuple[int, int, int] = (0, 0, 0)
        self.reads: list[tuple[PhaseState, int]] = []  # (phase, tile) whose arrays it reads
        self.bundles: list[tuple[int, int, int]] = []  # (phase, tile, source) of rims it reads

    @property
    def phase(self) -> Phase:
        """The phase it belongs to."""
        phase = self.where.phase
        assert phase is not None
        return phase


@dataclass(slots=True)
class Bundle:
    """Rims that came from one tile of another worker for one phase."""

    arrays: Mapping[Any, Array]
    nbytes: int
    readers: int


@dataclass(slots=True)
class Node:
    """One node of one reduction while its contributions come in."""

    place: tuple[int, int, int]  # instance, level, index
    parts: list[Array | None]
    missing: int


@dataclass(slots=True)
class Checkpoint:
    """A cycle's end that is to be saved, until all of it is there."""

    cycle: int
    fields: dict[str, PhaseState]
    values: dict[str, list[ValueRef]]
    reads: list[tuple[PhaseState, int]] = field(default_factory=list)
    missing: int = 1


@dataclass(slots=True)
class Counter:
    """What a worker still misses before it reports that a phase is done here and below it."""

    phase: Phase
    missing: int


Waiter: TypeAlias = TaskState | Node | Checkpoint


@dataclass(frozen=True)
class CoreOptions:
    """What the state machine must know of a run.

    Attributes
    ----------
    window : int
        Cycles that may be unfinished at once.
    limit : int
        Live bytes above which only the oldest phase's tasks may start; 0 for none.
    checkpoint_every : int
        Cycles between checkpoints; 0 for none.
    """

    window: int = 4
    limit: int = 0
    checkpoint_every: int = 0


class Core:
    """The state machine of one worker.

    Parameters
    ----------
    plan : WorkerPlan
    unroller : Unroller
        A fresh one, the same on every worker.
    workers : int
    options : CoreOptions
    initial : mapping of int to mapping of str to ndarray
        The state of own tiles that the run begins with.
    given : sequence of ndarray
        Results of reductions that the run begins with, when it goes on from a checkpoint.
    """

    def __init__(
        self,
        plan: WorkerPlan,
        unroller: Unroller,
        workers: int,
        options: CoreOptions,
        initial: Mapping[int, Mapping[str, Array]],
        given: Sequence[Array] = (),
        control: Callable[[str, Phase, tuple[int, ...]], None] = lambda *_: None,
    ) -> None:
        self.plan, self.unroller, self.workers, self.options = plan, unroller, workers, options
        self.program, self.me = plan.program, plan.worker
        self.tree = ReductionTree(plan.owners)
        self.ranks = Ranks(plan)
        self.values: dict[int, Array] = dict(enumerate(given))
        self.answers: list[list[Array]] = []
        self.cycles_done = unroller.start
        self.live_bytes = self.peak_bytes = 0
        self.finished = False
        self.on_phase: Callable[[Phase], None] = lambda _: None
        self._control = control
        self._own_nodes = sum(1 for node in self.tree.nodes.values() if node.home == self.me)
        self._longest_lag = max((r.lag for r in self.program.problem.splitting.all_reductions()), default=0)
        self._barriers = self.program.template.stages_with_barrier(unroller.barriers)
        self._phases: dict[int, PhaseState] = {}
        self._bundles: dict[tuple[int, int, int], Bundle] = {}
        self._bundle_waiting: dict[tuple[int, int, int], list[Waiter]] = {}
        self._value_waiting: dict[int, list[Waiter]] = {}
        self._made_in: dict[int, int] = {}  # instance -> cycle
        self._makings: dict[int, tuple[Making, Phase]] = {}  # of instances with nodes here still open
        self._nodes_open: dict[int, int] = {}
        self._nodes: dict[tuple[int, int, int], Node] = {}
        self._early_parts: dict[int, list[tuple[int, int, Array | None]]] = {}
        self._released: set[int] = set()
        self._release_waiting: dict[int, list[Waiter]] = {}
        self._counts: dict[int, Counter] = {}  # by phase
        self._early_counts: dict[int, int] = {}
        self._ready: list[tuple[tuple[int, int, int], int, TaskState]] = []
        self._entries = 0
        self._unfinished: dict[int, int] = {}  # cycle -> own tasks not done
        self._emitted_to = unroller.start - 1  # newest cycle of which a phase was emitted
        self._generator: Generator[Phase | Need, list[Array] | None, None] = unroller.run()
        self._pending: Phase | Need | None = None
        self._boundary: tuple[dict[str, int], dict[str, list[ValueRef]]] = ({}, {})
        self._exhausted = self._advancing = False
        self._checkpoints: dict[int, Checkpoint] = {}
        self._out: list[Instruction] = []
        self._begin(initial)

    def _begin(self, initial: Mapping[int, Mapping[str, Array]]) -> None:
        begin = PhaseState(INITIAL, None)
        begin.held = {tile: _hold(arrays) for tile, arrays in initial.items()}
        self._phases[INITIAL] = begin
        self._grow(sum(held.nbytes for held in begin.held.values()))

    # ---- events -------------------------------------------------------------------------------------

    def start(self) -> list[Instruction]:
        """Emit the first phases."""
        self._step(None)
        self._advance()
        return self._flush()

    def take(self) -> TaskState | None:
        """The most urgent ready task that the limit on live bytes allows, now running."""
        task = self._pop()
        if task is not None:
            task.state = RUNNING
        return task

    def finish(
        self,
        task: TaskState,
        arrays: Mapping[str, Array],
        partials: Mapping[str, Array | None],
        new: bool = True,
    ) -> list[Instruction]:
        """A task has made its arrays; ``new`` is False when it handed its inputs on."""
        where, tile, phase = task.where, task.tile, task.phase
        held = _hold(arrays) if new else Held(arrays, 0)
        where.held[tile] = held
        self._grow(held.nbytes)
        del where.tasks[tile]
        where.remaining -= 1
        task.state = DONE
        for waiter in where.waiting.pop(tile, ()):
            self._satisfy(waiter)
        for worker, reader, cuts in where.owed.pop(tile, ()):
            self._out.append(SendRims(worker, reader, tile, where.number, cuts, arrays))
        self._release_inputs(task)
        self._drop_if_unread(where, tile)
        for making in phase.makes:
            self._part(making.instance, 0, tile, partials[making.reduction.name])
        if phase.stage.index in self._barriers and where.remaining == 0:
            self._count(where.number)
        self._unfinished[phase.cycle] -= 1
        if self._complete_cycles():
            self._advance()
        self._settle()
        return self._flush()

    def arrive(self, key: tuple[Any, ...], payload: Any) -> list[Instruction]:
        """An item from another worker: its key says what it is."""
        kind = key[0]
        if kind == "rims":
            self._arrive_rims(key[1:], payload)
        elif kind == "part":
            _, instance, level, index = key
            self._part(instance, level, index, payload)
        elif kind == "value":
            self._value(key[1], payload)
        elif kind == "count":
            self._count(key[1])
        elif kind == "release":
            self._release(key[1])
        self._settle()
        return self._flush()

    def saved(self, cycle: int) -> list[Instruction]:
        """The checkpoint of a cycle is on disk: its arrays may go."""
        checkpoint = self._checkpoints.pop(cycle)
        for where, tile in checkpoint.reads:
            self._unread(where, tile)
        self._settle()
        return self._flush()

    # ---- what a thread needs to run a task ----------------------------------------------------------

    def own_arrays(self, task: TaskState) -> dict[str, Array]:
        """The tile's own zones of every field the task reads."""
        tile = task.tile
        return {
            name: self._phases[source].held[tile].arrays[name]
            for name, source in task.phase.sources.items()
            if name in self._phases[source].held[tile].arrays
        }

    def neighbour(self, task: TaskState, name: str, tile: int) -> Array:
        """A neighbour's whole array of one field, when it lies on this worker."""
        return self._phases[task.phase.sources[name]].held[tile].arrays[name]

    def bundle(self, task: TaskState, name: str, tile: int) -> Mapping[Any, Array]:
        """The rims that came from one tile of another worker."""
        return self._bundles[task.phase.number, tile, task.phase.sources[name]].arrays

    def owed(self, task: TaskState) -> list[SendRims]:
        """Rims of a task that other workers are known to need, before it is finished; more may be asked later."""
        where, tile = task.where, task.tile
        return [
            SendRims(worker, reader, tile, where.number, cuts, {}) for worker, reader, cuts in where.owed.get(tile, ())
        ]

    @property
    def ready_count(self) -> int:
        """Tasks that wait for nothing but a thread."""
        return len(self._ready)

    def in_flight(self, nbytes: int) -> None:
        """Bytes that the host has queued for other workers (negative: has got rid of)."""
        self._grow(nbytes)

    def measured(self, task: TaskState, nanoseconds: int) -> None:
        """Note what a task cost, for the ranks of those to come."""
        self.ranks.note(task.phase, task.tile, nanoseconds)

    # ---- the state at the end -----------------------------------------------------------------------

    def final(self) -> dict[int, dict[str, Array]]:
        """The state of own tiles after the last phase."""
        state: dict[int, dict[str, Array]] = {}
        for tile in self.plan.tiles:
            state[tile] = {
                name: self._phases[self.unroller.latest(name)].held[tile].arrays[name]
                for name in self.program.state_fields
            }
        return state

    def handover(self) -> list[Array]:
        """After the last phase: results of cycle-level reductions for the cycles that another run goes on with."""
        upcoming = self.unroller.next_values()
        return [np.stack([self.values[ref.instance][ref.row] for ref in refs]) for refs in upcoming.values()]

    # ---- emitting phases ----------------------------------------------------------------------------

    def _advance(self) -> None:
        """Emit phases until a value is missing, the window is full or the run is over."""
        if self._advancing:  # emitting a phase can complete a value: the loop below will see it
            return
        self._advancing = True
        while self._pending is not None and self._may_emit(self._pending):
            if isinstance(self._pending, Need):
                answer = [self.values[instance] for instance in self._pending.instances]
                self.answers.append(answer)
                self._step(answer)
            else:
                self._note_checkpoint(self._pending.cycle)
                self._emit(self._pending)
                self._step(None)
            self._complete_cycles()
        self._advancing = False
        self._settle()

    def _may_emit(self, pending: Phase | Need) -> bool:
        if isinstance(pending, Need):
            return all(instance in self.values for instance in pending.instances)
        return pending.cycle - self.cycles_done < self.options.window

    def _step(self, answer: list[Array] | None) -> None:
        if self.options.checkpoint_every:  # what the state is made of before the next phase changes it
            names = self.program.state_fields
            self._boundary = (
                {name: self.unroller.latest(name) for name in names},
                self.unroller.next_values(),
            )
        try:
            self._pending = self._generator.send(answer)
        except StopIteration:
            self._pending = None
            self._exhausted = True
            self._note_checkpoint(self._emitted_to + 1)

    def _emit(self, phase: Phase) -> None:
        where = PhaseState(phase.number, phase)
        where.remaining = len(self.plan.tiles)
        self.on_phase(phase)
        self._phases[phase.number] = where
        self._emitted_to = max(self._emitted_to, phase.cycle)
        self._unfinished[phase.cycle] = self._unfinished.get(phase.cycle, 0) + where.remaining
        self._create_tasks(where, phase)
        self._owe(phase)
        self._open_nodes(phase)
        self._open_barrier(phase)
        self._retire()

    def _open_nodes(self, phase: Phase) -> None:
        for making in phase.makes:
            self._made_in[making.instance] = phase.cycle
            if self._own_nodes:
                self._makings[making.instance] = (making, phase)
                self._nodes_open[making.instance] = self._own_nodes
                for level, index, vector in self._early_parts.pop(making.instance, ()):
                    self._part(making.instance, level, index, vector)

    def _open_barrier(self, phase: Phase) -> None:
        if phase.stage.index not in self._barriers:
            return
        self._counts[phase.number] = Counter(phase, 1 + len(self._barrier_children()))
        early = self._early_counts.pop(phase.number, 0) + (0 if self.plan.tiles else 1)
        for _ in range(early):
            self._count(phase.number)

    def _create_tasks(self, where: PhaseState, phase: Phase) -> None:
        groups = self._groups(phase)
        values = {ref.instance for ref in phase.values.values()}
        if phase.gate is not None:
            values.add(phase.gate.instance)
        absent = [instance for instance in values if instance not in self.values]
        gated = phase.waits_for is not None and phase.waits_for not in self._released
        ranks = self.ranks.of_phase(phase)
        for tile in self.plan.tiles:
            task = TaskState(where, tile)
            where.tasks[tile] = task
            task.priority = (phase.cycle, -ranks.get(tile, 0), phase.number)
            for source, here, there in groups:
                self._read(task, source, tile)
                for neighbour in here.get(tile, ()):
                    self._read(task, source, neighbour)
                for neighbour in there.get(tile, ()):
                    self._read_bundle(task, (phase.number, neighbour, source.number))
            for instance in absent:
                task.missing += 1
                self._value_waiting.setdefault(instance, []).append(task)
            if gated:
                assert phase.waits_for is not None
                task.missing += 1
                self._release_waiting.setdefault(phase.waits_for, []).append(task)
            if task.missing == 0:
                self._make_ready(task)
        if phase.waits_for is not None:
            self._released.discard(phase.waits_for)

    def _groups(self, phase: Phase) -> list[tuple[PhaseState, dict[int, tuple[int, ...]], dict[int, tuple[int, ...]]]]:
        """The versions that a phase reads: each with the neighbours, here and there, that are read too."""
        halos = self.plan.stage(phase.stage.index).halos
        by_source: dict[int, list[Any]] = {source: [] for source in phase.sources.values()}
        for halo in halos:
            by_source[phase.sources[halo.read.field]].append(halo)
        groups = []
        for source, read in by_source.items():
            here = read[0].here if len(read) == 1 else _merged([halo.here for halo in read])
            there = read[0].there if len(read) == 1 else _merged([halo.there for halo in read])
            groups.append((self._phases[source], here, there))
        return groups

    def _read(self, task: TaskState, source: PhaseState, tile: int) -> None:
        task.reads.append((source, tile))
        source.readers[tile] = source.readers.get(tile, 0) + 1
        if tile not in source.held:
            task.missing += 1
            source.waiting.setdefault(tile, []).append(task)

    def _read_bundle(self, task: TaskState, key: tuple[int, int, int]) -> None:
        task.bundles.append(key)
        bundle = self._bundles.get(key)
        if bundle is None:
            task.missing += 1
            self._bundle_waiting.setdefault(key, []).append(task)
        else:
            bundle.readers += 1

    def _owe(self, phase: Phase) -> None:
        """Rims that other workers need for this phase: sent now, or when their tile is done."""
        owed: dict[tuple[int, int, int], tuple[Cut, ...]] = {}
        for halo in self.plan.stage(phase.stage.index).halos:
            source = phase.sources[halo.read.field]
            for tile, workers in halo.cuts.items():
                for worker, cuts in workers.items():
                    key = (source, tile, worker)
                    owed[key] = owed.get(key, ()) + cuts
        for (number, tile, worker), cuts in owed.items():
            source_state = self._phases[number]
            held = source_state.held.get(tile)
            if held is None:
                source_state.owed.setdefault(tile, []).append((worker, phase.number, cuts))
            else:
                self._out.append(SendRims(worker, phase.number, tile, number, cuts, held.arrays))

    # ---- inputs -------------------------------------------------------------------------------------

    def _satisfy(self, waiter: Waiter) -> None:
        """One thing that a task, a node or a checkpoint was missing is there."""
        waiter.missing -= 1
        if waiter.missing:
            return
        if isinstance(waiter, TaskState):
            self._make_ready(waiter)
        elif isinstance(waiter, Node):
            self._combine(waiter)
        else:
            self._save(waiter)

    def _make_ready(self, task: TaskState) -> None:
        task.state = READY
        self._entries += 1
        heapq.heappush(self._ready, (task.priority, self._entries, task))

    def _arrive_rims(self, key: tuple[Any, ...], arrays: Mapping[Any, Array]) -> None:
        place = (key[0], key[1], key[2])
        waiters = self._bundle_waiting.pop(place, [])
        nbytes = sum(array.nbytes for array in arrays.values())
        self._bundles[place] = Bundle(arrays, nbytes, len(waiters))
        self._grow(nbytes)
        for waiter in waiters:
            self._satisfy(waiter)

    def _release_inputs(self, task: TaskState) -> None:
        for where, tile in task.reads:
            self._unread(where, tile)
        for key in task.bundles:
            bundle = self._bundles[key]
            bundle.readers -= 1
            if bundle.readers == 0:
                self._grow(-bundle.nbytes)
                del self._bundles[key]

    def _unread(self, where: PhaseState, tile: int) -> None:
        where.readers[tile] -= 1
        self._drop_if_unread(where, tile)

    def _drop_if_unread(self, where: PhaseState, tile: int) -> None:
        if where.live or where.readers.get(tile, 0) or tile not in where.held:
            return
        self._grow(-where.held.pop(tile).nbytes)
        where.readers.pop(tile, None)
        if not where.held and not where.tasks:
            self._phases.pop(where.number, None)

    def _retire(self) -> None:
        """Phases that hold no newest version any more may lose what nobody reads."""
        live = self.unroller.live_phases(self.program.state_fields)
        for number in [n for n, state in self._phases.items() if state.live and n not in live]:
            state = self._phases[number]
            state.live = False
            for tile in list(state.held):
                self._drop_if_unread(state, tile)
            if not state.held and not state.tasks:
                self._phases.pop(number, None)

    def _grow(self, nbytes: int) -> None:
        self.live_bytes += nbytes
        self.peak_bytes = max(self.peak_bytes, self.live_bytes)

    # ---- reductions ---------------------------------------------------------------------------------

    def _part(self, instance: int, level: int, index: int, vector: Array | None) -> None:
        """A contribution to a node (a tile's at level 0): kept here, or sent to the node's home."""
        parent = index // TREE_ARITY
        shape = self.tree.nodes[level, parent]
        if shape.home != self.me:
            self._out.append(SendItem(shape.home, ("part", instance, level, index), vector))
            return
        if instance not in self._makings:  # another worker is ahead of this one
            self._early_parts.setdefault(instance, []).append((level, index, vector))
            return
        place = (instance, level, parent)
        if place not in self._nodes:
            self._open_node(place, shape.children)
        node = self._nodes[place]
        node.parts[index % TREE_ARITY] = vector
        self._satisfy(node)

    def _open_node(self, place: tuple[int, int, int], children: int) -> None:
        """The root also waits for the result before its own, from which it goes on."""
        node = self._nodes[place] = Node(place, [None] * children, children)
        previous = self._makings[place[0]][0].previous
        if place[1] == self.tree.top and previous is not None and previous not in self.values:
            node.missing += 1
            self._value_waiting.setdefault(previous, []).append(node)

    def _combine(self, node: Node) -> None:
        instance, level, index = node.place
        making, phase = self._makings[instance]
        del self._nodes[node.place]
        self._nodes_open[instance] -= 1
        if self._nodes_open[instance] == 0:
            del self._makings[instance], self._nodes_open[instance]
        combined = combine(making.reduction.combine, node.parts)
        self._control("combine", phase, (instance, level, index))
        if level < self.tree.top:
            self._part(instance, level + 1, index, combined)
            return
        previous = self.values[making.previous][-1] if making.previous is not None else None
        stage = phase.stage.index
        vector = self.program.finish(stage, making.reduction, combined, previous, making.rows)
        self._out.extend(SendItem(w, ("value", instance), vector) for w in range(self.workers) if w != self.me)
        self._value(instance, vector)

    def _value(self, instance: int, vector: Array) -> None:
        self.values[instance] = vector
        for waiter in self._value_waiting.pop(instance, ()):
            self._satisfy(waiter)
        self._advance()

    # ---- barriers -----------------------------------------------------------------------------------

    def _barrier_children(self) -> list[int]:
        first = WORKER_ARITY * self.me + 1
        return [w for w in range(first, first + WORKER_ARITY) if w < self.workers]

    def _count(self, number: int) -> None:
        """One of the things a worker counts before it reports: its own tasks, or a worker below it."""
        if number not in self._counts:
            self._early_counts[number] = self._early_counts.get(number, 0) + 1
            return
        counter = self._counts[number]
        counter.missing -= 1
        if counter.missing:
            return
        phase = self._counts.pop(number).phase
        self._control("count", phase, (self.me,))
        if self.me != 0:
            self._out.append(SendItem((self.me - 1) // WORKER_ARITY, ("count", number)))
            return
        self._control("release", phase, ())
        self._release(number)

    def _release(self, number: int) -> None:
        self._out.extend(SendItem(worker, ("release", number)) for worker in self._barrier_children())
        if number in self._release_waiting:
            for waiter in self._release_waiting.pop(number):
                self._satisfy(waiter)
        else:
            self._released.add(number)

    # ---- cycles, checkpoints, limits ----------------------------------------------------------------

    def _complete_cycles(self) -> bool:
        """Count cycles whose own tasks are all done; whether there are new ones."""
        before = self.cycles_done
        while self._unfinished.get(self.cycles_done) == 0 and self._is_emitted(self.cycles_done):
            del self._unfinished[self.cycles_done]
            self.ranks.close(self.cycles_done)
            self.cycles_done += 1
        if self.cycles_done > before:
            self._forget_values()
        return self.cycles_done > before

    def _is_emitted(self, cycle: int) -> bool:
        """Whether no further phase of a cycle is to come."""
        pending = self._pending
        return self._exhausted or (isinstance(pending, Phase) and pending.cycle > cycle)

    def _settle(self) -> None:
        """The run is over here when nothing is left to do for this worker or for those that count on it."""
        self.finished = (
            self._exhausted
            and not any(self._unfinished.values())
            and not (self._checkpoints or self._makings or self._counts)
            and all(instance in self.values for instance in self.unroller.last_values().values())
        )

    def _forget_values(self) -> None:
        """Results that no phase to come can use."""
        oldest = self.cycles_done - self._longest_lag - 2
        needed = set(self.unroller.last_values().values())
        for instance in [i for i, cycle in self._made_in.items() if cycle < oldest and i not in needed]:
            del self._made_in[instance]
            self.values.pop(instance, None)

    def _note_checkpoint(self, next_cycle: int) -> None:
        """Before the first phase of a cycle is emitted, pin the state that the cycle before ends with."""
        every, cycle = self.options.checkpoint_every, next_cycle - 1
        due = every and next_cycle % every == 0 and cycle >= self.unroller.start
        if not due or self._emitted_to != cycle or cycle in self._checkpoints:
            return
        newest, values = self._boundary
        fields = {name: self._phases[number] for name, number in newest.items()}
        checkpoint = self._checkpoints[cycle] = Checkpoint(cycle, fields, values)
        for state in {state.number: state for state in fields.values()}.values():
            for tile in self.plan.tiles:
                self._pin(checkpoint, state, tile)
        for instance in {ref.instance for refs in checkpoint.values.values() for ref in refs}:
            if instance not in self.values:
                checkpoint.missing += 1
                self._value_waiting.setdefault(instance, []).append(checkpoint)
        self._satisfy(checkpoint)

    def _pin(self, checkpoint: Checkpoint, state: PhaseState, tile: int) -> None:
        checkpoint.reads.append((state, tile))
        state.readers[tile] = state.readers.get(tile, 0) + 1
        if tile not in state.held:
            checkpoint.missing += 1
            state.waiting.setdefault(tile, []).append(checkpoint)

    def _save(self, checkpoint: Checkpoint) -> None:
        tiles = {
            tile: {name: state.held[tile].arrays[name] for name, state in checkpoint.fields.items()}
            for tile in self.plan.tiles
        }
        values = {
            name: np.stack([self.values[ref.instance][ref.row] for ref in refs])
            for name, refs in checkpoint.values.items()
        }
        self._out.append(Save(checkpoint.cycle, tiles, values))

    def _pop(self) -> TaskState | None:
        if not self._ready:
            return None
        limit = self.options.limit
        if not limit or self.live_bytes <= limit:
            return heapq.heappop(self._ready)[2]
        oldest = min((n for n, state in self._phases.items() if state.tasks), default=-1)
        for place, (_, _, task) in enumerate(self._ready):
            if task.where.number == oldest:
                self._ready[place] = self._ready[-1]
                self._ready.pop()
                heapq.heapify(self._ready)
                return task
        return None

    def _flush(self) -> list[Instruction]:
        out, self._out = self._out, []
        return out


def _hold(arrays: Mapping[str, Array]) -> Held:
    return Held(arrays, sum(array.nbytes for array in arrays.values()))


def _merged(neighbours: list[dict[int, tuple[int, ...]]]) -> dict[int, tuple[int, ...]]:
    """Neighbours of several fields that one phase wrote, each once."""
    tiles = {tile for one in neighbours for tile in one}
    return {t: tuple(dict.fromkeys(n for one in neighbours for n in one.get(t, ()))) for t in tiles}

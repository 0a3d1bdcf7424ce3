"""The resident dispatch on one worker, as a state machine: events in, instructions out, no input or output.

Each worker unrolls the same phases in the same order, for what is emitted depends on values alone. Of each
phase it keeps the tasks of its own tiles; for tiles at the seam it owes rims to other workers, and expects
theirs. Nothing is ever asked for: whoever makes something knows who needs it and sends it.

Events (method, what happened)
------------------------------
start        the run may begin: phases are emitted as far as the window and known values allow
take         a thread asks for work: the most urgent ready task, or None
finish       a thread has run a task: its arrays and contributions are here
arrive       another worker's item is here: rims, a part of a reduction, a value, a count or a release
made         the result of a reduction whose root is here has been worked out
saved        a checkpoint of a cycle has been written

Instructions (what the host must do)
------------------------------------
SendRims     cut these rims from a finished task and send them to a worker
SendItem     send a small item to a worker
Finish       work out a result from what all tiles gave, by functions of the user's, then report it as made
Save         write the state of own tiles at the end of a cycle

Life of a task
--------------
==========  ====================================  ========================================
state       moves on when                         to
==========  ====================================  ========================================
waiting     the last missing input is there       ready
ready       a thread takes it                     running
running     it is finished                        done (its state is dropped)
==========  ====================================  ========================================

There are no other moves; a failed run drops everything at once. :meth:`TaskState.move` holds the table.

Life of what else there is
--------------------------
==========  ====================  ====================================  ========================================
what        comes to be when      goes on when                          is dropped when
==========  ====================  ====================================  ========================================
phase       emitted               it holds no newest version any more:  its tasks are done and it holds no array
                                  it may lose what nobody reads
array       its task is done                                            it is not newest and its readers are done
bundle      rims arrive                                                 its readers are done
node        its phase is emitted  the last part is there: combined, a   combined
                                  root's result then worked out
result      made or arrived                                             its cycle is closed, and so are as many
                                                                        after it as it may lag behind
barrier     its phase is emitted  own tasks are done and the workers    released
                                  below have reported: reports
checkpoint  its cycle is whole    the last array and result are there:  saved
                                  to be saved
==========  ====================  ====================================  ========================================

Invariants (checked by :func:`breakstep.engine.resident.invariants.check` after every event in the tests)
-----------------------------------------------------------------------------------------------------------
1. A waiting task misses exactly as many inputs as are not there, and is registered once for each of them; a ready or
   running one misses none. The same holds for the roots of trees and for checkpoints.
2. An array is held while a task that is not done or a checkpoint that is not saved reads it, or while its phase holds
   the newest version of a field; and no longer. A bundle of rims is held while tasks that are not done read it. Rims
   are owed from tasks that are not done, and only from those.
3. Live bytes are the sum of what is held, each array once, of bundles, and of what is on its way to other workers.
4. Tasks, results, releases and checkpoints that a cycle misses are counted exactly; cycles are done, and closed, in
   order. Nothing is kept of closed cycles but results that may still be used.
5. An item that arrives twice, at whatever time, changes nothing.
6. The queue holds each ready task once, and gives out the smallest (cycle, -rank, phase, order of arrival).
7. What is kept of phases that are not emitted here came from workers that are ahead.
8. The run is over here when, and only when, all phases are emitted and all cycles closed.

Progress under a limit on live bytes: a task of the oldest phase that has own tasks which are not done may always
run. Over all workers, the tasks of the oldest unfinished phase have all their inputs on the way or there,
so some worker can always go on, whatever the limit; run-ahead is what is held back.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Generator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np

from breakstep.engine.resident.barriers import Barriers
from breakstep.engine.resident.checkpoints import Checkpoint, Checkpoints
from breakstep.engine.resident.cycles import Cycles, longest_lag
from breakstep.engine.resident.livebytes import LiveBytes
from breakstep.engine.resident.plan import WorkerPlan
from breakstep.engine.resident.ranks import Ranks
from breakstep.engine.resident.ready import ReadyQueue
from breakstep.engine.resident.reductions import Node, Reductions
from breakstep.engine.resident.results import Results
from breakstep.engine.resident.states import (
    DONE,
    Bundle,
    Control,
    Exits,
    Finish,
    Instruction,
    PhaseState,
    Save,
    SendItem,
    SendRims,
    TaskState,
    Waiter,
)
from breakstep.graph.unroll import INITIAL, Need, Phase, Unroller
from breakstep.steps.step import Array

BundleKey: TypeAlias = tuple[int, int, int]  # reading phase, tile, phase that made it

__all__ = ["BundleKey", "Core", "CoreOptions", "Finish", "Instruction", "Save", "SendItem", "SendRims", "TaskState"]


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
    control : callable
        Called when a node, a counter or a release has done its work: kind, phase, place; for a root when its result
        has been worked out.

    Attributes
    ----------
    values : dict of int to ndarray
        Results of reductions by instance, as far as they are known and may still be used.
    answers : list of list of ndarray
        What the unrolling was answered: with it, it can be repeated elsewhere.
    on_phase : callable
        Called with each phase that is emitted.
    finished : bool
    """

    def __init__(
        self,
        plan: WorkerPlan,
        unroller: Unroller,
        workers: int,
        options: CoreOptions,
        initial: Mapping[int, Mapping[str, Array]],
        given: Sequence[Array] = (),
        control: Control = lambda *_: None,
    ) -> None:
        self.plan, self.unroller, self.workers, self.options = plan, unroller, workers, options
        self.program, self.me = plan.program, plan.worker
        self.answers: list[list[Array]] = []
        self.finished = False
        self.on_phase: Callable[[Phase], None] = lambda _: None
        self._out: list[Instruction] = []
        exits = Exits(self._satisfy, self._out, control)
        lag = longest_lag(self.program.problem.splitting.all_reductions())
        stages = self.program.template.stages_with_barrier(unroller.barriers)
        self._longest_lag = lag
        self._bytes = LiveBytes()
        self._cycles = Cycles(unroller.start, options.window, lag)
        self._results = Results(given, unroller.start - 1)
        self._reductions = Reductions(plan, workers, self._results, exits, self._value)
        self._barriers = Barriers(self.me, workers, stages, self._cycles, exits)
        self._checkpoints = Checkpoints(plan.tiles, self._results, self._cycles, exits)
        self._ready = ReadyQueue(by_phase=options.limit > 0)
        self._ranks = Ranks(plan)
        self.values = self._results.known
        self._phases: dict[int, PhaseState] = {}
        self._unfinished: deque[PhaseState] = deque()  # oldest first; some are done
        self._bundles: dict[BundleKey, Bundle] = {}
        self._bundle_waiting: dict[BundleKey, list[TaskState]] = {}
        self._emitted = INITIAL  # newest phase
        self._live: frozenset[int] = frozenset({INITIAL})
        self._generator: Generator[Phase | Need, list[Array] | None, None] = unroller.run()
        self._pending: Phase | Need | None = None
        self._exhausted = False
        self._begin(initial)

    def _begin(self, initial: Mapping[int, Mapping[str, Array]]) -> None:
        begin = self._phases[INITIAL] = PhaseState(INITIAL, None)
        for tile, arrays in initial.items():
            begin.held[tile] = arrays
            self._bytes.hold(arrays)

    # ---- events -------------------------------------------------------------------------------------

    def start(self) -> list[Instruction]:
        """Emit the first phases."""
        self._step(None)
        return self._close_event()

    def take(self) -> TaskState | None:
        """The most urgent ready task that the limit on live bytes allows, now running."""
        limit = self.options.limit
        if not limit or self._bytes.now <= limit:
            return self._ready.pop()
        oldest = self._oldest()
        return self._ready.pop_from(oldest) if oldest is not None else None

    def finish(
        self, task: TaskState, arrays: Mapping[str, Array], partials: Mapping[str, Array | None]
    ) -> list[Instruction]:
        """A task has made its arrays (or handed its inputs on) and its contributions to reductions."""
        where, tile, phase = task.where, task.tile, task.phase
        task.move(DONE)
        del where.tasks[tile]
        where.held[tile] = arrays
        self._bytes.hold(arrays)
        for waiter in where.waiting.pop(tile, ()):
            self._satisfy(waiter)
        for worker, reader, cuts in where.owed.pop(tile, ()):
            self._out.append(SendRims(worker, reader, tile, where.number, cuts, arrays))
        self._release_inputs(task)
        self._drop_if_unread(where, tile)
        for making in phase.makes:
            self._reductions.part(making.instance, 0, tile, partials[making.reduction.name])
        self._cycles.open[phase.cycle].tasks -= 1
        if not where.tasks:
            self._end(where)
        return self._close_event()

    def _end(self, where: PhaseState) -> None:
        """All own tasks of a phase are done; it may stay for what they made, and must not keep what they read."""
        where.reads.clear()
        where.ready.clear()
        self._oldest()
        self._barriers.count(where.number, self.me)

    def arrive(self, key: tuple[Any, ...], payload: Any) -> list[Instruction]:
        """An item from another worker: its key says what it is."""
        kind = key[0]
        if kind == "rims":
            self._arrive_rims((key[1], key[2], key[3]), payload)
        elif kind == "part":
            self._reductions.part(key[1], key[2], key[3], payload)
        elif kind == "value":
            self._value(key[1], payload)
        elif kind == "count":
            self._barriers.count(key[1], key[2])
        elif kind == "release":
            self._barriers.release(key[1])
        else:
            raise AssertionError(f"{key} is no item that workers send each other")
        return self._close_event()

    def made(self, order: Finish, vector: Array) -> list[Instruction]:
        """A result whose root is here has been worked out."""
        self._reductions.finished(order, vector)
        return self._close_event()

    def saved(self, cycle: int) -> list[Instruction]:
        """The checkpoint of a cycle is on disk: its arrays may go."""
        for state in self._checkpoints.saved(cycle):
            self._unread(state, self.plan.tiles)
        return self._close_event()

    def _close_event(self) -> list[Instruction]:
        """Whatever has happened may let further phases be emitted."""
        self._advance()
        if not self._out:
            return []
        out = self._out.copy()
        self._out.clear()
        return out

    # ---- what a thread needs to run a task ----------------------------------------------------------

    def own_arrays(self, task: TaskState) -> dict[str, Array]:
        """The tile's own zones of every field the task reads."""
        held = {name: self._phases[source].held[task.tile] for name, source in task.phase.sources.items()}
        return {name: arrays[name] for name, arrays in held.items() if name in arrays}

    def neighbour(self, task: TaskState, name: str, tile: int) -> Array:
        """A neighbour's whole array of one field, when it lies on this worker."""
        return self._phases[task.phase.sources[name]].held[tile][name]

    def bundle(self, task: TaskState, name: str, tile: int) -> Mapping[Any, Array]:
        """The rims that came from one tile of another worker."""
        return self._bundles[task.phase.number, tile, task.phase.sources[name]].arrays

    def owed(self, task: TaskState) -> list[SendRims]:
        """Rims of a task that other workers are known to need, before it is finished; more may be asked later."""
        where, tile = task.where, task.tile
        return [
            SendRims(worker, reader, tile, where.number, cuts, {}) for worker, reader, cuts in where.owed.get(tile, ())
        ]

    # ---- what the host tells and asks ---------------------------------------------------------------

    @property
    def top(self) -> int:
        """Level of the roots of reduction trees."""
        return self._reductions.tree.top

    @property
    def ready_count(self) -> int:
        """Tasks that wait for nothing but a thread."""
        return len(self._ready)

    @property
    def cycles_done(self) -> int:
        """All own tasks of the cycles below this one are done."""
        return self._cycles.done

    @property
    def live_bytes(self) -> int:
        """Bytes held here and on their way from here."""
        return self._bytes.now

    @property
    def peak_bytes(self) -> int:
        """Most live bytes so far."""
        return self._bytes.peak

    def in_flight(self, nbytes: int) -> None:
        """Bytes that the host has queued for other workers (negative: has got rid of)."""
        self._bytes.move(nbytes)

    def measured(self, task: TaskState, nanoseconds: int) -> None:
        """Note what a running task has cost, for the ranks of those to come."""
        self._ranks.note(task.phase, task.tile, nanoseconds)

    # ---- the state at the end -----------------------------------------------------------------------

    def final(self) -> dict[int, dict[str, Array]]:
        """The state of own tiles after the last phase."""
        newest = {name: self._phases[self.unroller.latest(name)] for name in self.program.state_fields}
        return {tile: {name: state.held[tile][name] for name, state in newest.items()} for tile in self.plan.tiles}

    def handover(self) -> list[Array]:
        """After the last phase: results of cycle-level reductions for the cycles that another run goes on with."""
        upcoming = self.unroller.next_values()
        return [np.stack([self.values[ref.instance][ref.row] for ref in refs]) for refs in upcoming.values()]

    # ---- emitting phases ----------------------------------------------------------------------------

    def _advance(self) -> None:
        """Emit phases until a value is missing, the window is full or the run is over."""
        self._settle()
        while self._pending is not None and self._may_emit(self._pending):
            if isinstance(self._pending, Need):
                answer = [self.values[instance] for instance in self._pending.instances]
                self.answers.append(answer)
                self._step(answer)
            else:
                self._emit(self._pending)
                self._step(None)
            self._settle()
        self.finished = self._exhausted and self._cycles.closed == self._cycles.whole

    def _may_emit(self, pending: Phase | Need) -> bool:
        if isinstance(pending, Need):
            return all(instance in self.values for instance in pending.instances)
        return self._cycles.may_emit(pending.cycle)

    def _step(self, answer: list[Array] | None) -> None:
        """Have the unrolling go on; note when it leaves a cycle behind."""
        unroller, cycle = self.unroller, self._cycles.emitted
        names = self.program.state_fields if self._is_due(cycle) else ()
        newest = {name: self._phases[unroller.latest(name)] for name in names}
        values = unroller.next_values() if names else {}
        try:
            self._pending = self._generator.send(answer)
        except StopIteration:
            self._pending, self._exhausted = None, True
        if self._exhausted or (isinstance(self._pending, Phase) and self._pending.cycle > cycle):
            self._cycles.whole = cycle + 1
            if names:
                self._checkpoints.pin(cycle, newest, values)

    def _is_due(self, cycle: int) -> bool:
        """Whether there is to be a checkpoint at the end of a cycle."""
        every = self.options.checkpoint_every
        return every > 0 and (cycle + 1) % every == 0 and cycle >= self.unroller.start

    def _settle(self) -> None:
        """Let go of what cycles that are done, or closed, leave behind."""
        if self._cycles.settle():
            self._ranks.close(self._cycles.done)
            self._results.forget(self._cycles.closed - 1 - self._longest_lag)

    def _emit(self, phase: Phase) -> None:
        where = self._phases[phase.number] = PhaseState(phase.number, phase)
        self._emitted = phase.number
        self.on_phase(phase)
        self._cycles.emit(phase.cycle, len(self.plan.tiles))
        self._ranks.emit(phase)
        self._create_tasks(where, phase)
        self._owe(phase)
        for making in phase.makes:
            if self._results.announce(making.instance, phase.cycle):
                self._cycles.of(phase.cycle).controls += 1
            self._reductions.open(making, phase)
        self._barriers.emit(phase, len(self.plan.tiles))
        self._retire()

    def _create_tasks(self, where: PhaseState, phase: Phase) -> None:
        if not self.plan.tiles:
            return
        self._unfinished.append(where)
        where.reads = [(self._phases[source], reach) for source, reach in self.plan.reaches(phase)]
        values = {ref.instance for ref in phase.values.values()}
        if phase.gate is not None:
            values.add(phase.gate.instance)
        ranks, number, cycle = self._ranks.of_phase(phase), phase.number, phase.cycle
        for tile in self.plan.tiles:
            task = where.tasks[tile] = TaskState(where, tile, (cycle, -ranks.get(tile, 0), number))
            self._register(task)
            for instance in values:
                self._results.need(instance, task)
            if phase.waits_for is not None:
                self._barriers.need(phase.waits_for, task)
            if task.missing == 0:
                self._ready.push(task)

    def _register(self, task: TaskState) -> None:
        """Enter a task as a reader of all arrays and rims that it reads."""
        where, tile = task.where, task.tile
        for source, reach in where.reads:
            source.read(reach.here[tile], task)
            for other in reach.there[tile]:
                self._read_bundle(task, (where.number, other, source.number))

    def _read_bundle(self, task: TaskState, key: BundleKey) -> None:
        bundle = self._bundles.get(key)
        if bundle is None:
            task.missing += 1
            self._bundle_waiting.setdefault(key, []).append(task)
        else:
            bundle.readers += 1

    def _owe(self, phase: Phase) -> None:
        """Rims that other workers need for this phase: sent now, or when their tile is done."""
        for source, reach in self.plan.reaches(phase):
            state = self._phases[source]
            for tile, workers in reach.cuts.items():
                held = state.held.get(tile)
                for worker, cuts in workers.items():
                    if held is None:
                        state.owed.setdefault(tile, []).append((worker, phase.number, cuts))
                    else:
                        self._out.append(SendRims(worker, phase.number, tile, source, cuts, held))

    # ---- inputs -------------------------------------------------------------------------------------

    def _satisfy(self, waiter: Waiter) -> None:
        """One thing that a task, a node or a checkpoint was missing is there."""
        waiter.missing -= 1
        if waiter.missing:
            return
        if isinstance(waiter, TaskState):
            self._ready.push(waiter)
        elif isinstance(waiter, Node):
            self._reductions.combine(waiter)
        elif isinstance(waiter, Checkpoint):
            self._checkpoints.save(waiter)

    def _arrive_rims(self, key: BundleKey, arrays: Mapping[Any, Array]) -> None:
        """Rims of a phase that is emitted and that nobody waits for have been here before."""
        waiters = self._bundle_waiting.pop(key, None)
        if key in self._bundles or (waiters is None and key[0] <= self._emitted):
            return
        waiters = waiters or []
        nbytes = sum(array.nbytes for array in arrays.values())
        self._bundles[key] = Bundle(arrays, nbytes, len(waiters))
        self._bytes.add(nbytes)
        for waiter in waiters:
            self._satisfy(waiter)

    def _value(self, instance: int, vector: Array) -> None:
        """A result has come, or has been made here."""
        if not self._results.is_new(instance):
            return
        waiters, cycle = self._results.put(instance, vector)
        if cycle is not None:
            self._cycles.open[cycle].controls -= 1
        for waiter in waiters:
            self._satisfy(waiter)

    # ---- letting go ---------------------------------------------------------------------------------

    def _release_inputs(self, task: TaskState) -> None:
        where, tile = task.where, task.tile
        for source, reach in where.reads:
            self._unread(source, reach.here[tile])
            for other in reach.there[tile]:
                self._unread_bundle((where.number, other, source.number))

    def _unread(self, where: PhaseState, tiles: Sequence[int]) -> None:
        readers = where.readers
        for tile in tiles:
            readers[tile] -= 1
            if not readers[tile]:
                self._drop_if_unread(where, tile)

    def _unread_bundle(self, key: BundleKey) -> None:
        bundle = self._bundles[key]
        bundle.readers -= 1
        if bundle.readers == 0:
            self._bytes.add(-bundle.nbytes)
            del self._bundles[key]

    def _drop_if_unread(self, where: PhaseState, tile: int) -> None:
        if where.live or where.readers.get(tile) or tile not in where.held:
            return
        self._bytes.let_go(where.held.pop(tile))
        where.readers.pop(tile, None)
        self._drop_if_empty(where)

    def _drop_if_empty(self, where: PhaseState) -> None:
        if not (where.live or where.held or where.tasks):
            del self._phases[where.number]

    def _retire(self) -> None:
        """Phases that hold no newest version any more may lose what nobody reads."""
        self._live, before = self.unroller.live_phases(self.program.state_fields), self._live
        for number in [*(before - self._live), *({self._emitted} - self._live)]:
            state = self._phases[number]
            state.live = False
            for tile in list(state.held):
                self._drop_if_unread(state, tile)
            if number in self._phases:
                self._drop_if_empty(state)

    def _oldest(self) -> PhaseState | None:
        """The oldest phase that has own tasks which are not done."""
        unfinished = self._unfinished
        while unfinished and not unfinished[0].tasks:
            unfinished.popleft()
        return unfinished[0] if unfinished else None

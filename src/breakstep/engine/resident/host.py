"""One worker of a resident run: threads that work, the post to other workers, and the state machine between them.

The state machine is pure and guarded by one lock. Threads take tasks from it and report back; the worker's event
loop feeds in what arrives. Knows nothing of how the run was started, nor of who keeps it alive.
"""

from __future__ import annotations

import asyncio
import threading
import time
from collections import deque
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from distributed import Worker

from breakstep.engine.execute import Output, execute
from breakstep.engine.program import Program
from breakstep.engine.resident import adapter
from breakstep.engine.resident.core import (
    Core,
    CoreOptions,
    Finish,
    Instruction,
    Save,
    SendItem,
    SendRims,
    TaskState,
)
from breakstep.engine.resident.inputs import cut_rims, inputs_of, site_of, worked_out
from breakstep.engine.resident.notes import Notebook
from breakstep.engine.resident.plan import WorkerPlan
from breakstep.engine.resident.post import Letter, Post
from breakstep.engine.resident.wire import Item, Parcel, copied
from breakstep.engine.run import RunOptions, unroller_for
from breakstep.errors import ClusterError, KernelError
from breakstep.graph.unroll import Phase
from breakstep.steps.step import Array

LEASE_SECONDS = 120.0  # a worker that hears nothing from its driver for so long gives up
WAIT_SECONDS = 1.0  # how often an idle thread looks up, should nobody wake it
DRAIN_SECONDS = 0.0005  # between looks at the post when all tasks are done
ANSWERS = ("taken", "known", "stopped")  # of a worker that has the run; a worker that never heard of it says nothing
LONG_FINISH_NS = 1_000_000  # a result that takes longer to work out is never worked out in the event loop again
PUSH_BACK_SECONDS = 0.02  # most by which an answer is held back while memory is short


@dataclass(frozen=True)
class Assignment:
    """What one worker is told of a run.

    Attributes
    ----------
    run : str
    client : str
        Dask's name of the driver; a run whose driver is gone from the cluster is an orphan.
    program : Program
    options : RunOptions
    worker : int
        This worker's number.
    addresses : tuple of str
        All workers' addresses by number.
    owners : tuple of int
        Worker of each tile.
    threads : int
    zero : int
        Reading of this worker's clock at the run's origin [ns].
    lease : float
        A worker that hears nothing from its driver for so long gives up [s].
    resume : Path or None
        Checkpoint to go on from.
    save_to : Path or None
        Folder for checkpoints.
    previous, previous_owners : str or None, tuple of int
        The run whose final state this one goes on from, still held by the workers, and who owned what there.
    """

    run: str
    client: str
    program: Program
    options: RunOptions
    worker: int
    addresses: tuple[str, ...]
    owners: tuple[int, ...]
    threads: int
    zero: int
    lease: float = LEASE_SECONDS
    resume: Path | None = None
    save_to: Path | None = None
    previous: str | None = None
    previous_owners: tuple[int, ...] = ()


@dataclass(frozen=True)
class Saved:
    """A worker's share of a checkpoint is on disk: digests by field and tile, results of reductions."""

    cycle: int
    digests: Mapping[str, Mapping[int, str]]
    values: Mapping[str, Any]


@dataclass(frozen=True)
class Status:
    """How far a worker is: cycles done, shares of checkpoints saved since the last look, kernel time by tile [ns]."""

    cycles: int
    saved: tuple[Saved, ...]
    costs: Mapping[int, int]


class Host:
    """A worker's part in one run."""

    def __init__(self, assignment: Assignment, worker: Worker, earlier: Host | None = None) -> None:
        self.told = assignment
        self.dask = worker
        self.lock = threading.Lock()
        self.changed = threading.Condition(self.lock)
        self.booking = threading.Lock()  # held while a task's rows are entered
        self.post = Post(
            adapter.event_loop(worker), len(assignment.addresses), self._send, self._moved, self._unreachable
        )
        self.core: Core | None = None
        self.earlier = earlier
        self.beside: Callable[[str], Host | None] = lambda address: None  # who is reached without a message
        self.costs: dict[int, int] = {}  # tile -> processor time in kernels [ns]
        self.notes: Notebook = Notebook(assignment, earlier.notes if earlier is not None else None)
        self.error: BaseException | None = None
        self.stopped = False
        self.working = False
        self.heard = time.monotonic()  # when the driver last asked
        self._saved: list[Saved] = []
        self._results: deque[Finish] = deque()  # to be worked out by the next thread that is free
        self._idle = 0  # threads that wait for work
        self._finishes_long = False
        self._seen: dict[int, int] = {}  # sender -> number of its last message

    # ---- a run's life ----------------------------------------------------------------------------

    def prepare(self) -> None:
        """Make the state machine and the initial state. No worker may begin to work before all have done so."""
        from breakstep.engine.checkpoint import load_tiles, load_values

        told, program = self.told, self.told.program
        plan = WorkerPlan(program, told.owners, told.worker)
        for _, read in program.problem.splitting.halo_reads():  # here, for the first phases cannot wait for it
            for tile in range(len(program.tiling)):
                program.plans.plan(tile, read)
        unroller = unroller_for(program, told.options)
        if self.earlier is not None:
            initial, given = self._taken_over(self.earlier, plan.tiles)
        elif told.resume is None:
            initial, given = {tile: program.initial(tile) for tile in plan.tiles}, []
        else:
            initial = load_tiles(told.resume, program, plan.tiles)
            given = load_values(told.resume, program)
        options = CoreOptions(told.options.window, told.options.memory_limit, told.options.checkpoint_every)
        core = Core(plan, unroller, len(told.addresses), options, initial, given, self._on_control)
        core.on_phase = self.notes.phase
        with self.lock:
            self.core = core

    def _taken_over(self, earlier: Host, tiles: Sequence[int]) -> tuple[dict[int, dict[str, Array]], list[Array]]:
        """The state that the run before left: tiles owned then are here, others are fetched from who owned them."""
        core = earlier._core()
        state, self.earlier = core.final(), None
        by_owner: dict[int, list[int]] = {}
        for tile in tiles:
            if tile not in state:
                by_owner.setdefault(self.told.previous_owners[tile], []).append(tile)
        for owner, wanted in by_owner.items():
            request = adapter.fetch(self.dask, self.told.addresses[owner], earlier.told.run, wanted)
            parcel = asyncio.run_coroutine_threadsafe(request, adapter.event_loop(self.dask)).result()
            if parcel is None:
                raise ClusterError(f"worker {owner} at {self.told.addresses[owner]} has dropped the run", lost=True)
            self.notes.arrivals(owner, parcel, time.perf_counter_ns())
            for _, arrays in parcel.items:
                for (name, tile, _), array in arrays.items():
                    state.setdefault(tile, {})[name] = array
        return {tile: {**self.told.program.scratch_values(tile), **state[tile]} for tile in tiles}, core.handover()

    def hand_over(self, tiles: Sequence[int]) -> Parcel:
        """The final state of some tiles, for the worker that owns them from now on."""
        core = self._core()
        state = core.final()
        items: list[Item] = []
        for tile in tiles:
            for name, array in state[tile].items():
                maker = self.notes.maker(core.unroller.latest(name), tile)
                items.append((("task", maker), {(name, tile, (0, 0, 0)): array}))
        return Parcel(items)

    def work(self) -> None:
        """Run to the end on this many threads.

        Raises
        ------
        BreakstepError
            What ended the run early.
        """
        self.working = True
        try:
            self._start()
            self._work_in_threads()
            self._drain()
        finally:
            self.working = False
        if self.error is not None:
            raise self.error
        if self.stopped:
            raise ClusterError("the run was called off", lost=True)

    def final(self) -> dict[int, dict[str, Array]]:
        """State of own tiles after the run's end."""
        with self.lock:
            return self._core().final()

    def stop(self, reason: BaseException | None = None) -> None:
        """End the run here as soon as running kernels return; the first reason given stands."""
        with self.lock:
            if reason is not None and self.error is None and not self.stopped:
                self.error = reason
            self.stopped = True
            self.changed.notify_all()

    def close(self) -> None:
        """Stop, and let go of everything but the record; to be called in the event loop."""
        self.stop()
        self.post.close()
        with self.booking:  # a kernel may still run; what it makes comes too late
            self.notes.on = False

    def status(self) -> Status:
        """What the driver wants to know from time to time; asking renews the lease."""
        self.heard = time.monotonic()
        with self.lock:
            saved, self._saved = self._saved, []
            return Status(self.core.cycles_done if self.core is not None else 0, tuple(saved), dict(self.costs))

    # ---- threads ---------------------------------------------------------------------------------

    def _core(self) -> Core:
        assert self.core is not None
        return self.core

    def _start(self) -> None:
        try:
            with self.lock:
                instructions = self._core().start()
            self._obey(instructions)
        except Exception as error:  # a user's function may be called here, as in a task
            self.stop(error)

    def _work_in_threads(self) -> None:
        """The calling thread is number 0."""
        others = [
            threading.Thread(target=self._thread, args=(number,), name=f"breakstep-{number}", daemon=True)
            for number in range(1, self.told.threads)
        ]
        for thread in others:
            thread.start()
        self._thread(0)
        for thread in others:
            thread.join()

    def _thread(self, number: int) -> None:
        self.notes.begin_thread(number)
        task: TaskState | None = None
        try:
            while (work := self._next()) is not None:
                if isinstance(work, Finish):
                    self._work_out(work, number)
                else:
                    self._run(task := work, number)
        except Exception as error:  # whatever it is, the other threads and the driver must hear of it
            self.stop(error)
        except BaseException as error:  # on a worker nobody handles an interrupt or an exit
            self.stop(_raised(task, error))

    def _next(self) -> TaskState | Finish | None:
        """Results first: everybody waits for them."""
        core = self._core()
        with self.lock:
            while not self.stopped:
                if self._results:
                    return self._results.popleft()
                task = core.take()
                if task is not None:
                    return task
                if core.finished:
                    self.changed.notify_all()
                    return None
                self._idle += 1
                self.changed.wait(WAIT_SECONDS)
                self._idle -= 1
        return None

    def _run(self, task: TaskState, thread: int) -> None:
        core = self._core()
        start = time.perf_counter_ns()
        output = execute(core.program, site_of(task), inputs_of(core, task))
        with self.lock:
            owed = core.owed(task)
        began = self.notes.watch()
        rims = {(o.worker, o.phase): cut_rims(o, output.fields) for o in owed}
        end = self._book(task, thread, start, output, began if rims else None)
        with self.lock:
            if self.stopped:
                return
            core.measured(task, end - start)
            spent = sum(interval.cpu for interval in output.intervals if interval.what == "kernel")
            self.costs[task.tile] = self.costs.get(task.tile, 0) + spent
            before = core.ready_count
            instructions = core.finish(task, output.fields, output.partials)
            self._wake(core, before)
        self._obey(instructions, rims, thread)

    def _work_out(self, order: Finish, thread: int | None) -> None:
        """Call the functions that make a result; outside the lock, for they are the user's and may take long.

        Parameters
        ----------
        thread : int or None
            The thread whose time it is; None for the event loop and the thread that saves.
        """
        core = self._core()
        start, cpu = self.notes.watch()
        vector = worked_out(core.program, order)
        end, spent = time.perf_counter_ns(), time.thread_time_ns() - cpu
        self._finishes_long = end - start > LONG_FINISH_NS
        with self.lock:
            if self.stopped:
                return
            self.notes.result(order, (start, end, spent), thread)
            before = core.ready_count
            instructions = core.made(order, vector)
            if core.finished or core.ready_count > before:
                self.changed.notify_all()
        self._obey(instructions, thread=thread)

    def _hand_over_result(self, order: Finish) -> None:
        """From the event loop: to a thread that is idle or, when this is known to take long, to whichever is free next.

        With all threads at work and little to do it is done here and now: the result is what the next tasks wait for.
        """
        with self.lock:
            if self._idle or self._finishes_long:
                self._results.append(order)
                self.changed.notify_all()
                return
        try:
            self._work_out(order, None)
        except Exception as error:  # a reduction's own function
            self.stop(error)

    def _book(self, task: TaskState, thread: int, start: int, output: Output, packing: tuple[int, int] | None) -> int:
        with self.booking:
            return self.notes.task(task, thread, start, output, packing)

    def _wake(self, core: Core, before: int) -> None:
        """Wake idle threads when there is more for them than the caller will take itself."""
        if core.finished or core.ready_count > max(before, 1):
            self.changed.notify_all()

    # ---- what the state machine asks for ---------------------------------------------------------

    def _obey(
        self,
        instructions: Sequence[Instruction],
        rims: Mapping[tuple[int, int], Any] | None = None,
        thread: int | None = None,
    ) -> None:
        """Do what the state machine asks for.

        Parameters
        ----------
        rims : mapping, optional
            By worker and reading phase, rims that are cut already.
        thread : int or None
            Number of the calling thread, if it is one that works on tasks.
        """
        letters: list[Letter] = []
        results = [order for order in instructions if isinstance(order, Finish)]
        for order in instructions:
            if isinstance(order, SendRims):
                ready = (rims or {}).get((order.worker, order.phase))
                arrays = ready if ready is not None else cut_rims(order, order.arrays)
                letters.append((order.worker, (("rims", order.phase, order.tile, order.source), arrays)))
            elif isinstance(order, SendItem):
                letters.append((order.worker, (order.key, order.vector)))
            elif isinstance(order, Save):
                threading.Thread(target=self._save, args=(order,), name="breakstep-save", daemon=True).start()
        if letters:
            self.post.put(letters)
        for result in results:
            if thread is None:
                self._hand_over_result(result)
            else:
                self._work_out(result, thread)

    def _save(self, order: Save) -> None:
        from breakstep.engine.checkpoint import save_tiles

        told = self.told
        try:
            assert told.save_to is not None
            digests = save_tiles(told.save_to, order.cycle, told.program, order.tiles, told.run)
        except Exception as error:
            self.stop(error)
            return
        values = {name: rows.tolist() for name, rows in order.values.items()}
        with self.lock:
            self._saved.append(Saved(order.cycle, digests, values))
            instructions = self._core().saved(order.cycle)
            self.changed.notify_all()
        self._obey(instructions)

    # ---- the post --------------------------------------------------------------------------------

    async def _send(self, worker: int, number: int, parcel: Parcel) -> None:
        told = self.told
        beside = self.beside(told.addresses[worker])
        if beside is not None:
            answer = await beside.receive(told.worker, number, copied(parcel))
        else:
            answer = await adapter.send(self.dask, told.addresses[worker], told.run, told.worker, number, parcel)
        if answer not in ANSWERS:
            raise ClusterError(f"worker {worker} at {told.addresses[worker]} has dropped the run", lost=True)

    def _unreachable(self, worker: int, error: Exception) -> None:
        if isinstance(error, OSError):
            address = self.told.addresses[worker]
            error = ClusterError(f"worker {worker} at {address} cannot be reached ({error})", lost=True)
        self.stop(error)

    def _moved(self, nbytes: int) -> None:
        core = self._core()
        with self.lock:
            core.in_flight(nbytes)
            if core.finished or (nbytes < 0 and self.told.options.memory_limit and core.ready_count):
                self.changed.notify_all()

    def _drain(self) -> None:
        """Wait until everything posted has been received: others may still need it."""
        while not self.stopped and not self.post.empty():
            time.sleep(DRAIN_SECONDS)

    # ---- what arrives ----------------------------------------------------------------------------

    async def receive(self, sender: int, number: int, parcel: Parcel) -> str:
        """A message from another worker; a repeated one is dropped."""
        arrived = time.perf_counter_ns()
        try:
            with self.lock:
                if number <= self._seen.get(sender, 0):
                    return "known"
                self._seen[sender] = number
                if self.stopped:
                    return "stopped"
                instructions = self._take_in(sender, parcel, arrived)
        except Exception as error:  # a reduction's own function or no convergence: not the sender's affair
            self.stop(error)
            return "stopped"
        self._obey(instructions)
        await self._push_back()
        return "taken"

    def _take_in(self, sender: int, parcel: Parcel, arrived: int) -> list[Instruction]:
        core = self._core()
        before = core.ready_count
        instructions: list[Instruction] = []
        for key, payload in parcel.items:
            instructions += core.arrive(key, payload)
        self.notes.arrivals(sender, parcel, arrived)
        if core.ready_count > before or core.finished:
            self.changed.notify_all()
        return instructions

    async def _push_back(self) -> None:
        """Answer late while too much is held here, so that the sender slows down; never for long."""
        limit, core = self.told.options.memory_limit, self._core()
        deadline = time.monotonic() + PUSH_BACK_SECONDS
        while limit and core.live_bytes > limit and not self.stopped and time.monotonic() < deadline:
            await asyncio.sleep(PUSH_BACK_SECONDS / 4)

    def _on_control(self, kind: str, phase: Phase, place: tuple[int, ...]) -> None:
        if kind == "combine" and place[1] == self._core().top:
            return  # a root: noted with the time that it took
        self.notes.control(kind, phase, place, time.perf_counter_ns())


def _raised(task: TaskState | None, error: BaseException) -> BaseException:
    if task is None:
        return error
    where = f"stage {task.phase.stage.name}, tile {task.tile}, cycle {task.phase.cycle}"
    return KernelError(f"{where}: the kernel raised {type(error).__name__}", tile=task.tile, cycle=task.phase.cycle)

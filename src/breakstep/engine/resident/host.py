"""One worker of a resident run: threads that work, senders that send, and the state machine between them.

The state machine is pure and guarded by one lock. Threads take tasks from it and report back; the worker's
event loop feeds in what arrives. Each destination has one queue and one sender: whatever has piled up while
the last message was under way goes next, so that messages grow with the traffic and no timer is needed.
Messages carry numbers; one that comes twice, after a retry, is dropped.
"""

from __future__ import annotations

import asyncio
import threading
import time
import traceback
from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from distributed import Worker
from distributed.comm.core import CommClosedError

from breakstep.engine.execute import Output, execute
from breakstep.engine.program import Program
from breakstep.engine.resident import adapter
from breakstep.engine.resident.core import Core, CoreOptions, Instruction, Save, SendItem, SendRims, TaskState
from breakstep.engine.resident.inputs import cut_rims, inputs_of, site_of
from breakstep.engine.resident.notes import Notebook
from breakstep.engine.resident.plan import WorkerPlan
from breakstep.engine.resident.wire import Item, Parcel, size_of
from breakstep.engine.run import RunOptions, unroller_for
from breakstep.errors import BreakstepError, ClusterError, KernelError
from breakstep.graph.unroll import Phase
from breakstep.steps.step import Array

SEND_ATTEMPTS = 4
RETRY_SECONDS = 0.05  # before the second attempt; doubled for each further one
PARCEL_BYTES = 16_000_000  # most bytes in one message; a larger item goes alone
LEASE_SECONDS = 120.0  # a worker that hears nothing from its driver for so long gives up
WAIT_SECONDS = 1.0  # how often an idle thread looks up


@dataclass(frozen=True)
class Assignment:
    """What one worker is told of a run.

    Attributes
    ----------
    run : str
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
    resume : Path or None
        Checkpoint to go on from.
    save_to : Path or None
        Folder for checkpoints.
    """

    run: str
    program: Program
    options: RunOptions
    worker: int
    addresses: tuple[str, ...]
    owners: tuple[int, ...]
    threads: int
    zero: int
    resume: Path | None = None
    save_to: Path | None = None


@dataclass
class _Outbox:
    """Items for one worker, and whether a sender is at work on them."""

    items: deque[tuple[Item, int]] = field(default_factory=deque)
    active: bool = False
    number: int = 0


class Host:
    """A worker's part in one run."""

    def __init__(self, assignment: Assignment, worker: Worker) -> None:
        self.told = assignment
        self.dask = worker
        self.lock = threading.Lock()
        self.changed = threading.Condition(self.lock)
        self.loop = adapter.event_loop(worker)
        self.outboxes = [_Outbox() for _ in assignment.addresses]
        self.core: Core | None = None
        self.notes = Notebook(assignment)
        self.error: BaseException | None = None
        self.stopped = False
        self.heard = time.monotonic()
        self.saved: list[tuple[int, dict[str, dict[int, str]], dict[str, list[list[float]]]]] = []
        self._early: list[tuple[int, Parcel, int]] = []
        self._senders: set[asyncio.Task[None]] = set()
        self._seen: dict[int, int] = {}  # sender -> number of its last message

    # ---- a run's life ----------------------------------------------------------------------------

    def prepare(self) -> None:
        """Make the state machine and the initial state; messages that came before are taken in."""
        from breakstep.engine.checkpoint import load_tiles, load_values

        told, program = self.told, self.told.program
        plan = WorkerPlan(program, told.owners, told.worker)
        unroller = unroller_for(program, told.options)
        if told.resume is None:
            initial, given = {tile: program.initial(tile) for tile in plan.tiles}, []
        else:
            initial = load_tiles(told.resume, program, plan.tiles)
            given = load_values(told.resume, program)
        options = CoreOptions(told.options.window, told.options.memory_limit, told.options.checkpoint_every)
        core = Core(plan, unroller, len(told.addresses), options, initial, given, self._on_control)
        core.on_phase = self.notes.phase
        with self.lock:
            self.core = core
            for sender, parcel, arrived in self._early:
                self._take_in(sender, parcel, arrived)
            self._early.clear()

    def work(self) -> dict[int, dict[str, Array]]:
        """Run to the end on this many threads; returns the final state of own tiles.

        Raises
        ------
        BreakstepError
            What ended the run early.
        """
        core = self._core()
        with self.lock:
            instructions = core.start()
        self._obey(instructions)
        others = [
            threading.Thread(target=self._thread, args=(number,), name=f"breakstep-{number}", daemon=True)
            for number in range(1, self.told.threads)
        ]
        for thread in others:
            thread.start()
        self._thread(0)
        for thread in others:
            thread.join()
        self._drain()
        if self.error is not None:
            raise self.error
        if self.stopped:
            raise ClusterError("the run was called off")
        return core.final()

    def stop(self, reason: BaseException | None = None) -> None:
        """End the run here as soon as running kernels return."""
        with self.lock:
            if reason is not None and self.error is None:
                self.error = reason
            self.stopped = True
            self.changed.notify_all()

    def status(self) -> dict[str, Any]:
        """What the driver wants to know from time to time; asking renews the lease."""
        self.heard = time.monotonic()
        with self.lock:
            saved, self.saved = self.saved, []
            done = self.core.cycles_done if self.core is not None else 0
            held = (self.core.live_bytes, self.core.peak_bytes) if self.core is not None else (0, 0)
        return {"cycles": done, "saved": saved, "bytes": held, "stopped": self.stopped}

    # ---- threads ---------------------------------------------------------------------------------

    def _core(self) -> Core:
        assert self.core is not None
        return self.core

    def _thread(self, number: int) -> None:
        self.notes.begin_thread(number)
        try:
            while (task := self._next()) is not None:
                self._run(task, number)
        except BaseException as error:  # whatever it is, the other threads and the driver must hear of it
            self.stop(error)

    def _next(self) -> TaskState | None:
        core = self._core()
        with self.lock:
            while not self.stopped:
                task = core.take()
                if task is not None:
                    return task
                if core.finished:
                    self.changed.notify_all()
                    return None
                self.changed.wait(WAIT_SECONDS)
                if time.monotonic() - self.heard > LEASE_SECONDS:
                    self.stopped = True
        return None

    def _run(self, task: TaskState, thread: int) -> None:
        core = self._core()
        start = time.perf_counter_ns()
        output = self._execute(core, task)
        with self.lock:
            owed = core.owed(task)
        began = self.notes.watch()
        rims = {(o.worker, o.phase): cut_rims(o, output.fields) for o in owed}
        end = self.notes.task(task, thread, start, output, began if rims else None)
        with self.lock:
            core.measured(task, end - start)
            before = core.ready_count
            instructions = core.finish(task, output.fields, output.partials, new=not output.skipped)
            self._wake(core, before)
        self._obey(instructions, rims)

    def _execute(self, core: Core, task: TaskState) -> Output:
        try:
            return execute(core.program, site_of(task), inputs_of(core, task))
        except BreakstepError:
            raise
        except Exception as error:
            where = f"stage {task.phase.stage.name}, tile {task.tile}, cycle {task.phase.cycle}"
            raise KernelError(
                f"{where}: the kernel raised {type(error).__name__}: {error}",
                traceback="".join(traceback.format_exception(error)),
            ) from error

    def _wake(self, core: Core, before: int) -> None:
        """Wake idle threads when there is more for them than the caller will take itself."""
        if core.finished or core.ready_count > max(before, 1):
            self.changed.notify_all()

    # ---- what the state machine asks for ---------------------------------------------------------

    def _obey(
        self, instructions: Sequence[Instruction], rims: dict[tuple[int, int], Any] | None = None
    ) -> None:
        kicked: set[int] = set()
        for order in instructions:
            if isinstance(order, SendRims):
                ready = (rims or {}).get((order.worker, order.phase))
                arrays = ready if ready is not None else cut_rims(order, order.arrays)
                self._post(order.worker, (("rims", order.phase, order.tile, order.source), arrays), kicked)
            elif isinstance(order, SendItem):
                self._post(order.worker, (order.key, order.vector), kicked)
            else:
                threading.Thread(target=self._save, args=(order,), daemon=True).start()
        for worker in kicked:
            self.loop.call_soon_threadsafe(self._start_sender, worker)

    def _post(self, worker: int, item: Item, kicked: set[int]) -> None:
        box = self.outboxes[worker]
        nbytes = sum(size_of(item[1]).values())
        with self.lock:
            box.items.append((item, nbytes))
            self._core().in_flight(nbytes)
            if not box.active:
                box.active = True
                kicked.add(worker)

    def _start_sender(self, worker: int) -> None:
        task = self.loop.create_task(self._send(worker))
        self._senders.add(task)
        task.add_done_callback(self._senders.discard)

    async def _send(self, worker: int) -> None:
        """Send whatever has piled up, one message at a time."""
        box = self.outboxes[worker]
        while True:
            with self.lock:
                batch, nbytes = _batch(box.items)
                if not batch or self.stopped:
                    box.active = False
                    return
                box.number += 1
                number = box.number
            try:
                await self._deliver(worker, number, Parcel(batch))
            except (OSError, CommClosedError) as error:
                self.stop(
                    ClusterError(
                        f"worker {worker} at {self.told.addresses[worker]} cannot be reached ({error})"
                    )
                )
                return
            with self.lock:
                self._core().in_flight(-nbytes)
                if self._core().finished:
                    self.changed.notify_all()

    async def _deliver(self, worker: int, number: int, parcel: Parcel) -> None:
        told = self.told
        for attempt in range(SEND_ATTEMPTS):
            try:
                await adapter.send(self.dask, told.addresses[worker], told.run, told.worker, number, parcel)
                return
            except (OSError, CommClosedError):
                if attempt + 1 == SEND_ATTEMPTS or self.stopped:
                    raise
                await asyncio.sleep(RETRY_SECONDS * 2**attempt)

    def _drain(self) -> None:
        """Wait until everything posted has been received: others may still need it."""
        while not self.stopped:
            with self.lock:
                if not any(box.items or box.active for box in self.outboxes):
                    return
            time.sleep(0.0005)

    def _save(self, order: Save) -> None:
        from breakstep.engine.checkpoint import save_tiles

        try:
            assert self.told.save_to is not None
            digests = save_tiles(self.told.save_to, order.cycle, self.told.program, order.tiles)
        except BaseException as error:
            self.stop(error)
            return
        with self.lock:
            self.saved.append((order.cycle, digests, {n: v.tolist() for n, v in order.values.items()}))
            instructions = self._core().saved(order.cycle)
            self.changed.notify_all()
        self._obey(instructions)

    # ---- what arrives ----------------------------------------------------------------------------

    async def receive(self, sender: int, number: int, parcel: Parcel) -> str:
        """A message from another worker; a repeated one is dropped."""
        arrived = time.perf_counter_ns()
        with self.lock:
            if number <= self._seen.get(sender, 0):
                return "known"
            self._seen[sender] = number
            if self.core is None:
                self._early.append((sender, parcel, arrived))
                return "early"
            instructions = self._take_in(sender, parcel, arrived)
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
        """Answer late while too much is held here, so that senders slow down; never for long."""
        limit, core = self.told.options.memory_limit, self._core()
        for _ in range(20):
            if not limit or core.live_bytes <= limit or self.stopped:
                return
            await asyncio.sleep(0.005)

    def _on_control(self, kind: str, phase: Phase, place: tuple[int, ...]) -> None:
        self.notes.control(kind, phase, place, time.perf_counter_ns())


def _batch(items: deque[tuple[Item, int]]) -> tuple[list[Item], int]:
    """As many items as one message may hold."""
    batch: list[Item] = []
    total = 0
    while items and (not batch or total + items[0][1] <= PARCEL_BYTES):
        item, nbytes = items.popleft()
        batch.append(item)
        total += nbytes
    return batch, total

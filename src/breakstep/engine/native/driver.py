"""The client's side of the native dispatch: phases become batches of Dask tasks, a window of cycles ahead.

Dask is used through its public interface alone: graphs go in with ``Client.get(..., sync=False)``, workers
and priorities by ``dask.annotate``. A batch names tasks of earlier batches by key; futures of phases that
may still be read keep those alive.
"""

from __future__ import annotations

import time
import uuid
from collections.abc import Callable
from concurrent.futures import CancelledError
from dataclasses import dataclass
from typing import Any

import dask
from dask._task_spec import Task as DaskTask
from distributed import Client, Future, KilledWorker, wait

from breakstep.engine.clocks import ClockReading, read_clocks
from breakstep.engine.native import payload as wire
from breakstep.engine.native import worker as remote
from breakstep.engine.native.payload import Arrival, Payload
from breakstep.engine.native.translate import Translation
from breakstep.engine.overdue import Overseer, now
from breakstep.engine.placement import owners
from breakstep.engine.program import Program
from breakstep.engine.recording import record_edges
from breakstep.engine.run import Progress, RunOptions, RunResult, unroller_for
from breakstep.engine.warm import is_ours, lost_in_warm_up, warm_up
from breakstep.engine.workers import known_workers, present_workers, require_present, run_on
from breakstep.errors import BreakstepError, ClusterError, OverdueError
from breakstep.graph.tasks import ANYWHERE, Kind, Task, TaskGraph
from breakstep.graph.unroll import INITIAL, Need, Phase
from breakstep.profile.record import RunRecord
from breakstep.steps.step import Array

POLL_SECONDS = 2.0  # how often a wait looks whether all workers are still there
BATCH_TASKS = 256  # a batch costs the client about 2 ms, so it should hold many tasks


class NativeDispatch:
    """Runs programs on a Dask cluster.

    Parameters
    ----------
    client : distributed.Client
    workers : int, optional
        How many of the cluster's workers to use; all by default.
    """

    name = "native"

    def __init__(self, client: Client, workers: int | None = None) -> None:
        self.client = client
        self.addresses, self.threads = known_workers(client, workers)
        self.workers = len(self.addresses)
        self._warm: set[int] = set()

    def prepare(self, program: Program, overseer: Overseer | None = None) -> None:
        """Compile kernels once here, then load them on every worker.

        Raises
        ------
        ClusterError
            A worker has gone, or cannot load the program.
        OverdueError
            A kernel has not returned within the overseer's limit.
        """
        require_present(self.client, self.addresses)
        if id(program) not in self._warm:
            meanwhile = overseer.look_at_files if overseer is not None else None
            if is_ours(program) and (overseer is None or not overseer.limit):
                warm_up(program)
            else:  # here nothing could end a kernel that does not return, and one that crashes would end the driver
                self._load(program, self.addresses[:1], meanwhile)
            self._load(program, self.addresses, meanwhile)
            self._warm.add(id(program))

    def _load(self, program: Program, addresses: list[str], meanwhile: Callable[[], None] | None = None) -> None:
        try:
            run_on(self.client, addresses, warm_up, program, meanwhile=meanwhile)
        except OSError as error:
            raise lost_in_warm_up(error) from error
        except (ClusterError, OverdueError):
            raise
        except Exception as error:  # pickling and importing raise anything
            raise ClusterError(
                f"the workers cannot load the problem ({type(error).__name__}: {error}); what it holds must be"
                " picklable, and the modules of its functions importable on every worker"
            ) from error

    def run(self, program: Program, options: RunOptions, progress: Progress | None = None) -> RunResult:
        """Run a program; errors and interrupts end up in the result."""
        try:
            with Overseer(self.client, self.addresses, options.task_timeout) as overseer:
                self.prepare(program, overseer)
                clocks = read_clocks(self.client, self.addresses)
                with self.client.as_current():  # or waits would go to whichever client this process opened last
                    return _NativeRun(self, program, options, progress, overseer).run(clocks)
        except (ClusterError, OverdueError, OSError) as error:
            failure = _lost(error) if isinstance(error, OSError) else error
            return RunResult({}, {}, RunRecord(), 0.0, 0, failure=_without_frames(failure))


class _NativeRun:
    """One run's state on the client.

    ``futures`` holds what later batches may name: steps of live phases and of each cycle's last phase,
    roots of reductions and releases of barriers until their cycles are well past.
    """

    def __init__(
        self,
        dispatch: NativeDispatch,
        program: Program,
        options: RunOptions,
        progress: Progress | None,
        overseer: Overseer,
    ) -> None:
        self.overseer = overseer
        self.dispatch, self.program, self.options, self.progress = dispatch, program, options, progress
        self.client = dispatch.client
        self.name = uuid.uuid4().hex[:8]
        self.owners = owners(options.placement, program, dispatch.workers, options.costs)
        self.graph = TaskGraph(program.tiling, self.owners)
        self.unroller = unroller_for(program, options)
        self.barriers = program.template.stages_with_barrier(options.barriers)
        self.longest_lag = max((r.lag for r in program.problem.splitting.all_reductions()), default=0)
        self.translate = Translation(self.name, program, self.graph)
        self.result = RunResult({}, {}, RunRecord(), 0.0, 0)
        self.futures: dict[int, Future] = {}
        self.keepers: dict[int, int] = {}  # root or release -> its cycle
        self.last_steps: dict[int, range] = {}  # cycle -> step tasks of its last phase so far
        self.unread: set[int] = set()  # step tasks that no task sent so far depends on
        self.batch: list[Task] = []

    def run(self, clocks: list[ClockReading]) -> RunResult:
        """The whole run; what ends it early is noted in the result."""
        result = self.result
        zero = time.perf_counter_ns()
        try:
            self._begin(clocks, zero)
            self._drive()
            self._finish()
        except KeyboardInterrupt:
            result.interrupted = True
        except BreakstepError as error:
            result.failure = _without_frames(error)
        except (CancelledError, KilledWorker, OSError) as error:
            result.failure = _lost(error)
        result.seconds = (time.perf_counter_ns() - zero) / 1e9
        self.futures.clear()
        try:
            self._collect(clocks)
        except OSError as error:  # the record stays as it is
            result.failure = result.failure or _lost(error)
        return result

    def _begin(self, clocks: list[ClockReading], zero: int) -> None:
        """Tell the workers of the run, and have them make the initial state."""
        for number, (address, reading) in enumerate(zip(self.dispatch.addresses, clocks, strict=True)):
            told = (self.name, self.program, number, zero + reading.offset, self.options)
            self.client.run(remote.begin, *told, workers=[address])
        tiles = range(len(self.program.tiling))
        graph = {self.translate.key(-1 - t): self.translate.initial(t, max(self.owners[t], 0)) for t in tiles}
        where = {self.translate.key(-1 - t): self.owners[t] for t in tiles}
        futures = self._submit(graph, list(graph), where, dict.fromkeys(graph, 0))
        self.futures = {-1 - t: future for t, future in zip(tiles, futures, strict=True)}
        self._wait(futures)

    def _drive(self) -> None:
        phases = self.unroller.run()
        answer: list[Array] | None = None
        while True:
            try:
                event = phases.send(answer)
            except StopIteration:
                break
            if isinstance(event, Need):
                self._flush()
                roots = [self.futures[self.graph.root(i)] for i in event.instances]
                answer = [payload.arrays["value"] for payload in self._results(roots)]
            else:
                answer = None
                self._emit(event)
        self._flush()

    def _emit(self, phase: Phase) -> None:
        tasks = self.graph.expand(phase, barrier_after=phase.stage.index in self.barriers)
        for task in tasks:
            if task.release not in self.keepers:  # released in a cycle long completed: nothing holds it any more
                task.release = None
        self.batch += tasks
        self.last_steps[phase.cycle] = self.graph.step_tasks(phase.number)
        self.keepers.update({t.number: phase.cycle for t in tasks if t.kind is Kind.RELEASE})
        self.keepers.update({self.graph.root(making.instance): phase.cycle for making in phase.makes})
        while phase.cycle - self.result.cycles >= self.options.window:
            self._complete_cycle()  # only now, since the phase's sources may be live for its sake alone
        if len(self.batch) >= BATCH_TASKS:
            self._flush()

    def _complete_cycle(self) -> None:
        """Wait for the oldest cycle in flight."""
        self._flush()
        self._wait([self.futures[number] for number in self.last_steps.pop(self.result.cycles)])
        self.last_steps.pop(-1, None)
        self.result.cycles += 1
        if self.progress is not None:
            self.progress(self.result.cycles)

    def _flush(self) -> None:
        """Send the batch, and let go of what nothing will name again."""
        tasks, self.batch = self.batch, []
        if not tasks:
            return
        if self.options.record:
            record_edges(self.result.record, tasks)
        self.unread |= {task.number for task in tasks if task.kind is Kind.STEP}
        self.unread -= {producer for task in tasks for producer, _ in task.edges()}
        named = {self.translate.name(task): task for task in tasks}
        kept = [key for key, task in named.items() if task.kind is Kind.STEP or task.number in self.keepers]
        futures = self._submit(
            {key: self.translate.task(task) for key, task in named.items()},
            kept,
            {key: task.worker for key, task in named.items()},
            {key: self._priority(task) for key, task in named.items()},
        )
        self.futures.update({named[key].number: future for key, future in zip(kept, futures, strict=True)})
        self._let_go()

    def _let_go(self) -> None:
        live = self.unroller.live_phases(self.program.state_fields)
        wanted = {number for phase in live if phase for number in self.graph.step_tasks(phase)}
        if INITIAL in live:
            wanted |= {-1 - tile for tile in range(len(self.program.tiling))}
        for numbers in self.last_steps.values():
            wanted |= set(numbers)
        oldest = self.result.cycles - self.longest_lag - 2
        self.keepers = {number: cycle for number, cycle in self.keepers.items() if cycle >= oldest}
        wanted |= self.keepers.keys()
        self.graph.forget(live)
        self.graph.forget_control(self.unroller.live_instances(), self.unroller.barred)
        self.translate.forget(wanted)
        wanted |= self._unfinished(wanted)
        self.futures = {number: future for number, future in self.futures.items() if number in wanted}

    def _unfinished(self, wanted: set[int]) -> set[int]:
        """Unwanted step tasks that nothing depends on: Dask would leave them out unless we hold them."""
        self.unread &= self.futures.keys()
        done = {n for n in self.unread - wanted if self.futures[n].done()}
        for number in done:
            if self.futures[number].status != "finished":
                self.futures[number].result()
        self.unread -= done
        return self.unread

    def _priority(self, task: Task) -> int:
        """Program order; control, reductions and rims before the steps of their phase."""
        return -2 * task.phase.number + (0 if task.kind is Kind.STEP else 1)

    def _submit(
        self, graph: dict[str, DaskTask], keys: list[str], where: dict[str, int], priority: dict[str, int]
    ) -> list[Future]:
        addresses = self.dispatch.addresses
        free = ANYWHERE in where.values()
        pinned = {} if free else {"workers": LookUp({k: [addresses[w]] for k, w in where.items()})}
        with dask.annotate(priority=LookUp(priority), **pinned):
            futures: list[Future] = self.client.get(graph, keys, sync=False, workers=addresses if free else None)
        return futures

    def _finish(self) -> None:
        while self.result.cycles in self.last_steps:
            self._complete_cycle()
        self._wait(list(self.futures.values()))  # the last barrier and what nobody reads belong to the run too
        tiles = range(len(self.program.tiling))
        for name in self.program.state_fields:
            phase = self.unroller.latest(name)
            numbers = list(self.graph.step_tasks(phase)) if phase else [-1 - t for t in tiles]
            payloads = self._results([self.futures[n] for n in numbers])
            self.result.fields[name] = [payload.arrays[name] for payload in payloads]
        for name, instance in self.unroller.last_values().items():
            (payload,) = self._results([self.futures[self.graph.root(instance)]])
            self.result.values[name] = payload.arrays["value"]

    def _results(self, futures: list[Future]) -> list[Payload]:
        self._wait(futures)
        results: list[Payload] = self.client.gather(futures)
        return results

    def _wait(self, futures: list[Future]) -> None:
        """Wait for all; raise the first error among them, or ClusterError when a worker has gone."""
        limit = self.overseer.limit
        while not self.client.sync(_done_within, futures, min(POLL_SECONDS, limit or POLL_SECONDS)):
            require_present(self.client, self.dispatch.addresses)
            self.overseer.look()
        for future in futures:
            if future.status != "finished":
                future.result()

    def _answers(self, address: str) -> bool:
        """Whether a worker can still be asked, now that a kernel may be stuck there."""
        farewell = self.overseer.farewell(address)
        if farewell is None:
            return True
        try:
            run_on(self.client, [address], now, meanwhile=farewell)
        except OSError:
            return False
        return True

    def _collect(self, clocks: list[ClockReading]) -> None:
        """Bring in the workers' records; a cluster that is gone leaves what the client has."""
        wire.ARRIVALS.clear()  # results gathered here are not transfers between workers
        record = self.result.record
        present = present_workers(self.client) if self.client.status == "running" else {}
        addresses = [address for address in self.dispatch.addresses if address in present and self._answers(address)]
        after = read_clocks(self.client, addresses)
        cpu = {a: r.cpu for a, r in zip(addresses, after, strict=True)}
        self.result.notes = {
            "clock_residual_ns": [reading.residual for reading in clocks],
            "worker_cpu_ns": [
                cpu.get(a, before.cpu) - before.cpu for a, before in zip(self.dispatch.addresses, clocks, strict=True)
            ],
        }
        answers = self.client.run(remote.collect, self.name, self.dispatch.threads, workers=addresses)
        parts = [answers[address] for address in addresses]
        zeros = {part["worker"]: part["zero"] for part in parts}
        for part in parts:
            record.add_tables(part["tables"])
            for arrival in part["arrivals"]:
                if arrival.producer >= 0 and arrival.sender in zeros and arrival.sender != part["worker"]:
                    record.transfers.extend(_transfer_rows(arrival, part["worker"], zeros))


def _lost(error: Exception) -> ClusterError:
    return ClusterError(f"the Dask cluster lost part of the run ({error}); start the run again")


async def _done_within(futures: list[Future], seconds: float) -> bool:
    """Whether all futures are done in time; runs on the client's loop.

    A timeout that ``wait`` raises into the caller's thread stands in a ring of frames there, which would hold
    the futures, and so arrays on the workers, until the garbage collector comes by.
    """
    try:
        await wait(futures, timeout=seconds)
    except TimeoutError:
        return False
    return True


def _without_frames(error: BreakstepError) -> BreakstepError:
    """The error alone: the frames it came through hold futures, which would keep arrays on the workers."""
    return error.with_traceback(None)


def _transfer_rows(arrival: Arrival, receiver: int, zeros: dict[int, int]) -> list[tuple[Any, ...]]:
    """A row a field; the time of packing and unpacking is booked with the first."""
    rows = []
    for place, (name, size) in enumerate(arrival.sizes.items()):
        spent = (arrival.packed, arrival.unpacked) if place == 0 else (0, 0)
        moments = (arrival.sent - zeros[arrival.sender], arrival.arrived - zeros[receiver])
        rows.append((arrival.producer, name, arrival.sender, receiver, size, *spent, *moments))
    return rows


@dataclass(frozen=True)
class LookUp:
    """An annotation looked up by key; a class of its own so that it pickles small."""

    table: dict[str, Any]

    def __call__(self, key: str) -> Any:
        return self.table[key]

"""The client's side of a resident run: tell the workers, look in on them, complete checkpoints, start again.

The driver is not on the path of any task. It can be killed at any moment: the workers notice after a while
that nobody asks, and the last complete checkpoint is on disk.
"""

from __future__ import annotations

import time
import uuid
from collections.abc import Mapping
from concurrent.futures import CancelledError
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from distributed import Client, Future, KilledWorker, wait
from distributed.comm.core import CommClosedError

from breakstep.engine import checkpoint
from breakstep.engine.clocks import ClockReading, read_clocks
from breakstep.engine.placement import owners
from breakstep.engine.program import Program
from breakstep.engine.resident import remote
from breakstep.engine.resident.gather import gather_record
from breakstep.engine.resident.host import Assignment
from breakstep.engine.run import Progress, RunOptions, RunResult
from breakstep.engine.warm import warm_up
from breakstep.engine.workers import known_workers, present_workers
from breakstep.errors import BreakstepError, ClusterError
from breakstep.profile.record import RunRecord

POLL_SECONDS = 0.25  # between looks at the workers; each costs them about 1 ms
REPLACEMENT_SECONDS = 15.0  # how long to wait for a lost worker's replacement
RESTARTS = 40  # a machine that loses more workers than this in one run is not worth using


class ResidentDispatch:
    """Runs programs on the workers of a Dask cluster.

    Parameters
    ----------
    client : distributed.Client
    workers : int, optional
        How many of the cluster's workers to use; all by default.
    checkpoints : Path, optional
        Folder for checkpoints, on a file system that all workers see.
    resume : Path, optional
        Checkpoint to go on from.
    facts : mapping, optional
        What a checkpoint's manifest says was run.
    """

    name = "resident"

    def __init__(
        self,
        client: Client,
        workers: int | None = None,
        *,
        checkpoints: Path | None = None,
        resume: Path | None = None,
        facts: Mapping[str, Any] | None = None,
    ) -> None:
        self.client, self.checkpoints, self.resume = client, checkpoints, resume
        self.facts = dict(facts or {})
        self.addresses, self.threads = known_workers(client, workers)
        self.workers = len(self.addresses)
        self._warm: set[str] = set()
        self._program: Program | None = None

    def prepare(self, program: Program) -> None:
        """Compile kernels once here, then load them on every worker that has not yet."""
        if program is not self._program:
            warm_up(program)
            self._warm.clear()
            self._program = program
        cold = [address for address in self.addresses if address not in self._warm]
        if cold:
            self.client.run(warm_up, program, workers=cold)
            self._warm.update(cold)

    def run(self, program: Program, options: RunOptions, progress: Progress | None = None) -> RunResult:
        """Run a program; errors and interrupts end up in the result.

        With checkpoints, a run that loses a worker goes on from the last one, on the workers there are.
        """
        resume, restarts = self.resume, 0
        if self.checkpoints is not None:
            checkpoint.discard_partial(self.checkpoints)
        while True:
            self.prepare(program)
            result = _Attempt(self, program, options, progress, resume).run()
            lost = isinstance(result.failure, ClusterError)
            can_go_on = lost and options.checkpoint_every and self.checkpoints is not None
            if not can_go_on or restarts >= RESTARTS:
                result.notes["restarts"] = restarts
                return result
            restarts += 1
            assert self.checkpoints is not None
            checkpoint.discard_partial(self.checkpoints)
            done = checkpoint.checkpoints(self.checkpoints)
            resume = done[-1] if done else self.resume
            try:
                self._replace_workers()
            except ClusterError as error:
                result.failure = error
                return result

    def _replace_workers(self) -> None:
        """Wait a while for as many workers as before; go on with those there are."""
        wanted, deadline = self.workers, time.monotonic() + REPLACEMENT_SECONDS
        while True:
            try:
                self.addresses, self.threads = known_workers(self.client, None)
            except ClusterError:
                self.addresses = []
            if len(self.addresses) >= wanted or time.monotonic() > deadline:
                break
            time.sleep(0.2)
        if not self.addresses:
            raise ClusterError(
                "all workers are gone; resume the run from its last checkpoint on a new cluster"
            )
        self.addresses = self.addresses[:wanted]
        self.workers = len(self.addresses)


@dataclass
class _Reports:
    """What workers have said about the checkpoint of one cycle."""

    digests: dict[str, dict[int, str]] = field(default_factory=dict)
    values: dict[str, Any] = field(default_factory=dict)
    workers: int = 0


class _Attempt:
    """One start of a run on a fixed set of workers."""

    def __init__(
        self,
        dispatch: ResidentDispatch,
        program: Program,
        options: RunOptions,
        progress: Progress | None,
        resume: Path | None,
    ) -> None:
        self.dispatch, self.program, self.options, self.progress = dispatch, program, options, progress
        self.client, self.addresses = dispatch.client, dispatch.addresses
        self.resume = resume
        self.name = uuid.uuid4().hex[:8]
        self.owners = owners(options.placement, program, len(self.addresses), options.costs)
        self.result = RunResult({}, {}, RunRecord(), 0.0, 0)
        self.reports: dict[int, _Reports] = {}

    def run(self) -> RunResult:
        """The whole attempt; what ends it early is noted in the result."""
        result = self.result
        zero = time.perf_counter_ns()
        clocks: list[ClockReading] = []
        try:
            clocks = read_clocks(self.client, self.addresses)
            zero = time.perf_counter_ns()
            self._work(clocks, zero)
        except KeyboardInterrupt:
            result.interrupted = True
        except BreakstepError as error:
            result.failure = error
        except (CancelledError, KilledWorker, CommClosedError, OSError, TimeoutError) as error:
            result.failure = ClusterError(
                f"the Dask cluster lost part of the run ({error!r}); start the run again"
            )
        result.seconds = (time.perf_counter_ns() - zero) / 1e9
        self._collect(clocks)
        return result

    def _work(self, clocks: list[ClockReading], zero: int) -> None:
        start = 0 if self.resume is None else int(checkpoint.read_manifest(self.resume)["cycle"]) + 1
        options = self.options.starting_at(start)
        for number, (address, reading) in enumerate(zip(self.addresses, clocks, strict=True)):
            told = Assignment(
                run=self.name,
                program=self.program,
                options=options,
                worker=number,
                addresses=tuple(self.addresses),
                owners=tuple(self.owners),
                threads=self.dispatch.threads,
                zero=zero + reading.offset,
                resume=self.resume,
                save_to=self.dispatch.checkpoints,
            )
            self.client.run(remote.begin, told, workers=[address])
        self._wait(self._submit(remote.prepare, "prepare"))
        futures = self._submit(remote.work, "work")
        self._wait(futures)
        self._look_in(self.addresses)
        for payload in self.client.gather(futures):
            for (name, tile, _), array in payload.arrays.items():
                self.result.fields.setdefault(name, [array] * len(self.owners))[tile] = array

    def _submit(self, function: Any, what: str) -> list[Future]:
        """One pinned Dask task a worker."""
        return [
            self.client.submit(
                function,
                self.name,
                workers=[address],
                key=f"resident_{what}-{self.name}-{number}",
                pure=False,
            )
            for number, address in enumerate(self.addresses)
        ]

    def _wait(self, futures: list[Future]) -> None:
        """Until all are done; looks in on the workers meanwhile, and raises the first error."""
        pending = set(futures)
        while pending:
            try:
                pending = set(
                    wait(list(pending), timeout=POLL_SECONDS, return_when="FIRST_COMPLETED").not_done
                )
            except TimeoutError:
                pass
            failed = [future for future in futures if future.status in ("error", "cancelled", "lost")]
            if failed:
                self._raise(failed)
            if pending:
                present = present_workers(self.client)
                gone = [address for address in self.addresses if address not in present]
                if gone:
                    raise ClusterError(f"worker {', '.join(gone)} has gone and took its tiles with it")
                self._look_in(self.addresses)

    def _raise(self, failed: list[Future]) -> None:
        """The most telling error: one of physics before one of the cluster."""
        errors = [future.exception() if future.status == "error" else CancelledError() for future in failed]
        errors.sort(key=lambda error: isinstance(error, ClusterError | CancelledError))
        raise errors[0]

    def _look_in(self, addresses: list[str]) -> None:
        statuses = self.client.run(remote.status, self.name, workers=addresses, on_error="ignore")
        if len(statuses) < len(addresses):
            return
        done = min(status["cycles"] for status in statuses.values())
        if done > self.result.cycles:
            self.result.cycles = done
            if self.progress is not None:
                self.progress(done)
        for status in statuses.values():
            for cycle, digests, values in status["saved"]:
                self._report(cycle, digests, values)

    def _report(self, cycle: int, digests: dict[str, dict[int, str]], values: dict[str, Any]) -> None:
        report = self.reports.setdefault(cycle, _Reports())
        report.workers += 1
        report.values = values
        for name, tiles in digests.items():
            report.digests.setdefault(name, {}).update(tiles)
        if report.workers == len(self.addresses):
            del self.reports[cycle]
            root = self.dispatch.checkpoints
            assert root is not None
            checkpoint.complete(root, cycle, self.program, report.digests, values, {"scenario": {}, **self.dispatch.facts})

    def _collect(self, clocks: list[ClockReading]) -> None:
        """Stop what still runs and bring in the workers' records; from a lost worker there is none."""
        try:
            present = present_workers(self.client)
            alive = [address for address in self.addresses if address in present]
            self.client.run(remote.stop, self.name, workers=alive, on_error="ignore")
            after = dict(zip(alive, read_clocks(self.client, alive), strict=True))
            answers = self.client.run(remote.collect, self.name, workers=alive, on_error="ignore")
        except (OSError, TimeoutError, CommClosedError, ValueError):
            return
        parts = [answers[address] for address in alive if answers.get(address)]
        self.result.notes = {
            "clock_residual_ns": [reading.residual for reading in clocks],
            "worker_cpu_ns": [
                after[a].cpu - reading.cpu
                for a, reading in zip(self.addresses, clocks, strict=False)
                if a in after
            ],
            "worker_peak_bytes": [part["peak"] for part in parts],
        }
        if parts:
            whole = len(parts) == len(self.addresses) and self.result.failure is None
            self.result.cycles = min(part["cycles"] for part in parts)
            self.result.values = parts[0]["values"] if whole and not self.result.interrupted else {}
            if self.options.record:
                start = 0 if self.resume is None else int(checkpoint.read_manifest(self.resume)["cycle"]) + 1
                gather_record(
                    self.result.record, parts, self.program, self.options.starting_at(start), self.owners
                )

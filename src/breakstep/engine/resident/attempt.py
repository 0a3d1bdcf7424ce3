"""One start of a resident run on a fixed set of workers, seen from the client: tell, wait, look in, collect.

Knows nothing of starting again; says by ``details["lost"]`` of a ClusterError that this may help.
"""

from __future__ import annotations

import time
import uuid
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import CancelledError
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from distributed import Client, Future, KilledWorker, wait

from breakstep.engine import checkpoint
from breakstep.engine.clocks import ClockReading, drift, read_clocks
from breakstep.engine.overdue import Overseer
from breakstep.engine.placement import owners
from breakstep.engine.program import Program
from breakstep.engine.resident import remote
from breakstep.engine.resident.gather import gather_record
from breakstep.engine.resident.host import Assignment, Saved, Status
from breakstep.engine.run import Progress, RunOptions, RunResult
from breakstep.engine.workers import present_clients, present_workers, require_present, run_on
from breakstep.errors import BreakstepError, ClusterError, DeclarationError
from breakstep.graph.numbering import Numbering
from breakstep.graph.tasks import ANYWHERE
from breakstep.partition import busiest
from breakstep.profile.record import RunRecord

WORTH_MOVING = 1.05  # tiles change owner when the busiest worker would have 5 % less to do
POLL_SECONDS = 0.25  # between looks at the workers; each costs them about 1 ms
POLL_WORKER_SECONDS = 0.02  # the same for each worker, where there are many: looking costs 1 ms each here as well


@dataclass(frozen=True)
class Site:
    """Where and how an attempt runs.

    Attributes
    ----------
    client : distributed.Client
    addresses : tuple of str
        The workers, by number.
    threads : int
        Threads of each.
    lease : float
        A worker that hears nothing from here for so long gives up [s].
    checkpoints : Path or None
        Folder for checkpoints.
    resume : Path or None
        Checkpoint to go on from.
    facts : mapping
        What a checkpoint's manifest says was run.
    overseer : Overseer
        Looks whether kernels return.
    """

    client: Client
    addresses: tuple[str, ...]
    threads: int
    lease: float
    checkpoints: Path | None
    resume: Path | None
    facts: Mapping[str, Any]
    overseer: Overseer


@dataclass
class _Reports:
    """What workers have said about the checkpoint of one cycle."""

    digests: dict[str, dict[int, str]] = field(default_factory=dict)
    workers: int = 0


@dataclass
class Segment:
    """Some cycles of a run with fixed owners."""

    name: str
    options: RunOptions
    owners: tuple[int, ...]
    is_in: bool = False


class Attempt:
    """One start of a run."""

    def __init__(self, site: Site, program: Program, options: RunOptions, progress: Progress | None) -> None:
        self.site, self.program, self.progress = site, program, progress
        self.client, self.addresses = site.client, list(site.addresses)
        self.base = uuid.uuid4().hex[:8]
        self.result = RunResult({}, {}, RunRecord(), 0.0, 0)
        self.options, self.owners = options, owners(options.placement, program, len(self.addresses), options.costs)
        self.result.notes["owners"] = list(self.owners)
        self.segments: list[Segment] = []
        self.moves = 0
        self.peaks: list[int] = []
        barriers = program.template.stages_with_barrier(options.barriers)
        self.numbering = Numbering(len(self.owners), len(self.addresses), barriers)
        self.newest: list[Status] = []
        self.reports: dict[int, _Reports] = {}
        self.clocks: list[ClockReading] = []

    def run(self) -> RunResult:
        """The whole attempt; what ends it early is noted in the result."""
        result = self.result
        zero = time.perf_counter_ns()
        try:
            self._check()
            self.clocks = read_clocks(self.client, self.addresses)
            zero = time.perf_counter_ns()
            self._work(zero)
        except KeyboardInterrupt:
            result.interrupted = True
        except BreakstepError as error:
            result.failure = error
        except (KilledWorker, CancelledError, OSError) as error:
            result.failure = self._lost(error)
        except BaseException:
            self._collect()  # a defect of ours must not leave the workers at work
            raise
        result.seconds = (time.perf_counter_ns() - zero) / 1e9
        self._collect()
        if result.failure is not None:
            _drop_frames(result.failure)
        if result.failure is not None or result.interrupted:
            result.fields, result.values = {}, {}
        return result

    def _check(self) -> None:
        if ANYWHERE in self.owners:
            raise DeclarationError("the placement 'dask' needs the native dispatch: here each tile has its worker")
        if self.site.resume is not None:
            start = int(checkpoint.read_manifest(self.site.resume)["cycle"]) + 1
            self.options = self.options.starting_at(start)
            self.result.notes["resumed_from_cycle"] = start

    def _work(self, zero: int) -> None:
        """One segment; with shared placement, one for each window of cycles."""
        end, share = self.program.problem.cycles, self.options.placement == "shared"
        start = self.options.start
        while True:
            stop = min(start + self.options.window, end) if share else end
            self._segment(start, stop, zero)
            if stop >= end or self.result.cycles < stop:
                break
            self._share_anew()
            start = stop
        self._fetch()
        self._bring_in(self.segments[-1], self.addresses)

    def _segment(self, start: int, stop: int, zero: int) -> None:
        """Run some cycles; the segment before hands its state over, then its record."""
        earlier = self.segments[-1] if self.segments else None
        options = replace(self.options, start=start, stop=stop)
        self.segments.append(Segment(f"{self.base}-{len(self.segments)}", options, tuple(self.owners)))
        self._tell(zero, earlier)
        self._wait(self._submit(remote.prepare, "prepare"))
        if earlier is not None:
            self._bring_in(earlier, self.addresses)
        self._wait(self._submit(remote.work, "work"))
        self.newest = self._look_in()

    def _share_anew(self) -> None:
        """Owners by the costs measured in the newest segment, if that promises enough."""
        costs = [0.0] * len(self.owners)
        for status in self.newest:
            for tile, spent in status.costs.items():
                costs[tile] = float(spent)
        better = owners("balanced", self.program, len(self.addresses), costs)
        if busiest(better, costs) * WORTH_MOVING < busiest(self.owners, costs):
            self.moves += sum(old != new for old, new in zip(self.owners, better, strict=True))
            self.owners = better
            self.result.notes["owners"] = list(better)

    @property
    def name(self) -> str:
        """Name of the newest segment, under which workers know it."""
        return self.segments[-1].name if self.segments else self.base

    def _tell(self, zero: int, earlier: Segment | None) -> None:
        clients, segment = present_clients(self.client), self.segments[-1]
        for number, (address, reading) in enumerate(zip(self.addresses, self.clocks, strict=True)):
            told = Assignment(
                run=segment.name,
                client=self.client.id,
                program=self.program,
                options=segment.options,
                worker=number,
                addresses=tuple(self.addresses),
                owners=segment.owners,
                threads=self.site.threads,
                zero=zero + reading.offset,
                lease=self.site.lease,
                resume=self.site.resume if earlier is None else None,
                save_to=self.site.checkpoints,
                previous=None if earlier is None else earlier.name,
                previous_owners=() if earlier is None else earlier.owners,
            )
            run_on(self.client, [address], remote.begin, told, clients)

    def _submit(self, function: Callable[[str], Any], what: str) -> list[Future]:
        """One pinned Dask task a worker."""
        return [
            self.client.submit(
                function, self.name, workers=[address], key=f"resident_{what}-{self.name}-{number}", pure=False
            )
            for number, address in enumerate(self.addresses)
        ]

    # ---- while the workers work ------------------------------------------------------------------

    def _wait(self, futures: list[Future]) -> None:
        """Until all are done; looks in on the workers meanwhile, and raises the most telling error."""
        while pending := [future for future in futures if not future.done()]:
            self.client.sync(_some_done, pending, max(POLL_SECONDS, POLL_WORKER_SECONDS * len(self.addresses)))
            _raise_failed(futures)
            self._look_in()
            self.site.overseer.look()
        _raise_failed(futures)

    def _look_in(self) -> list[Status]:
        """Renew the lease, complete checkpoints, tell how far the run is; notices workers that have gone."""
        answers: dict[str, Status | None] = self._ask_all(remote.status)
        found = [status for status in answers.values() if status is not None]
        for status in found:
            for saved in status.saved:
                self._report(saved)
        if len(found) < len(self.addresses):
            raise ClusterError("a worker has restarted or has given the run up", lost=True)
        done = min(status.cycles for status in found)
        if done > self.result.cycles:
            self.result.cycles = done
            if self.progress is not None:
                self.progress(done)
        return found

    def _ask_all(self, function: Callable[..., Any]) -> dict[str, Any]:
        patience = self.site.overseer.patience()
        return run_on(self.client, self.addresses, function, self.name, meanwhile=patience)

    def _fetch(self) -> None:
        fields = self.result.fields
        for parcel in run_on(self.client, self.addresses, remote.final, self.name).values():
            if parcel is None:
                raise ClusterError("a worker has given the run up before its results were fetched", lost=True)
            for _, arrays in parcel.items:
                for (name, tile, _), array in arrays.items():
                    fields.setdefault(name, [array] * len(self.owners))[tile] = array

    def _report(self, saved: Saved) -> None:
        report = self.reports.setdefault(saved.cycle, _Reports())
        report.workers += 1
        for name, tiles in saved.digests.items():
            report.digests.setdefault(name, {}).update(tiles)
        if report.workers < len(self.addresses):
            return
        del self.reports[saved.cycle]
        root, facts = self.site.checkpoints, {"scenario": {}, **self.site.facts}
        assert root is not None
        checkpoint.complete(root, saved.cycle, self.program, report.digests, saved.values, facts, self.name)

    def _lost(self, error: Exception) -> ClusterError:
        """Dask cancels tasks also when what they ran on has gone."""
        if isinstance(error, CancelledError) and self.client.status == "running":
            try:
                require_present(self.client, self.addresses)
            except (ClusterError, OSError) as found:
                error = found
            else:
                return ClusterError("the run's tasks on the Dask cluster were cancelled from outside; start it again")
        return ClusterError(f"the Dask cluster lost part of the run ({error!r}); start the run again", lost=True)

    # ---- afterwards ------------------------------------------------------------------------------

    def _collect(self) -> None:
        """Stop what still runs and bring in the workers' records; from a lost worker there is none."""
        open_segments = [segment for segment in self.segments if not segment.is_in]
        alive = self._survivors(open_segments)
        for segment in open_segments:
            self._bring_in(segment, alive)
        self._note_clocks(alive)
        if self.options.placement == "shared":
            self.result.notes["tiles_moved"] = self.moves

    def _bring_in(self, segment: Segment, addresses: Sequence[str]) -> None:
        """A segment's record; its workers forget it."""
        segment.is_in = True
        answers = [self._ask(address, remote.collect, segment.name) for address in addresses]
        parts = [part for part in answers if part]
        peaks = [int(part["peak"]) for part in parts]
        if len(self.peaks) == len(peaks):
            peaks = [max(pair) for pair in zip(self.peaks, peaks, strict=True)]
        self.peaks = peaks
        self.result.notes["worker_peak_bytes"] = peaks
        if parts:
            self._take_over(segment, parts)
        if len(parts) < len(self.addresses) and self.result.failure is None and not self.result.interrupted:
            raise ClusterError("a worker has gone before its record was here", lost=True)

    def _survivors(self, segments: Sequence[Segment]) -> list[str]:
        """Workers that are there, after all of them have been told to stop."""
        if self.client.status != "running":
            return []
        try:
            present = present_workers(self.client)
            alive = [address for address in self.addresses if address in present]
        except OSError:
            return []
        for segment in segments:
            for address in alive:
                self._ask(address, remote.stop, segment.name)
        return [address for address in alive if address not in self.site.overseer.silent]

    def _ask(self, address: str, function: Callable[..., Any], *args: Any) -> Any:
        """One worker's answer; None if it goes meanwhile."""
        try:
            farewell = self.site.overseer.farewell(address)
            return run_on(self.client, [address], function, *args, meanwhile=farewell)[address]
        except (ClusterError, OSError):
            return None

    def _take_over(self, segment: Segment, parts: Sequence[dict[str, Any]]) -> None:
        result = self.result
        result.cycles = min(part["cycles"] for part in parts)
        result.values = parts[0]["values"]
        if self.options.record:
            gather_record(result.record, parts, self.program, segment.options, segment.owners, self.numbering)

    def _note_clocks(self, alive: Sequence[str]) -> None:
        """How well clocks were aligned throughout, and what each worker's process used; 0 of a lost one."""
        residuals, used = [], []
        for address, before in zip(self.addresses, self.clocks, strict=False):
            after = self._clock(address) if address in alive else None
            residuals.append(before.residual if after is None else drift(before, after))
            used.append(0 if after is None else after.cpu - before.cpu)
        self.result.notes["clock_residual_ns"] = residuals
        self.result.notes["worker_cpu_ns"] = used

    def _clock(self, address: str) -> ClockReading | None:
        try:
            return read_clocks(self.client, [address])[0]
        except (ClusterError, OSError):
            return None


async def _some_done(futures: list[Future], seconds: float) -> None:
    """Until one of them is done or time is up; runs on the client's loop, whose frames hold nothing afterwards."""
    try:
        await wait(futures, timeout=seconds, return_when="FIRST_COMPLETED")
    except TimeoutError:
        return


def _raise_failed(futures: list[Future]) -> None:
    """The most telling error: one of physics before one of the cluster."""
    failed = [future for future in futures if future.status in ("error", "cancelled", "lost")]
    errors = [future.exception() if future.status == "error" else CancelledError(future.status) for future in failed]
    errors.sort(key=lambda error: isinstance(error, ClusterError | CancelledError))
    if errors:
        raise errors[0]


def _drop_frames(error: BaseException) -> None:
    """The error alone: the frames it came through hold futures, which would keep arrays on the workers."""
    error.__context__ = error.__cause__ = None
    error.__traceback__ = None

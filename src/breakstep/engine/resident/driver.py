"""The client's side of a resident run: an attempt, and with checkpoints another when a worker is lost.

The driver is not on the path of any task. It can be killed at any moment: the workers notice after a while
that nobody asks, and the last complete checkpoint is on disk.
"""

from __future__ import annotations

import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from distributed import Client

from breakstep.engine import checkpoint
from breakstep.engine.overdue import Overseer
from breakstep.engine.program import Program
from breakstep.engine.resident.attempt import Attempt, Site
from breakstep.engine.resident.host import LEASE_SECONDS
from breakstep.engine.run import Progress, RunOptions, RunResult
from breakstep.engine.warm import is_ours, lost_in_warm_up, process, warm_up
from breakstep.engine.workers import known_workers, run_on
from breakstep.errors import ClusterError, OverdueError
from breakstep.profile.record import RunRecord

REPLACEMENT_SECONDS = 15.0  # how long to wait for a lost worker's replacement
REPLACEMENT_LOOK_SECONDS = 0.2
FRUITLESS_STARTS = 5  # in a row, without a new checkpoint: something is wrong that starting again does not mend


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
    lease : float
        A worker that hears nothing from here for so long gives up [s].
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
        lease: float = LEASE_SECONDS,
    ) -> None:
        self.client, self.checkpoints, self.resume, self.lease = client, checkpoints, resume, lease
        self.facts = dict(facts or {})
        self.addresses, self.threads = known_workers(client, workers)
        self.workers = len(self.addresses)
        self._warm: set[str] = set()
        self._program: Program | None = None

    def prepare(self, program: Program, overseer: Overseer | None = None) -> None:
        """Compile kernels once here, then load them in every process of workers that has not yet.

        Raises
        ------
        ClusterError
            A worker has gone (``details["lost"]``), or cannot load the program.
        OverdueError
            A kernel has not returned within the overseer's limit.
        """
        # Not here with a limit, for nothing could end a kernel that does not return; nor a user's, which may crash.
        here = is_ours(program) and (overseer is None or not overseer.limit)
        if program is not self._program:
            if here:
                warm_up(program)
            self._warm.clear()
            self._program = program
        cold = [address for address in self.addresses if address not in self._warm]
        if cold:
            if not here:
                self._load(program, cold[:1], overseer)
            self._load(program, cold, overseer)
            self._warm.update(cold)

    def _load(self, program: Program, addresses: list[str], overseer: Overseer | None) -> None:
        meanwhile = overseer.look_at_files if overseer is not None else None
        try:
            apart = {found: address for address, found in run_on(self.client, addresses, process).items()}
            run_on(self.client, list(apart.values()), warm_up, program, meanwhile=meanwhile)
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
        """Run a program; errors and interrupts end up in the result.

        With checkpoints, a run that loses a worker goes on from the last one, on the workers there are. The
        record then begins there, and the notes say so: ``attempts``, and ``resumed_from_cycle``, the first cycle
        that is recorded.
        """
        resume, starts, fruitless = self.resume, 1, 0
        if self.checkpoints is not None:
            checkpoint.discard_partial(self.checkpoints)
        while True:
            result = self._attempt(program, options, progress, resume)
            result.notes |= {"restarts": starts - 1, "attempts": starts}
            if not (_is_loss(result) and options.checkpoint_every and self.checkpoints is not None):
                return result
            newest = _newest(self.checkpoints, self.resume)
            fruitless = fruitless + 1 if newest == resume else 0
            if fruitless > FRUITLESS_STARTS:
                return _given_up(result)
            resume, starts = newest, starts + 1
            try:
                self._replace_workers()
            except ClusterError as error:
                result.failure = error
                return result
            checkpoint.discard_partial(self.checkpoints)

    def _attempt(
        self, program: Program, options: RunOptions, progress: Progress | None, resume: Path | None
    ) -> RunResult:
        try:
            with Overseer(self.client, self.addresses, options.task_timeout) as overseer:
                self.prepare(program, overseer)
                told = (self.threads, self.lease, self.checkpoints, resume, self.facts)
                site = Site(self.client, tuple(self.addresses), *told, overseer)
                with self.client.as_current():  # or waits would go to whichever client this process opened last
                    return Attempt(site, program, options, progress).run()
        except (ClusterError, OverdueError) as error:
            return RunResult({}, {}, RunRecord(), 0.0, 0, failure=error.with_traceback(None))

    def _replace_workers(self) -> None:
        """Wait a while for as many workers as before; go on with those there are."""
        wanted, deadline = self.workers, time.monotonic() + REPLACEMENT_SECONDS
        found: list[str] = []
        while len(found) < wanted and time.monotonic() < deadline and self.client.status == "running":
            try:
                found, self.threads = known_workers(self.client, None)
            except (ClusterError, OSError):
                found = []
            time.sleep(0.0 if len(found) >= wanted else REPLACEMENT_LOOK_SECONDS)
        if not found:
            raise ClusterError("all workers are gone; resume the run from its last checkpoint on a new cluster")
        self.addresses = found[:wanted]
        self.workers = len(self.addresses)
        self._warm &= set(self.addresses)


def _is_loss(result: RunResult) -> bool:
    return isinstance(result.failure, ClusterError) and bool(result.failure.details.get("lost"))


def _newest(root: Path, otherwise: Path | None) -> Path | None:
    done = checkpoint.checkpoints(root)
    return done[-1] if done else otherwise


def _given_up(result: RunResult) -> RunResult:
    result.failure = ClusterError(
        f"{FRUITLESS_STARTS + 1} starts in a row ended before another checkpoint was complete;"
        f" the last: {result.failure}"
    )
    return result

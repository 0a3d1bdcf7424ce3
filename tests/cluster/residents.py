"""What the tests of both dispatches share: recorded runs, the serial answer, and what a run leaves behind."""

from __future__ import annotations

import asyncio
import itertools
import threading
import time
from dataclasses import dataclass
from pathlib import Path

from distributed import Client, Worker

from breakstep.engine.native import NativeDispatch
from breakstep.engine.program import Program
from breakstep.engine.recorded import run_and_record
from breakstep.engine.resident import ResidentDispatch
from breakstep.engine.run import Dispatch, RunOptions, RunResult
from breakstep.engine.serial import SerialDispatch
from breakstep.profile.run import Profile

DISPATCHES = {"native": NativeDispatch, "resident": ResidentDispatch}
CLOSURE = 1e-3  # the most that the accounts may miss of threads x time: above it the ledger is wrong by definition

_numbers = itertools.count()


@dataclass(frozen=True)
class Recorded:
    """A run and its profile."""

    result: RunResult
    profile: Profile

    @property
    def digest(self) -> str:
        """Digest of all final fields."""
        return str(self.profile.manifest["digest"])


def record(dispatch: Dispatch, program: Program, root: Path, **options: object) -> Recorded:
    """Run to the end and record; raises what ended the run early."""
    chosen = RunOptions(**options)  # type: ignore[arg-type]
    mode = "lockstep" if chosen.barriers else "tasked"
    folder = root / f"profile-{next(_numbers)}"
    result, profile = run_and_record(
        dispatch, program, chosen, folder, mode=mode, scenario={"name": "toy", "title": ""}
    )
    if result.failure is not None:
        raise result.failure
    assert not result.interrupted
    assert profile.ledger.closure_error <= CLOSURE
    return Recorded(result, profile)


def serial(program: Program, root: Path, barriers: tuple[str, ...] = ()) -> Recorded:
    """The reference."""
    return record(SerialDispatch(), program, root, barriers=barriers)


def _traces(dask_worker: Worker) -> dict[str, int]:
    """What of ours there is on a worker; runs in its event loop."""
    import breakstep
    from breakstep.engine.native import worker as native
    from breakstep.engine.resident import remote

    package = str(Path(breakstep.__file__).parent)  # not the name alone: a checkout's folder may be called so
    ours = [task for task in asyncio.all_tasks() if task.get_coro().cr_code.co_filename.startswith(package)]  # type: ignore[union-attr]
    return {
        "hosts": len(remote._HOSTS) + len(remote._WATCHES) + len(native._RUNS),
        "coroutines": len(ours),
        "threads": sum(thread.name.startswith("breakstep") for thread in threading.enumerate()),
        "handlers": sum(name.startswith("breakstep") for name in dask_worker.handlers),
        "held": len(dask_worker.data),
        "executing": len(dask_worker.state.executing) + len(dask_worker.state.long_running),
    }


CLEAN = {"hosts": 0, "coroutines": 0, "threads": 0, "held": 0, "executing": 0, "futures": 0, "tasks": 0}


def traces(client: Client, patience: float = 5.0) -> dict[str, int]:
    """What is left of ours on client, scheduler and all workers, once it has settled or patience is over.

    A worker keeps one handler an operation, whatever the number of runs: that much is not counted.
    """
    deadline = time.monotonic() + patience
    while True:
        found = dict.fromkeys(CLEAN, 0)
        for worker in client.run(_traces).values():
            handlers = worker.pop("handlers")
            assert handlers <= 3, (
                "a handler for parcels, one for tiles that move and one for the clock are all there may be"
            )
            for what, count in worker.items():
                found[what] += count
        found["futures"] = len(client.futures)
        found["tasks"] = int(client.run_on_scheduler(lambda dask_scheduler: len(dask_scheduler.tasks)))
        if found == CLEAN or time.monotonic() > deadline:
            return found
        time.sleep(0.05)

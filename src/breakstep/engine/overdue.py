"""A limit on how long a kernel may take, as the driver of a run on workers sees it.

Workers say what they are at; one that a kernel has silenced, because it holds the interpreter's lock, cannot: then
its file tells, if the worker is on this machine. A kernel cannot be stopped from within its process. The worker
processes that were started here end with the run; on a cluster of the user's they are named and left.
"""

from __future__ import annotations

import contextlib
import shutil
import tempfile
import time
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from types import TracebackType

from distributed import Client

from breakstep.engine.underway import CALLS, Underway, read_underway
from breakstep.engine.workers import run_on
from breakstep.errors import ClusterError, OverdueError

SILENCE_SECONDS = 10.0  # beyond the limit: a worker that says nothing for so long is taken to be in a kernel
FAREWELL_SECONDS = 3.0  # most that a worker may take for an answer once a kernel is overdue


def overdue(calls: Iterable[Underway], limit: float, worker: str = "") -> None:
    """Raise OverdueError for the first call that lasts longer than the limit [s]."""
    for call in calls:
        if call.seconds > limit:
            raise OverdueError(
                f"{call.where()}{worker and f', {worker}'}: the kernel has not returned for {call.seconds:.3g} s, and"
                f" {limit:g} s are allowed; correct the step, or allow more with --task-timeout",
                step=call.step,
                tile=call.tile,
                cycle=call.cycle,
                iteration=call.iteration,
            )


class Overseer:
    """Looks after the kernels of one run; without a limit it does nothing.

    Parameters
    ----------
    client : distributed.Client
    addresses : sequence of str
        Workers, by number.
    limit : float
        Seconds that a kernel may take; 0 for no limit.
    """

    def __init__(self, client: Client, addresses: Sequence[str], limit: float) -> None:
        self.client, self.addresses, self.limit = client, list(addresses), limit
        self._folder: Path | None = None
        self.silent: set[str] = set()
        self._is_over = False

    def __enter__(self) -> Overseer:
        if self.limit:
            self._folder = Path(tempfile.mkdtemp(prefix="breakstep-"))
            try:
                self._tell_workers()
            except BaseException:
                shutil.rmtree(self._folder, ignore_errors=True)
                raise
        return self

    def _tell_workers(self) -> None:
        try:
            for number, address in enumerate(self.addresses):
                self._file(number).touch()
                run_on(self.client, [address], keep, str(self._file(number)))
        except OSError as error:
            raise ClusterError(f"a worker was lost before the run began ({error!r})", lost=True) from error

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        if self._folder is None:
            return
        shutil.rmtree(self._folder, ignore_errors=True)
        if not self._is_over and self.client.status == "running":
            with contextlib.suppress(OSError, ClusterError):  # workers that have gone remember nothing
                run_on(self.client, self.addresses, forget)

    def _file(self, number: int) -> Path:
        assert self._folder is not None
        return self._folder / f"worker-{number}"

    def _worker(self, number: int) -> str:
        return f"worker {number} at {self.addresses[number]}"

    def look(self) -> None:
        """Ask all workers.

        Raises
        ------
        OverdueError, ClusterError
        """
        if not self.limit:
            return
        answers = run_on(self.client, self.addresses, now, meanwhile=self.patience())
        for number, address in enumerate(self.addresses):
            self._judge(answers[address], number)

    def _judge(self, calls: list[Underway], number: int) -> None:
        try:
            overdue(calls, self.limit, self._worker(number))
        except OverdueError as error:
            self._is_over = True
            error.details.update(worker=number, address=self.addresses[number])
            raise

    def look_at_files(self) -> None:
        """See what workers of this machine have written; those elsewhere have no such file."""
        if self.limit:
            for number in range(len(self.addresses)):
                self._judge(read_underway(self._file(number)), number)

    def patience(self) -> Callable[[], None]:
        """What to do while an answer is awaited: look at files; after a long silence, give up."""
        deadline = time.monotonic() + self.limit + SILENCE_SECONDS

        def meanwhile() -> None:
            self.look_at_files()
            if self.limit and time.monotonic() > deadline:
                self._is_over = True
                raise OverdueError(
                    f"not all workers have answered for {self.limit + SILENCE_SECONDS:g} s: a kernel that holds the"
                    " interpreter's lock keeps one of them from saying where; let it release the lock, or correct it"
                )

        return meanwhile

    def farewell(self, address: str) -> Callable[[], None] | None:
        """The same once a kernel is overdue: a worker that does not answer soon is not asked again."""
        if not self._is_over:
            return None
        deadline = time.monotonic() + FAREWELL_SECONDS

        def meanwhile() -> None:
            if time.monotonic() > deadline:
                self.silent.add(address)
                raise OSError(f"{address} does not answer")

        return meanwhile


def keep(file: str) -> None:
    """Have a worker keep track of its calls."""
    CALLS.keep(file)


def forget() -> None:
    """Have a worker keep track no more."""
    CALLS.forget()


def now() -> list[Underway]:
    """What a worker is at."""
    return CALLS.now()

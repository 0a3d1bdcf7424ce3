"""What can befall a run, made to happen on purpose: workers killed at random moments, halted, cut off.

Moments are drawn from a seeded generator; what they hit depends on the machine, and must not matter.
"""

from __future__ import annotations

import os
import random
import signal
import threading
from dataclasses import replace
from types import TracebackType

from distributed import Client

from breakstep.engine.program import Program
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import Item, Splitting
from breakstep.steps.step import Step
from tests.toys import Delayed, Toy

PLANE = Toy((12, 8), cycles=30, dt_lag=1, residual_lag=1)
TILE = (3, 4)


def lasting(toy: Toy = PLANE, seconds: float = 0.01) -> Problem:
    """The toy with one kernel that also sleeps, so that a run lasts; its answer is the toy's."""
    problem = toy.problem()
    orders = tuple(tuple(_slowed(item, seconds) for item in order) for order in problem.splitting.orders)
    return replace(problem, splitting=Splitting(orders, problem.splitting.reductions))


def _slowed(item: Item, seconds: float) -> Item:
    if isinstance(item, Step) and item.name == "smooth":
        return replace(item, kernel=Delayed(item.kernel, seconds))
    return item


def lasting_program(toy: Toy = PLANE, seconds: float = 0.01) -> Program:
    """Eight tiles of it."""
    return Program(lasting(toy, seconds), TILE)


def pids(client: Client) -> list[int]:
    """Processes of a local cluster's workers that are up, as the nannies know them: the workers need not answer.

    Dask does not replace a worker that dies while it starts.
    """
    nannies = list(client.cluster.workers.values())
    return [nanny.pid for nanny in nannies if nanny.pid and nanny.status.name == nanny.process.status.name == "running"]


class Killer:
    """Kills a random worker at random moments for as long as the context lasts.

    Parameters
    ----------
    client : distributed.Client
        Of a local cluster.
    seed : int
    shortest, longest : float
        Seconds from one kill to the next are drawn between these.
    most : int
        Kills at most.
    """

    def __init__(self, client: Client, seed: int, shortest: float, longest: float, most: int) -> None:
        self.client, self.random = client, random.Random(seed)
        self.shortest, self.longest, self.most = shortest, longest, most
        self.kills = 0
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._run, name="killer", daemon=True)

    def __enter__(self) -> Killer:
        self._thread.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, frames: TracebackType | None
    ) -> None:
        self._over.set()
        self._thread.join()

    def _run(self) -> None:
        while self.kills < self.most and not self._over.wait(self.random.uniform(self.shortest, self.longest)):
            alive = pids(self.client)
            if not alive:
                continue
            try:
                os.kill(self.random.choice(alive), signal.SIGKILL)
            except ProcessLookupError:
                continue
            self.kills += 1

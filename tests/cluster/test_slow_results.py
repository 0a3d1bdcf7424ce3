"""A reduction whose own function takes long: work of a thread, in the reduction's name, in nobody's way."""

from __future__ import annotations

import time
from dataclasses import dataclass, replace
from pathlib import Path

import pytest
from distributed import Client

from breakstep.engine.program import Program
from breakstep.engine.resident import ResidentDispatch
from breakstep.engine.run import RunOptions
from breakstep.errors import KernelError
from breakstep.steps.splitting import lie
from breakstep.steps.step import Array
from tests.cluster.residents import CLEAN, record, serial, traces
from tests.toys import Toy, dt_reduction, next_step

pytestmark = pytest.mark.cluster

SECONDS = 0.06
CYCLES = 6


@dataclass(frozen=True)
class Ponder:
    """The toy's next time step, after some thought; or an error instead."""

    seconds: float = SECONDS
    fails: bool = False

    def __call__(self, combined: Array, previous: Array | None) -> Array:
        end = time.thread_time() + self.seconds  # at work: asleep it would not count as computing
        while time.thread_time() < end:
            pass
        if self.fails and previous is not None:
            raise LookupError("no such time step")
        return next_step(combined, previous)


def pondering(fails: bool = False) -> Program:
    """Four tiles in a line, whose time step takes far longer than all else."""
    toy = Toy((12,), repeats=False, cycles=CYCLES)
    clock = replace(dt_reduction(), finish=Ponder(fails=fails))
    return Program(replace(toy.problem(), splitting=lie(toy.steps(), [clock])), (3,))


def test_the_time_is_booked_as_the_reduction_s(client: Client, tmp_path: Path) -> None:
    """One worker computes, three wait for its reduction; before each cycle and behind the last."""
    program = pondering()
    found = record(ResidentDispatch(client), program, tmp_path)
    assert found.digest == serial(program, tmp_path).digest
    tasks = found.profile.tasks.set_index("task")
    inside = found.profile.intervals[found.profile.intervals["task"].isin(tasks.index[tasks["kind"] == "combine"])]
    assert set(inside["what"]) == {"kernel"}
    assert set(inside["step"]) == {"dt"}
    # Of the seven results the first may fall into the event loop of a worker whose only thread is still busy.
    assert (inside["end_ns"] - inside["start_ns"]).sum() / 1e9 >= (CYCLES - 1) * SECONDS
    accounts = found.profile.ledger.accounts_seconds
    assert accounts["compute"] >= (CYCLES - 1) * SECONDS
    assert accounts["reduction"] >= 2 * (CYCLES - 1) * SECONDS  # of three who wait; the last result nobody waits for
    assert traces(client) == CLEAN


def test_an_error_in_it_ends_the_run_with_one_sentence(client: Client) -> None:
    failure = ResidentDispatch(client).run(pondering(fails=True), RunOptions()).failure
    assert isinstance(failure, KernelError)
    assert "LookupError: no such time step" in str(failure)
    assert "\n" not in str(failure)
    assert traces(client) == CLEAN

"""How resident runs end early: errors, interrupts, cancellations; what is left is a record and nothing else."""

from __future__ import annotations

import _thread
import threading
import time
import types
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from distributed import Client, Future

from breakstep.engine.program import Program
from breakstep.engine.recorded import run_and_record
from breakstep.engine.resident import ResidentDispatch, remote
from breakstep.engine.run import Progress, RunOptions, RunResult
from breakstep.engine.serial import SerialDispatch
from breakstep.errors import BreakstepError, ClusterError, ConvergenceError, KernelError
from breakstep.mesh.mesh import Mesh
from breakstep.mesh.tiling import Tile
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import Repeat, lie
from breakstep.steps.step import Array, Call, Read, Step
from tests.cluster.interrupted import slow_problem
from tests.cluster.residents import CLEAN, CLOSURE, record, serial, traces
from tests.toys import Arrays, Toy, dt_reduction, faulty_problem, smooth, waves

pytestmark = pytest.mark.cluster

LOCKSTEP = ("smooth", "broken", "dt")


def run(
    client: Client, program: Program, workers: int = 2, progress: Progress | None = None, **options: object
) -> RunResult:
    """A resident run, however it ends."""
    return ResidentDispatch(client, workers).run(program, RunOptions(**options), progress)  # type: ignore[arg-type]


def assert_serves_the_next_run(client: Client, root: Path) -> None:
    """Nothing is left, and another run on all workers gives the serial answer."""
    assert traces(client) == CLEAN
    program = Program(Toy((12,), repeats=False, cycles=1).problem(), (3,))
    assert record(ResidentDispatch(client), program, root).digest == serial(program, root).digest
    assert traces(client) == CLEAN


@pytest.mark.parametrize("fault", ["nan", "misshapen", "nothing", "extra", "divides", "mutates"])
@pytest.mark.parametrize("barriers", [(), LOCKSTEP], ids=["tasked", "lockstep"])
def test_an_error_in_a_kernel_is_the_serial_one(
    client: Client, tmp_path: Path, fault: str, barriers: tuple[str, ...]
) -> None:
    program = Program(faulty_problem(fault), (3,))
    result = run(client, program, barriers=barriers)
    expected = SerialDispatch().run(program, RunOptions(barriers=barriers)).failure
    assert type(result.failure) is type(expected) is KernelError
    assert str(result.failure) == str(expected)
    assert "step broken, tile 1, cycle 1" in str(result.failure)
    assert {k: result.failure.details[k] for k in ("tile", "cycle")} == {"tile": 1, "cycle": 1}
    assert result.fields == {}
    tasks = result.record.tasks.table().to_pandas()
    assert (tasks["cycle"] == 0).sum() >= 4  # one fused stage of four tiles before the fault
    assert not ((tasks["stage"] == "smooth") & (tasks["tile"] == 1) & (tasks["cycle"] == 2)).any()
    assert_serves_the_next_run(client, tmp_path)


def test_an_interrupt_inside_a_kernel_is_an_error_like_any_other(client: Client, tmp_path: Path) -> None:
    failure = run(client, Program(faulty_problem("interrupts"), (3,))).failure
    assert isinstance(failure, KernelError)
    assert "tile 1, cycle 1: the kernel raised KeyboardInterrupt" in str(failure)
    assert_serves_the_next_run(client, tmp_path)


@dataclass(frozen=True)
class Grudging:
    """A reduction's or repeat's function that gives up when it meets its ``limit``-th call in a process."""

    function: Callable[..., Any]
    limit: int
    calls: types.SimpleNamespace

    def __call__(self, *arguments: Any) -> Any:
        self.calls.made += 1
        if self.calls.made >= self.limit:
            raise ValueError("enough")
        return self.function(*arguments)


def grudging(function: Callable[..., Any], limit: int) -> Grudging:
    """Counts from 0; each worker unpickles a counter of its own."""
    return Grudging(function, limit, types.SimpleNamespace(made=0))


def with_grudge(where: str) -> Problem:
    """A toy one of whose functions beside the kernels raises after a few calls."""
    problem = Toy((12,), cycles=6).problem()
    splitting = problem.splitting
    (dt,) = splitting.reductions
    (repeat,) = [item for item in splitting.items() if isinstance(item, Repeat)]
    if where == "finish":
        return replace(problem, splitting=replace(splitting, reductions=(replace(dt, finish=grudging(dt.finish, 5)),)))
    if where == "ended":
        return replace(problem, ended=grudging(lambda value: False, 4))
    stubborn = replace(repeat, stop=grudging(repeat.stop, 40))
    items = [stubborn if item is repeat else item for item in splitting.items()]
    return replace(problem, splitting=replace(splitting, orders=(tuple(items),)))


@pytest.mark.parametrize(
    ("where", "sentence"),
    [("finish", "reduction dt"), ("stop", "stop of repeat solve"), ("ended", "ended before cycle 3")],
)
@pytest.mark.parametrize("workers", [1, 4])
def test_errors_in_other_functions_of_the_user_s(
    client: Client, tmp_path: Path, where: str, sentence: str, workers: int
) -> None:
    """They run wherever a message is taken in, in the event loop as well as in threads."""
    failure = run(client, Program(with_grudge(where), (3,)), workers).failure
    assert isinstance(failure, KernelError)
    assert sentence in str(failure)
    assert "the user's function raised ValueError: enough" in str(failure)
    assert_serves_the_next_run(client, tmp_path)


def no_state(tile: Tile, mesh: Mesh) -> dict[str, Array]:
    """An initial state that cannot be made for one tile."""
    if tile.origin[0] == 9:
        raise OSError("no such table")
    return waves(tile, mesh)


def test_an_error_in_the_initial_state(client: Client, tmp_path: Path) -> None:
    failure = run(client, Program(replace(Toy((12,)).problem(), initial=no_state), (3,))).failure
    assert isinstance(failure, KernelError)
    assert "the initial state of tile 3" in str(failure)
    assert_serves_the_next_run(client, tmp_path)


@pytest.mark.parametrize("workers", [1, 4])
def test_no_convergence_is_the_serial_error(client: Client, tmp_path: Path, workers: int) -> None:
    program = Program(Toy((12,), at_most=2).problem(), (3,))
    failure = run(client, program, workers).failure
    assert isinstance(failure, ConvergenceError)
    assert str(failure) == str(SerialDispatch().run(program, RunOptions()).failure)
    assert_serves_the_next_run(client, tmp_path)


@pytest.mark.parametrize("barriers", [(), ("slow", "smooth", "dt")], ids=["tasked", "some barriers"])
def test_an_interrupt_leaves_a_profile(client: Client, tmp_path: Path, barriers: tuple[str, ...]) -> None:
    """Ctrl-C while the driver waits, here at the moment when a cycle is told."""

    def press(cycle: int) -> None:
        if cycle >= 2:
            raise KeyboardInterrupt

    program = Program(slow_problem(cycles=500), (3,))
    result, profile = run_and_record(
        ResidentDispatch(client, 2),
        program,
        RunOptions(barriers=barriers),
        tmp_path / "profile",
        mode="some",
        scenario={"name": "toy", "title": ""},
        progress=press,
    )
    assert result.interrupted
    assert result.failure is None
    assert 2 <= result.cycles < 400
    assert result.fields == result.values == {}
    assert profile.manifest["status"] == "interrupted"
    assert set(range(result.cycles)) <= set(profile.tasks["cycle"])
    assert profile.ledger.closure_error <= CLOSURE
    assert_serves_the_next_run(client, tmp_path)


@dataclass(frozen=True)
class Sleeper:
    """Takes long on one tile."""

    seconds: float

    def __call__(self, arrays: Arrays, call: Call) -> dict[str, Array]:
        time.sleep(self.seconds if call.tile == 3 else 0.001)
        return smooth(arrays, call)


def test_an_interrupt_does_not_wait_for_a_long_kernel(client: Client, tmp_path: Path) -> None:
    """Its task is missing from the record, which is consistent all the same; the worker is free when it returns."""
    seconds = 3.0 * remote.END_SECONDS
    steps = [Step("slow", Sleeper(seconds), (Read("u", (1, 0, 0)),), ("u",))]
    program = Program(replace(Toy((12,), cycles=9).problem(), splitting=lie(steps, [dt_reduction()])), (3,))
    dispatch = ResidentDispatch(client, 2)
    dispatch.prepare(program)
    began = time.monotonic()
    timer = threading.Timer(1.0, _thread.interrupt_main)
    timer.start()
    result = dispatch.run(program, RunOptions())
    timer.join()
    assert time.monotonic() - began < seconds
    assert result.interrupted
    tasks = result.record.tasks.table().to_pandas()
    assert set(tasks.loc[tasks["cycle"] == 0, "tile"]) == {0, 1, 2}
    assert set(result.record.intervals.table().column("task").to_pylist()) <= set(tasks["task"])
    assert traces(client, patience=2 * seconds) == CLEAN
    assert_serves_the_next_run(client, tmp_path)


def test_cancelled_tasks_end_the_run_with_one_sentence(client: Client, tmp_path: Path) -> None:
    """As when somebody cancels all that a client has on the cluster."""

    def cancel(cycle: int) -> None:
        if cycle >= 2:
            client.cancel([Future(key, client) for key in list(client.futures)], force=True)

    result = run(client, Program(slow_problem(cycles=500), (3,)), progress=cancel)
    assert isinstance(result.failure, ClusterError)
    assert "the run's tasks on the Dask cluster were cancelled from outside" in str(result.failure)
    assert "\n" not in str(result.failure)
    assert len(result.record.tasks) > 0
    assert_serves_the_next_run(client, tmp_path)


def test_a_defect_of_ours_keeps_its_traceback_and_frees_the_workers(client: Client, tmp_path: Path) -> None:
    def stumble(cycle: int) -> None:
        raise LookupError("not foreseen")

    with pytest.raises(LookupError, match="not foreseen"):
        run(client, Program(slow_problem(cycles=500), (3,)), progress=stumble)
    assert_serves_the_next_run(client, tmp_path)


def test_a_failed_run_holds_nothing_on_the_workers(client: Client) -> None:
    """Neither through the error's frames nor through its causes, for as long as the error is kept."""
    failure = run(client, Program(faulty_problem("divides"), (3,))).failure
    assert isinstance(failure, BreakstepError)
    assert (failure.__traceback__, failure.__cause__, failure.__context__) == (None, None, None)
    assert "return 1 // (len(made) - 1)" in failure.details["traceback"]
    assert traces(client) == CLEAN


def test_functions_that_workers_cannot_load_are_told(client: Client, tmp_path: Path) -> None:
    lock = threading.Lock()
    step = Step("local", lambda arrays, call: {"u": arrays["u"] + lock.locked()}, (Read("u"),), ("u",))
    failure = run(client, Program(replace(Toy((12,)).problem(), splitting=lie([step])), (3,))).failure
    assert isinstance(failure, ClusterError)
    assert "the workers cannot load the problem" in str(failure)
    assert_serves_the_next_run(client, tmp_path)


def test_many_runs_leave_nothing_and_do_not_slow_down(client: Client) -> None:
    """Ratio of the last to the first ten of forty runs; 1.0 to 1.2 when nothing piles up.

    Each run that left a handler, a host or a task behind would add to what every later one goes through.
    """
    program = Program(Toy((12,), repeats=False, cycles=2).problem(), (3,))
    dispatch = ResidentDispatch(client)
    dispatch.run(program, RunOptions())
    seconds = [dispatch.run(program, RunOptions()).seconds for _ in range(40)]
    assert traces(client) == CLEAN
    assert np.median(seconds[-10:]) < 2.0 * np.median(seconds[:10])  # twice: the machine may be busy elsewhere

"""The native dispatch on real Dask workers: the serial answer to the bit, a whole record, nothing left behind."""

from __future__ import annotations

import gc
from dataclasses import dataclass, replace

import numpy as np
import pytest
from distributed import Client

from breakstep.engine import native
from breakstep.engine.cluster import local_cluster
from breakstep.engine.native import NativeDispatch, driver
from breakstep.engine.native import payload as wire
from breakstep.engine.native import worker as remote
from breakstep.engine.native.payload import Payload
from breakstep.engine.program import Program
from breakstep.engine.resident import ResidentDispatch
from breakstep.engine.run import RunOptions, RunResult, unroller_for, whole_field
from breakstep.engine.serial import SerialDispatch
from breakstep.errors import ClusterError, KernelError
from breakstep.graph.stages import parse_barriers
from breakstep.graph.tasks import TaskGraph
from breakstep.graph.unroll import Need
from breakstep.mesh.mesh import Edge
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import lie
from breakstep.steps.step import Array, Call, Read, Step
from tests.cluster.conftest import NOTHING, leftovers
from tests.cluster.interrupted import slow_problem
from tests.toys import Arrays, Faulty, Toy, dt_reduction, rising_problem, smooth

pytestmark = pytest.mark.cluster

LINE = Toy((16,), cycles=2)


@dataclass(frozen=True)
class Case:
    """One way to run one toy."""

    toy: Toy = LINE
    tile: tuple[int, ...] = (4,)
    barriers: str = "tasked"
    workers: int = 2
    placement: str = "blocks"
    fuse: bool = True
    window: int = 4


CASES = {
    "one worker": Case(workers=1),
    "lockstep": Case(barriers="lockstep"),
    "lockstep, lags": Case(replace(LINE, dt_lag=1, residual_lag=1), barriers="lockstep", workers=4),
    "tasked, lags": Case(replace(LINE, dt_lag=1, residual_lag=1, cycles=3), workers=4),
    "dt lag": Case(replace(LINE, dt_lag=1), workers=4, fuse=False),
    "residual lag": Case(replace(LINE, residual_lag=1, two_passes=True), barriers="solve"),
    "one barrier": Case(barriers="blur", workers=4),
    "two barriers": Case(replace(LINE, dt_lag=1), barriers="drift,solve", fuse=False),
    "dask places": Case(placement="dask", workers=4),
    "dask places lockstep": Case(replace(LINE, residual_lag=1), barriers="lockstep", placement="dask", fuse=False),
    "two orders": Case(replace(LINE, two_orders=True, edges=(Edge.FIXED,)), workers=4),
    "plane": Case(Toy((8, 6), cycles=1), tile=(4, 3)),
    "box": Case(
        Toy((6, 4, 3), (Edge.OUTFLOW, Edge.PERIODIC, Edge.REFLECTING), repeats=False, cycles=2), tile=(3, 2, 3)
    ),
    "longer than the window": Case(replace(LINE, repeats=False, cycles=7), window=2),
    "many tiles": Case(Toy((60,), repeats=False, cycles=6, dt_lag=1), tile=(3,), workers=4, barriers="grow"),
    "a barrier before the first cycle only": Case(Toy((60,), repeats=False, cycles=12), tile=(10,), barriers="dt"),
}


def run(client: Client, program: Program, workers: int = 2, **options: object) -> RunResult:
    """A native run that ends well."""
    result = NativeDispatch(client, workers).run(program, RunOptions(**options))  # type: ignore[arg-type]
    if result.failure is not None:
        raise result.failure
    return result


@pytest.mark.parametrize("name", CASES)
def test_native_equals_serial_to_the_bit(client: Client, name: str) -> None:
    case = CASES[name]
    program = Program(case.toy.problem(), case.tile, case.fuse)
    barriers = parse_barriers(program.template, case.barriers)
    expected = SerialDispatch().run(program, RunOptions(barriers=barriers))
    options = {"barriers": barriers, "placement": case.placement, "window": case.window}
    result = run(client, program, case.workers, **options)
    assert result.cycles == expected.cycles == case.toy.cycles
    assert not result.interrupted
    for field in program.state_fields:
        assert np.array_equal(whole_field(program, result.fields[field]), whole_field(program, expected.fields[field]))
    assert np.array_equal(result.values["dt"], expected.values["dt"])
    assert leftovers(client) == NOTHING


@pytest.mark.parametrize("lag", [1, 2])
@pytest.mark.parametrize("dispatch", [NativeDispatch, ResidentDispatch])
def test_a_residual_that_rises_again_within_its_lag(
    client: Client, dispatch: type[NativeDispatch] | type[ResidentDispatch], lag: int
) -> None:
    """Every dispatch lets a verdict stand, as the serial one does."""
    program = Program(rising_problem(lag), (3,))
    expected = SerialDispatch().run(program, RunOptions())
    result = dispatch(client, 2).run(program, RunOptions())
    assert result.failure is None
    for field in program.state_fields:
        assert np.array_equal(whole_field(program, result.fields[field]), whole_field(program, expected.fields[field]))


def emitted(program: Program, result: RunResult, owners: list[int], barriers: tuple[str, ...]) -> dict[str, int]:
    """How many tasks of each kind the graph has, from an unrolling that is told the recorded verdicts."""
    tasks = result.record.tasks.table().to_pandas()
    solving = tasks[(tasks["kind"] == "step") & (tasks["iteration"] >= 0) & ~tasks["skipped"]]
    iterations = solving.groupby("cycle", observed=True)["iteration"].max().to_dict()
    graph = TaskGraph(program.tiling, owners)
    where: dict[int, tuple[int, int]] = {}
    counts = dict.fromkeys(("step", "combine", "count", "release", "pack"), 0)
    events, answer = unroller_for(program, RunOptions(barriers=barriers)).run(), None
    while True:
        try:
            event = events.send(answer)
        except StopIteration:
            return counts
        answer = None
        if isinstance(event, Need):
            answer = [np.full((1, 1), float(where[i][1] < iterations[where[i][0]])) for i in event.instances]
            continue
        where.update({making.instance: (event.cycle, event.iteration) for making in event.makes})
        barrier = event.stage.index in program.template.stages_with_barrier(barriers)
        for task in graph.expand(event, barrier_after=barrier):
            counts[str(task.kind)] += 1


@pytest.mark.parametrize("barriers", ["tasked", "lockstep", "solve"])
def test_the_record_holds_every_task_of_the_graph_once(client: Client, barriers: str) -> None:
    """Also what nothing waits for: the last barrier, the last reduction, writes that nobody reads."""
    program = Program(LINE.problem(), (4,))
    chosen = parse_barriers(program.template, barriers)
    result = run(client, program, barriers=chosen)
    tasks = result.record.tasks.table().to_pandas()
    assert tasks["task"].is_unique
    kinds = tasks.groupby("kind", observed=False).size().to_dict()
    expected = emitted(program, result, [0, 0, 1, 1], chosen)
    assert {kind: kinds.get(kind, 0) for kind in expected} == expected
    edges = result.record.edges.table().to_pandas()
    assert set(edges["producer"]) | set(edges["consumer"]) <= set(tasks["task"])
    assert set(result.record.intervals.table().to_pandas()["task"]) <= set(tasks["task"])
    threads = {tuple(row.values()) for row in result.record.threads.table().to_pylist()}
    assert threads == {(0, 0), (1, 0)}


def test_two_runs_make_the_same_graph(client: Client) -> None:
    program = Program(LINE.problem(), (4,))
    first, second = (run(client, program, barriers=("blur",)).record for _ in range(2))
    assert first.edges.table().equals(second.edges.table())
    frames = [
        record.tasks.table().to_pandas().sort_values("task")[["task", "kind", "stage", "tile", "cycle", "iteration"]]
        for record in (first, second)
    ]
    assert frames[0].astype(str).to_numpy().tolist() == frames[1].astype(str).to_numpy().tolist()


def test_rims_travel_and_tiles_do_not(client: Client) -> None:
    """Four tiles on a ring, two workers: every halo read crosses twice each way."""
    step = Step("smooth", smooth, (Read("u", (1, 0, 0)),), ("u",))
    program = Program(replace(Toy((400,), cycles=3).problem(), splitting=lie([step])), (100,))
    moved = run(client, program).record.transfers.table().to_pandas()
    assert len(moved) == 3 * 4
    assert set(moved["field"]) == {"u"}
    assert moved["bytes"].sum() == 3 * 4 * 8  # one number a rim; a tile would be 800 bytes
    assert (moved["from_worker"] != moved["to_worker"]).all()
    assert (moved["arrived_ns"] >= moved["sent_ns"]).all()


def as_if_spilled() -> None:
    """What Dask does on a worker that runs out of memory: write a payload to disk, and read it back."""
    for name, state in remote._RUNS.items():
        payload = Payload(name, 0, state.recorder.worker, {"u": np.ones((1, 3, 1, 1))})
        wire._unpack(*wire._pack(payload))


def test_spilling_to_disk_is_no_transfer(client: Client) -> None:
    step = Step("smooth", smooth, (Read("u", (1, 0, 0)),), ("u",))
    program = Program(replace(Toy((12,), cycles=3).problem(), splitting=lie([step])), (3,))
    result = NativeDispatch(client, 2).run(program, RunOptions(), lambda _: client.run(as_if_spilled))
    moved = result.record.transfers.table().to_pandas()
    assert len(moved) == 3 * 4
    assert (moved["from_worker"] != moved["to_worker"]).all()


def test_runs_can_go_unrecorded_with_the_same_answer(client: Client) -> None:
    program = Program(LINE.problem(), (4,))
    silent, recorded = run(client, program, record=False), run(client, program)
    assert len(silent.record.tasks) == len(silent.record.edges) == 0
    for field, tiles in recorded.fields.items():
        assert all(np.array_equal(a, b) for a, b in zip(tiles, silent.fields[field], strict=True))


def test_traces_agree_with_the_serial_one(client: Client) -> None:
    """Checksums by step, tile, cycle and iteration; task numbers differ, since serial packs nothing."""
    program = Program(LINE.problem(), (4,))

    def trace(result: RunResult) -> set[tuple[object, ...]]:
        tasks = result.record.tasks.table().to_pandas().set_index("task")
        counters = result.record.counters.table().to_pandas()
        sums = counters[counters["counter"].astype(str).str.startswith("checksum:")]
        where = tasks.loc[sums["task"], ["tile", "cycle", "iteration"]].to_numpy().tolist()
        what = sums[["step", "counter", "value"]].astype(str).to_numpy().tolist()
        return {(*a, *b) for a, b in zip(where, what, strict=True)}

    expected = trace(SerialDispatch().run(program, RunOptions(trace=True)))
    assert trace(run(client, program, trace=True)) == expected
    assert len(expected) > 50


def test_several_threads_a_worker() -> None:
    program = Program(Toy((24,), cycles=2, dt_lag=1).problem(), (4,))
    expected = SerialDispatch().run(program, RunOptions())
    with local_cluster(2, threads=2) as client:
        dispatch = NativeDispatch(client)
        result = dispatch.run(program, RunOptions())
    assert dispatch.threads == 2
    assert result.failure is None
    for field, tiles in expected.fields.items():
        assert all(np.array_equal(a, b) for a, b in zip(tiles, result.fields[field], strict=True))
    threads = {tuple(row.values()) for row in result.record.threads.table().to_pylist()}
    assert threads == {(worker, thread) for worker in (0, 1) for thread in (0, 1)}


def unread_problem(last: Step) -> Problem:
    """``last`` overwrites ``w``, which nothing reads."""
    steps = [Step("smooth", smooth, (Read("u", (1, 0, 0)),), ("u",)), last, replace(last, name="again")]
    problem = Toy((12,), cycles=2).problem()
    return replace(problem, splitting=lie(steps, [dt_reduction()]))


@dataclass(frozen=True)
class Overwrite:
    """Makes ``w`` from ``u``; optionally fails at one tile and cycle."""

    fails: bool

    def __call__(self, arrays: Arrays, call: Call) -> dict[str, Array]:
        if self.fails and (call.step, call.tile, call.cycle) == ("last", 1, 0):
            raise ZeroDivisionError("on purpose")
        return {"w": np.concatenate([arrays["u"], arrays["u"]])}


def test_writes_that_nobody_reads_are_carried_out_all_the_same(client: Client) -> None:
    """A classical code does, so the accounts must; Dask drops a task that nothing asks for."""
    problem = unread_problem(Step("last", Overwrite(fails=False), (Read("u"),), ("w",)))
    program = Program(problem, (3,), fuse=False)
    tasks = run(client, program).record.tasks.table().to_pandas()
    assert (tasks["stage"] == "last").sum() == 4 * 2


def test_a_failure_in_a_write_that_nobody_reads_is_not_lost(client: Client) -> None:
    problem = unread_problem(Step("last", Overwrite(fails=True), (Read("u"),), ("w",)))
    with pytest.raises(KernelError, match="step last, tile 1, cycle 0: the user's function raised ZeroDivisionError"):
        run(client, Program(problem, (3,), fuse=False))
    assert leftovers(client) == NOTHING


def test_waiting_does_not_hold_what_is_let_go(client: Client, monkeypatch: pytest.MonkeyPatch) -> None:
    """Every look at the workers is a timeout inside; none may keep futures alive, whenever Python collects."""
    monkeypatch.setattr(driver, "POLL_SECONDS", 0.01)
    held: list[int] = []
    program = Program(slow_problem(cycles=8, seconds=0.02), (3,))
    gc.collect()
    gc.disable()
    try:
        result = NativeDispatch(client, 2).run(
            program, RunOptions(window=1), lambda cycle: held.append(len(client.futures))
        )
    finally:
        gc.enable()
    assert result.failure is None
    # Measured 15 to 22; when timeouts held what they had waited for, 43 and 4 more each cycle
    assert max(held) <= 30


def test_arrays_arrive_as_they_left(client: Client) -> None:
    """Aligned, contiguous and protected: kernels compiled for such arrays must not be compiled again."""
    source, target = sorted(client.scheduler_info(n_workers=-1)["workers"])[:2]
    for zones in (1, 3, 8):
        payload = client.submit(make_payload, zones, workers=[source], pure=False)
        assert client.submit(describe, payload, workers=[target], pure=False).result() == [
            ("u", (1, zones, 1, 1), True, True, False, float(zones)),
            (("w", 5, (0, -1, 1)), (2, zones, 1, 1), True, True, False, 4.0 * zones),
        ]
        partials = client.submit(partials_of, payload, workers=[target], pure=False).result()
        assert partials == {"dt": [1.0 / 3.0, float("inf")], "residual": None}


def make_payload(zones: int) -> Payload:
    """A step task's payload, with a packed rim thrown in."""
    arrays = {"u": np.ones((1, zones, 1, 1)), ("w", 5, (0, -1, 1)): np.full((2, zones, 1, 1), 2.0)}
    return Payload("run" * zones, 7, 0, arrays, {"dt": np.array([1.0 / 3.0, np.inf]), "residual": None})


def describe(payload: Payload) -> list[tuple[object, ...]]:
    """What came of the arrays."""
    return [
        (key, a.shape, a.flags.aligned, a.flags.c_contiguous, a.flags.writeable, float(a.sum()))
        for key, a in payload.arrays.items()
    ]


def partials_of(payload: Payload) -> dict[str, list[float] | None]:
    """What came of the contributions."""
    return {name: None if v is None else v.tolist() for name, v in payload.partials.items()}


def test_more_workers_than_there_are_cannot_be_used(client: Client) -> None:
    with pytest.raises(ClusterError, match="9 workers were asked for, but the Dask cluster has 4"):
        NativeDispatch(client, 9)
    assert NativeDispatch(client).workers == 4
    assert native.__all__ == ["NativeDispatch"]


def test_faults_do_not_depend_on_who_finds_them(client: Client) -> None:
    """The message of a failed run is the serial one."""
    step = Step("broken", Faulty("nan"), (Read("u"),), ("u",))  # type: ignore[arg-type]
    program = Program(replace(Toy((12,)).problem(), splitting=lie([step])), (3,))
    failures = [d.run(program, RunOptions()).failure for d in (SerialDispatch(), NativeDispatch(client, 2))]
    assert str(failures[0]) == str(failures[1])
    assert failures[0] is not None

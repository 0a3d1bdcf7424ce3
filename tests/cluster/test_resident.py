"""Both dispatches on real Dask workers give the serial answer to the bit, whole records and balanced accounts."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pytest
from distributed import Client

from breakstep.engine.cluster import local_cluster
from breakstep.engine.program import Program
from breakstep.engine.resident import ResidentDispatch
from breakstep.engine.run import RunOptions
from breakstep.errors import ClusterError, DeclarationError
from breakstep.graph.stages import parse_barriers
from breakstep.mesh.mesh import Edge
from tests.cluster.residents import CLEAN, DISPATCHES, record, serial, traces
from tests.toys import Toy

pytestmark = pytest.mark.cluster

PLANE = Toy((12, 9), cycles=3)
LINE = Toy((16,), cycles=2)


@dataclass(frozen=True)
class Case:
    """One way to run one toy."""

    toy: Toy = PLANE
    tile: tuple[int, ...] = (4, 3)
    barriers: str = "tasked"
    workers: int = 4
    placement: str = "blocks"
    fuse: bool = True
    window: int = 4
    memory_limit: int = 0


RESIDENT = {
    "one worker": Case(workers=1),
    "one worker lockstep": Case(workers=1, barriers="lockstep"),
    "lockstep": Case(barriers="lockstep", workers=2),
    "lockstep, four": Case(barriers="lockstep"),
    "lockstep, lags": Case(replace(PLANE, dt_lag=1, residual_lag=1), barriers="lockstep"),
    "tasked, lags": Case(replace(PLANE, dt_lag=1, residual_lag=1), placement="curve"),
    "dt lag 2": Case(replace(PLANE, dt_lag=2, cycles=5), workers=2, fuse=False, placement="curve"),
    "residual lag": Case(replace(PLANE, residual_lag=2, two_passes=True), barriers="solve"),
    "one barrier": Case(barriers="blur", placement="curve"),
    "dt barrier": Case(barriers="dt", workers=2),
    "two barriers": Case(replace(PLANE, dt_lag=1), barriers="drift,solve", fuse=False),
    "every other worker": Case(placement="cyclic", workers=2),
    "neighbours apart": Case(placement="cyclic", barriers="trade"),
    "two orders": Case(replace(PLANE, two_orders=True, edges=(Edge.FIXED, Edge.OUTFLOW))),
    "more workers than tiles": Case(LINE, (8,)),
    "more workers than tiles, lockstep": Case(LINE, (8,), barriers="lockstep"),
    "box": Case(Toy((6, 4, 3), (Edge.OUTFLOW, Edge.PERIODIC, Edge.REFLECTING), cycles=2), (3, 2, 3)),
    "window of one": Case(replace(PLANE, cycles=5, repeats=False), window=1),
    "long window": Case(replace(PLANE, cycles=6, repeats=False, dt_lag=1), window=6, placement="curve"),
    "many tiles": Case(Toy((60,), repeats=False, cycles=6, dt_lag=1), (3,), barriers="grow"),
    "no memory": Case(memory_limit=1),
    "little memory": Case(replace(PLANE, dt_lag=1, residual_lag=1), memory_limit=2_000, placement="cyclic"),
    "no memory lockstep": Case(barriers="lockstep", memory_limit=1, workers=2),
}
NATIVE = {
    "lockstep": Case(LINE, (4,), barriers="lockstep"),
    "tasked": Case(replace(LINE, dt_lag=1, residual_lag=1), (4,), placement="curve"),
    "some barriers": Case(LINE, (4,), barriers="drift,solve", placement="cyclic", workers=2),
    "dask places": Case(LINE, (4,), placement="dask", workers=1),
}
CASES = [*(("resident", name) for name in RESIDENT), *(("native", name) for name in NATIVE)]


def check(client: Client, dispatch: str, case: Case, root: Path, workers: int | None = None) -> None:
    """Run a case on a cluster and compare with serial."""
    program = Program(case.toy.problem(), case.tile, case.fuse)
    barriers = parse_barriers(program.template, case.barriers)
    expected = serial(program, root, barriers)
    found = record(
        DISPATCHES[dispatch](client, case.workers if workers is None else workers),
        program,
        root,
        barriers=barriers,
        placement=case.placement,
        window=case.window,
        memory_limit=case.memory_limit,
    )
    assert found.digest == expected.digest
    assert found.result.cycles == expected.result.cycles == case.toy.cycles
    assert found.result.values.keys() == expected.result.values.keys() == {"dt"}
    assert np.array_equal(found.result.values["dt"], expected.result.values["dt"])
    ran = found.profile.tasks.groupby("kind", observed=True).size()
    assert ran["step"] == (expected.profile.tasks["kind"] == "step").sum()
    assert traces(client) == CLEAN


@pytest.mark.parametrize(("dispatch", "name"), CASES)
def test_the_serial_answer_to_the_bit(client: Client, tmp_path: Path, dispatch: str, name: str) -> None:
    check(client, dispatch, (RESIDENT if dispatch == "resident" else NATIVE)[name], tmp_path)


@pytest.fixture(scope="module")
def pair() -> Iterator[Client]:
    """Two workers of two threads."""
    with local_cluster(2, threads=2) as found:
        yield found


@pytest.mark.parametrize(
    ("dispatch", "case", "workers"),
    [
        ("resident", Case(placement="curve"), 2),
        ("resident", Case(replace(PLANE, dt_lag=1, residual_lag=1), placement="cyclic"), 2),
        ("resident", Case(barriers="lockstep"), 2),
        ("resident", Case(memory_limit=1), 2),
        ("resident", Case(barriers="relax"), 1),
        ("native", Case(LINE, (4,)), 2),
    ],
)
def test_several_threads_a_worker(pair: Client, tmp_path: Path, dispatch: str, case: Case, workers: int) -> None:
    check(pair, dispatch, case, tmp_path, workers)


def test_threads_of_one_worker_all_work(pair: Client, tmp_path: Path) -> None:
    program = Program(PLANE.problem(), (4, 3))
    found = record(ResidentDispatch(pair), program, tmp_path)
    tasks = found.profile.tasks
    steps = tasks[tasks["kind"] == "step"]
    assert {tuple(row) for row in steps[["worker", "thread"]].to_numpy()} == {(w, t) for w in (0, 1) for t in (0, 1)}


def test_the_record_has_every_task_and_transfer(client: Client, tmp_path: Path) -> None:
    """The graph of the record is the serial run's, with the same edges between the same steps."""
    program = Program(replace(PLANE, dt_lag=1).problem(), (4, 3))
    expected, found = serial(program, tmp_path), record(ResidentDispatch(client), program, tmp_path, placement="cyclic")
    place = ["stage", "tile", "cycle", "iteration"]

    def edges(profile: object) -> set[tuple[object, ...]]:
        tasks = profile.tasks.set_index("task")  # type: ignore[attr-defined]
        steps = tasks[tasks["kind"] == "step"][place].astype(str)
        table = profile.edges  # type: ignore[attr-defined]
        table = table[table["producer"].isin(steps.index) & table["consumer"].isin(steps.index)]
        pairs = zip(
            steps.loc[table["producer"]].to_numpy().tolist(),
            steps.loc[table["consumer"]].to_numpy().tolist(),
            strict=True,
        )
        return {(*a, *b) for a, b in pairs}

    assert edges(found.profile) == edges(expected.profile)
    transfers = found.profile.transfers
    assert (transfers["from_worker"] != transfers["to_worker"]).all()
    assert (transfers["arrived_ns"] >= transfers["sent_ns"]).all()
    assert set(transfers["from_worker"]) == set(transfers["to_worker"]) == {0, 1, 2, 3}


def test_recording_changes_nothing(client: Client, tmp_path: Path) -> None:
    program = Program(PLANE.problem(), (4, 3))
    expected = serial(program, tmp_path)
    result = ResidentDispatch(client).run(program, RunOptions(record=False))
    assert result.failure is None
    assert len(result.record.tasks) == 0
    for name, tiles in expected.result.fields.items():
        assert all(np.array_equal(a, b) for a, b in zip(tiles, result.fields[name], strict=True))


def test_results_hold_no_more_than_they_say(client: Client) -> None:
    """Arrays come back protected, as a serial run's do, and none is a view of a whole message."""
    program = Program(PLANE.problem(), (4, 3))
    result = ResidentDispatch(client).run(program, RunOptions())
    for tiles in result.fields.values():
        for array in tiles:
            assert not array.flags.writeable
            base = array if array.base is None else array.base
            assert base.nbytes == array.nbytes


def test_tiles_without_a_worker_are_refused(client: Client) -> None:
    program = Program(LINE.problem(), (4,))
    failure = ResidentDispatch(client).run(program, RunOptions(placement="dask")).failure
    assert isinstance(failure, DeclarationError)
    assert "placement 'dask' needs the native dispatch" in str(failure)
    with pytest.raises(ClusterError, match="9 workers were asked for, but the Dask cluster has 4"):
        ResidentDispatch(client, 9)

"""Many Dask workers in one process, as when a cluster much larger than the machine is rehearsed.

Dask's own limit on a worker's memory is off there: it would compare what the whole process uses with one worker's
share, and halt them all.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from distributed import Client, LocalCluster

from breakstep.engine import warm
from breakstep.engine.program import Program
from breakstep.engine.resident import ResidentDispatch, driver
from breakstep.graph.stages import parse_barriers
from tests.cluster.residents import CLEAN, record, serial, traces
from tests.toys import Toy

pytestmark = pytest.mark.cluster

WORKERS = 10  # more than the barrier tree has branches, so that it has three levels
PLANE = Program(Toy((12, 9), cycles=3, dt_lag=1, residual_lag=1).problem(), (3, 3))


@pytest.fixture(scope="module", params=["inproc", "tcp"])
def crowd(request: pytest.FixtureRequest) -> Iterator[Client]:
    """Workers that pass objects on by reference, and workers whose messages go through sockets of loopback."""
    host = {"inproc": None, "tcp": "127.0.0.1"}[request.param]
    quiet = {"dashboard_address": None, "silence_logs": 50, "memory_limit": 0}
    with (
        LocalCluster(
            n_workers=WORKERS, threads_per_worker=1, processes=False, protocol=f"{request.param}://", host=host, **quiet
        ) as cluster,
        Client(cluster) as client,
    ):
        yield client


@pytest.mark.parametrize(("barriers", "placement"), [("lockstep", "blocks"), ("tasked", "cyclic"), ("dt", "shared")])
def test_workers_of_one_process_keep_apart(crowd: Client, tmp_path: Path, barriers: str, placement: str) -> None:
    chosen = parse_barriers(PLANE.template, barriers)
    found = record(ResidentDispatch(crowd), PLANE, tmp_path, barriers=chosen, placement=placement)
    assert found.digest == serial(PLANE, tmp_path, chosen).digest
    assert set(found.profile.tasks.loc[found.profile.tasks["kind"] == "step", "worker"]) == set(range(WORKERS))
    assert traces(crowd) == CLEAN


def test_checkpoints_of_one_process(crowd: Client, tmp_path: Path) -> None:
    root = tmp_path / "checkpoints"
    found = record(ResidentDispatch(crowd, checkpoints=root), PLANE, tmp_path, checkpoint_every=2)
    last = ResidentDispatch(crowd, 5, resume=root / "cycle-00000001")
    assert record(last, PLANE, tmp_path).digest == found.digest == serial(PLANE, tmp_path).digest


def test_two_runs_at_once_in_one_process(crowd: Client, tmp_path: Path) -> None:
    """Half of the workers each, driven from two threads."""
    from threading import Thread

    other = Program(replace(PLANE.problem, cycles=5), (4, 3))
    found: dict[int, str] = {}

    def drive(number: int, program: Program) -> None:
        with Client(crowd.scheduler.address, set_as_default=False) as own:
            found[number] = record(ResidentDispatch(own, 4 + number), program, tmp_path).digest

    threads = [Thread(target=drive, args=pair) for pair in enumerate((PLANE, other))]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert found == {0: serial(PLANE, tmp_path).digest, 1: serial(other, tmp_path).digest}


LOADS: list[str] = []


def load(program: Program) -> str:
    """Stands in for the loading of kernels; found by name, whichever worker calls it."""
    LOADS.append(warm.PROCESS)
    return ""


def test_a_process_loads_its_kernels_once(crowd: Client, monkeypatch: pytest.MonkeyPatch) -> None:
    LOADS.clear()
    monkeypatch.setattr(driver, "warm_up", load)
    ResidentDispatch(crowd).prepare(PLANE)
    assert LOADS == [warm.PROCESS] * 2  # the driver's own share, and one for all of its workers

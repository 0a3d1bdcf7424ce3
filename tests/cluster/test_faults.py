"""Faults: whatever befalls a run with checkpoints, it ends with the bits of an undisturbed one, or says why not."""

from __future__ import annotations

import asyncio
import contextlib
import json
import os
import random
import resource
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import pytest
from distributed import Client, LocalCluster, Worker

from breakstep.engine.checkpoint import checkpoints, last_checkpoint
from breakstep.engine.cluster import local_cluster
from breakstep.engine.program import Program
from breakstep.engine.resident import ResidentDispatch, driver
from breakstep.engine.run import RunOptions
from breakstep.errors import ClusterError
from tests.cluster.hazards import PLANE, TILE, Killer, lasting_program, pids
from tests.cluster.residents import CLEAN, record, serial, traces
from tests.toys import Toy

pytestmark = [pytest.mark.cluster, pytest.mark.slow]

ROOT = Path(__file__).parents[2]
LOST_SECONDS = 10.0  # a lost worker is noticed at the next look, each 0.25 s apart; the rest is a loaded machine's


@pytest.fixture(scope="module")
def fragile() -> Iterator[Client]:
    """Two workers that may be killed: Dask starts others in their place."""
    with local_cluster(2) as found:
        yield found


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> str:
    """Digest of the serial answer of the program that faults befall."""
    return serial(Program(PLANE.problem(), TILE), tmp_path_factory.mktemp("serial")).digest


def whole(client: Client) -> None:
    """Wait until all workers are there again."""
    client.wait_for_workers(2, timeout=60)
    while len(pids(client)) < 2:
        time.sleep(0.05)


# ---- workers that are killed ------------------------------------------------------------------------


def run_under_fire(client: Client, root: Path, seed: int, kills: int) -> tuple[str, int, int]:
    """One run with checkpoints while workers are killed; its digest, the kills, and the starts these cost."""
    whole(client)
    dispatch = ResidentDispatch(client, checkpoints=root / f"checkpoints-{seed}")
    with Killer(client, seed, 0.2, 2.0, kills) as killer:
        found = record(dispatch, lasting_program(), root, checkpoint_every=2)
    return found.digest, killer.kills, int(found.result.notes["restarts"])  # type: ignore[call-overload]


def test_a_run_whose_workers_are_killed_ends_with_the_same_bits(
    fragile: Client, tmp_path: Path, undisturbed: str
) -> None:
    digest, kills, restarts = run_under_fire(fragile, tmp_path, seed=1, kills=3)
    assert digest == undisturbed
    assert kills >= 1
    assert restarts >= 1
    assert traces(fragile) == CLEAN


@pytest.mark.slow
def test_thirty_kills_at_random_moments(fragile: Client, tmp_path: Path, undisturbed: str) -> None:
    kills = restarts = 0
    for seed in range(100, 160):
        digest, killed, started = run_under_fire(fragile, tmp_path, seed, kills=5)
        assert digest == undisturbed
        kills, restarts = kills + killed, restarts + started
        if kills >= 30:
            break
    assert kills >= 30
    assert restarts >= 8  # a kill while the run is starting again costs no further start
    whole(fragile)
    assert traces(fragile) == CLEAN


def test_without_checkpoints_a_lost_worker_ends_the_run_with_one_sentence(fragile: Client, tmp_path: Path) -> None:
    whole(fragile)
    dispatch = ResidentDispatch(fragile)
    killed_at: list[float] = []

    def kill(cycle: int) -> None:
        if not killed_at:
            killed_at.append(time.monotonic())
            os.kill(pids(fragile)[0], signal.SIGKILL)

    result = dispatch.run(lasting_program(Toy((12, 8), cycles=1000)), RunOptions(), kill)
    assert time.monotonic() - killed_at[0] < LOST_SECONDS
    assert isinstance(result.failure, ClusterError)
    assert str(result.failure).count("\n") == 0
    assert dispatch.addresses[0] in str(result.failure) or dispatch.addresses[1] in str(result.failure)
    assert len(result.record.tasks) > 0  # what the survivor has recorded is there
    assert set(result.record.tasks.table().column("worker").to_pylist()) in ({0}, {1})
    whole(fragile)
    assert traces(fragile) == CLEAN


def test_starts_that_lead_nowhere_come_to_an_end(
    fragile: Client, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A worker dies each time before another checkpoint is complete, as when a tile does not fit into its memory."""
    monkeypatch.setattr(driver, "FRUITLESS_STARTS", 1)
    whole(fragile)
    program = lasting_program(Toy((12, 8), cycles=1000))
    dispatch = ResidentDispatch(fragile, checkpoints=tmp_path / "checkpoints")
    with Killer(fragile, 5, 0.2, 0.4, most=50) as killer:
        result = dispatch.run(program, RunOptions(checkpoint_every=900))
    assert isinstance(result.failure, ClusterError)
    assert "2 starts in a row ended before another checkpoint was complete; the last: " in str(result.failure)
    assert killer.kills >= 2
    whole(fragile)
    assert traces(fragile) == CLEAN


# ---- a driver that is killed ------------------------------------------------------------------------

SPARK = ["--set", "mesh.zones=[32, 32]", "--set", "mesh.tile=[8, 8]"]


def breakstep(*arguments: str) -> subprocess.Popen[str]:
    """The command, in a process of its own."""
    command = [sys.executable, "-m", "breakstep", *arguments]
    pipe = subprocess.PIPE
    return subprocess.Popen(command, cwd=ROOT, stdout=pipe, stderr=pipe, text=True, start_new_session=True)


def finished(process: subprocess.Popen[str]) -> None:
    """Wait for the end, which must be a good one."""
    told, complaints = process.communicate(timeout=120)
    assert process.returncode == 0, told + complaints


def digest_in(folder: Path) -> str:
    """Digest of the final fields in a profile."""
    return str(json.loads((folder / "manifest.json").read_text())["digest"])


def kill_later(process: subprocess.Popen[str], folder: Path, delay: float) -> bool:
    """Kill a driver some time after its first checkpoint; False if it was faster."""
    while not checkpoints(folder / "checkpoints"):
        if process.poll() is not None:
            return False
        time.sleep(0.01)
    with contextlib.suppress(subprocess.TimeoutExpired):
        process.wait(delay)
        return False
    process.kill()
    process.communicate()
    return True


def resumed_after_kills(
    root: Path, cycles: int, kills: int, longest: float, seed: int, cluster: Sequence[str] = ()
) -> str:
    """Kill the driver again and again, each time in the run that goes on from the last; digest of the end.

    With options that name a cluster, two drivers in three use it and leave its workers behind at work, whom the
    next one finds; the others take their workers with them.
    """
    moments = random.Random(seed)
    sizes = [*SPARK, "--set", f"run.cycles={cycles}"]
    number, source = 0, None
    while number < kills:
        folder = root / f"killed-{number}"
        begin = ["single_spark", *sizes] if source is None else ["--resume", str(source)]
        place = cluster if number % 3 else ()
        process = breakstep("run", *begin, *place, "--checkpoint-every", "2", "--out", str(folder))
        assert kill_later(process, folder, moments.uniform(0.0, longest)), process.communicate()
        number, source = number + 1, folder
    assert source is not None
    finished(breakstep("run", "--resume", str(source), *(cluster or ("--workers", "1")), "--out", str(root / "end")))
    return digest_in(root / "end")


@pytest.fixture(scope="module")
def spark_digests(tmp_path_factory: pytest.TempPathFactory) -> dict[int, str]:
    """Digests of undisturbed serial runs, by cycles."""
    root = tmp_path_factory.mktemp("spark")
    found = {}
    for cycles in (30, 200):
        sizes = [*SPARK, "--set", f"run.cycles={cycles}"]
        finished(breakstep("run", "single_spark", *sizes, "--dispatch", "serial", "--out", str(root / str(cycles))))
        found[cycles] = digest_in(root / str(cycles))
    return found


def test_a_run_whose_driver_was_killed_is_resumed(tmp_path: Path, spark_digests: dict[int, str]) -> None:
    assert resumed_after_kills(tmp_path, cycles=30, kills=1, longest=0.2, seed=3) == spark_digests[30]


@pytest.mark.slow
def test_ten_drivers_killed_at_random_moments(client: Client, tmp_path: Path, spark_digests: dict[int, str]) -> None:
    cluster = ["--address", client.scheduler.address]
    found = resumed_after_kills(tmp_path, cycles=200, kills=10, longest=0.4, seed=4, cluster=cluster)
    assert found == spark_digests[200]
    assert traces(client) == CLEAN


def test_no_process_outlives_a_killed_driver(tmp_path: Path) -> None:
    """Its workers are its children, and end when it does."""
    process = breakstep("run", "single_spark", *SPARK, "--checkpoint-every", "2", "--out", str(tmp_path / "run"))
    assert kill_later(process, tmp_path / "run", 0.0)
    deadline = time.monotonic() + 20.0
    while (left := members(process.pid)) and time.monotonic() < deadline:
        time.sleep(0.1)
    assert left == []


def members(session: int) -> list[int]:
    """Processes of a session that are not zombies."""
    found = []
    for folder in Path("/proc").glob("[0-9]*"):
        with contextlib.suppress(OSError):
            fields = (folder / "stat").read_text().rpartition(")")[2].split()
            if int(fields[3]) == session and fields[0] != "Z":
                found.append(int(folder.name))
    return found


# ---- a disk that is full ------------------------------------------------------------------------------


def fill_the_disk(session: int) -> None:
    """From now on no file of these processes grows beyond 1 kB: as on a full disk, but for the error's number."""
    for pid in members(session):
        with contextlib.suppress(ProcessLookupError):
            _, hard = resource.prlimit(pid, resource.RLIMIT_FSIZE)
            resource.prlimit(pid, resource.RLIMIT_FSIZE, (1000, hard))


def test_a_disk_that_fills_up_in_the_course_of_a_run(tmp_path: Path, spark_digests: dict[int, str]) -> None:
    """Neither another checkpoint nor the profile can be written: one sentence, and the run can be gone on with."""
    out = tmp_path / "run"
    sizes = [*SPARK, "--set", "run.cycles=30"]
    process = breakstep("run", "single_spark", *sizes, "--checkpoint-every", "2", "--out", str(out))
    while not checkpoints(out / "checkpoints"):
        assert process.poll() is None, process.communicate()
        time.sleep(0.01)
    fill_the_disk(process.pid)
    told, complaints = process.communicate(timeout=60)
    assert (process.returncode, told) == (2, ""), complaints
    first, second = complaints.splitlines()
    assert first.startswith("breakstep: the checkpoint of cycle ")
    assert f"{out / 'checkpoints'} (File too large)" in first
    assert second == f"breakstep: to go on from its last checkpoint: breakstep run --resume {out}"
    assert not (out / "manifest.json").exists()
    finished(breakstep("run", "--resume", str(out), "--workers", "1", "--out", str(tmp_path / "end")))
    assert digest_in(tmp_path / "end") == spark_digests[30]


# ---- a driver that leaves its workers alone -----------------------------------------------------------


@contextlib.contextmanager
def abandoned(client: Client, lease: float, root: Path) -> Iterator[None]:
    """A run on the cluster whose driver has been killed in the course of it."""
    arguments = [client.scheduler.address, str(lease), str(root / "orphan")]
    command = [sys.executable, "-m", "tests.cluster.orphan", *arguments]
    with subprocess.Popen(command, cwd=ROOT, stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        for line in process.stdout:
            if int(line) >= 15:
                break
        process.kill()
    yield


def cycles_done(dask_worker: Worker) -> dict[str, int]:
    """How far each run on a worker has come."""
    from breakstep.engine.resident import remote

    hosts = {run: host for (address, run), host in remote._HOSTS.items() if address == dask_worker.address}
    return {run: host.core.cycles_done for run, host in hosts.items() if host.core is not None}


def test_workers_give_up_when_their_driver_is_gone(client: Client, tmp_path: Path) -> None:
    """Not at once: a driver may be held up, too. The lease is 120 s unless a test makes it short."""
    with abandoned(client, lease=2.0, root=tmp_path):
        before = client.run(cycles_done)
        assert [len(runs) for runs in before.values()] == [1, 1, 1, 1]
        time.sleep(0.3)
        after = client.run(cycles_done)
        assert all(after[w][run] > cycle for w, runs in before.items() for run, cycle in runs.items())
        assert traces(client, patience=10.0) == CLEAN


def test_another_run_is_not_disturbed_by_an_orphan_and_ends_it(client: Client, tmp_path: Path) -> None:
    program = Program(Toy((12, 9), dt_lag=1).problem(), (4, 3))
    with abandoned(client, lease=600.0, root=tmp_path):
        assert [len(runs) for runs in client.run(cycles_done).values()] == [1, 1, 1, 1]
        found = record(ResidentDispatch(client), program, tmp_path)
    assert found.digest == serial(program, tmp_path).digest
    assert traces(client) == CLEAN


def test_an_orphan_s_checkpoints_can_be_resumed(client: Client, tmp_path: Path) -> None:
    """On the same cluster, on which the orphan still runs and writes."""
    with abandoned(client, lease=600.0, root=tmp_path):
        last = last_checkpoint(tmp_path / "orphan")
        cycle = int(last.name.removeprefix("cycle-"))
        program = Program(Toy((12, 8), cycles=cycle + 4).problem(), TILE)
        resumed = record(ResidentDispatch(client, 3, resume=last), program, tmp_path)
    assert resumed.digest == serial(program, tmp_path).digest


def test_a_short_lease_does_not_end_a_run_that_is_looked_after(client: Client, tmp_path: Path) -> None:
    """The driver looks in four times a second; kernels may well take longer than the lease."""
    program = lasting_program(Toy((12, 8), cycles=2), seconds=0.4)
    found = record(ResidentDispatch(client, 2, lease=1.2), program, tmp_path)
    assert found.digest == serial(Program(Toy((12, 8), cycles=2).problem(), TILE), tmp_path).digest


def test_two_drivers_share_a_cluster(client: Client, tmp_path: Path) -> None:
    """Each worker begins both runs, in whatever order; if a run held its worker's only thread, both would wait."""
    programs = [lasting_program(Toy((12, 8), cycles=6, dt_lag=lag)) for lag in (0, 1)]
    found: dict[int, str] = {}

    def drive(number: int) -> None:
        with Client(client.scheduler.address, set_as_default=False) as own:
            for _ in range(2):
                found[number] = record(ResidentDispatch(own), programs[number], tmp_path).digest

    threads = [threading.Thread(target=drive, args=(number,)) for number in (0, 1)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert found == {n: serial(program, tmp_path).digest for n, program in enumerate(programs)}
    assert traces(client) == CLEAN


# ---- connections that fail ----------------------------------------------------------------------------


def break_line(seed: int, before: float, after: float, delay: float, dask_worker: Worker) -> None:
    """Let messages from this worker fail before or after they were delivered, or be late.

    Parameters
    ----------
    before, after : float
        Chance that a message is not sent at all, or that it is received but its answer lost.
    """
    from breakstep.engine.resident import adapter, host

    chance, real = random.Random(seed), adapter.send
    counts = {"lost": 0, "repeated": 0, "sent": 0}

    async def send(*arguments: Any) -> Any:
        await asyncio.sleep(delay * chance.random())
        if chance.random() < before:
            counts["lost"] += 1
            raise OSError("cut before")
        answer = await real(*arguments)
        counts["sent"] += 1
        counts["repeated"] += answer == "known"
        if chance.random() < after:
            raise OSError("cut after")
        return answer

    host.adapter.send = send
    dask_worker.breakstep_line = (real, counts)


def mend_line(dask_worker: Worker) -> dict[str, int]:
    """Undo :func:`break_line`; what it has done."""
    from breakstep.engine.resident import host

    host.adapter.send, counts = dask_worker.breakstep_line
    return dict(counts)


@pytest.fixture
def broken(client: Client) -> Iterator[Client]:
    """Whatever a test does to the lines is undone."""
    yield client
    for address, is_broken in client.run(lambda dask_worker: hasattr(dask_worker, "breakstep_line")).items():
        if is_broken:
            client.run(mend_line, workers=[address])


def test_lines_that_fail_now_and_then_change_nothing(broken: Client, tmp_path: Path) -> None:
    """One message in twelve fails; four failures in a row of one message, at 1 in 20,000, would end the run."""
    for seed, address in enumerate(broken.scheduler_info(n_workers=-1)["workers"]):
        broken.run(break_line, seed, 0.04, 0.04, 0.002, workers=[address])
    program = Program(Toy((12, 9), cycles=3, residual_lag=1).problem(), (4, 3))
    found = record(ResidentDispatch(broken), program, tmp_path, placement="cyclic")
    assert found.digest == serial(program, tmp_path).digest
    counts = broken.run(mend_line).values()
    assert sum(count["lost"] for count in counts) >= 5
    assert sum(count["repeated"] for count in counts) >= 5  # delivered again, and dropped by their numbers


def test_a_line_that_stays_cut_is_one_sentence(broken: Client) -> None:
    dispatch = ResidentDispatch(broken, 2)
    broken.run(break_line, 0, 1.0, 0.0, 0.0, workers=[dispatch.addresses[1]])
    result = dispatch.run(lasting_program(Toy((12, 8), cycles=100)), RunOptions())
    assert isinstance(result.failure, ClusterError)
    assert f"worker 0 at {dispatch.addresses[0]} cannot be reached (cut before)" == str(result.failure)
    assert traces(broken) == CLEAN


def cut(dask_worker: Worker) -> int:
    """Abort every connection to other workers, as a router that forgets them does; how many there were."""
    pool = dask_worker.rpc
    comms = [comm for kind in (pool.available, pool.occupied) for comms in kind.values() for comm in comms]
    for comm in comms:
        comm.abort()
    return len(comms)


def test_aborted_connections_are_made_anew(client: Client, tmp_path: Path) -> None:
    """All of them, several times in the course of a run, with messages under way."""
    dispatch = ResidentDispatch(client, 2)
    program = lasting_program(Toy((12, 8), cycles=20))
    dispatch.prepare(program)
    over, cuts = threading.Event(), []

    def disturb() -> None:
        with Client(client.scheduler.address, set_as_default=False) as other:
            while not over.wait(0.1):
                cuts.append(sum(other.run(cut, workers=dispatch.addresses).values()))

    thread = threading.Thread(target=disturb)
    thread.start()
    try:
        found = record(dispatch, program, tmp_path, placement="cyclic")
    finally:
        over.set()
        thread.join()
    assert found.digest == serial(Program(Toy((12, 8), cycles=20).problem(), TILE), tmp_path).digest
    assert sum(count > 0 for count in cuts) >= 3


# ---- processes that are halted, a scheduler that goes -----------------------------------------------------


@pytest.mark.parametrize("victim", ["worker", "both workers"])
def test_a_halted_worker_goes_on_where_it_was(fragile: Client, tmp_path: Path, undisturbed: str, victim: str) -> None:
    """Halted for longer than the lease: it has heard nothing, but has not waited either."""
    whole(fragile)
    halted: list[int] = []

    def halt(cycle: int) -> None:
        if not halted and cycle >= 3:
            halted.extend(pids(fragile)[: 1 if victim == "worker" else 2])
            for pid in halted:
                os.kill(pid, signal.SIGSTOP)
            threading.Timer(2.5, lambda: [os.kill(pid, signal.SIGCONT) for pid in halted]).start()

    began = time.monotonic()
    lease = 2.0 if victim == "both workers" else 30.0
    dispatch = ResidentDispatch(fragile, lease=lease)
    mode = record_with(dispatch, lasting_program(), tmp_path, halt)
    assert time.monotonic() - began > 2.5
    assert mode == undisturbed
    assert traces(fragile) == CLEAN


def record_with(dispatch: ResidentDispatch, program: Program, root: Path, progress: Any) -> str:
    """Digest of a run that is told its progress."""
    from breakstep.engine.recorded import run_and_record

    facts = {"name": "toy", "title": ""}
    result, profile = run_and_record(
        dispatch, program, RunOptions(), root / "watched", mode="tasked", scenario=facts, progress=progress
    )
    assert result.failure is None, str(result.failure)
    return str(profile.manifest["digest"])


def test_a_scheduler_that_goes_is_one_sentence(tmp_path: Path) -> None:
    with (
        LocalCluster(
            n_workers=2, threads_per_worker=1, host="127.0.0.1", dashboard_address=None, silence_logs=50
        ) as cluster,
        Client(cluster) as client,
    ):
        dispatch = ResidentDispatch(client, checkpoints=tmp_path / "checkpoints")
        gone: list[float] = []

        def close(cycle: int) -> None:
            if not gone and cycle >= 3:
                gone.append(time.monotonic())
                cluster.close()

        result = dispatch.run(lasting_program(), RunOptions(checkpoint_every=2), close)
        assert isinstance(result.failure, ClusterError)
        assert "scheduler" in str(result.failure) or "all workers are gone" in str(result.failure)
        assert "\n" not in str(result.failure)
        assert time.monotonic() - gone[0] < LOST_SECONDS
    assert checkpoints(tmp_path / "checkpoints")

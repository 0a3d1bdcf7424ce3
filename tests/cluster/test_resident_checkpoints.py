"""Checkpoints of resident runs: going on from one, on whatever workers there are, ends with the same bits."""

from __future__ import annotations

import resource
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from distributed import Client

from breakstep.engine import checkpoint
from breakstep.engine.checkpoint import MANIFEST, checkpoints, last_checkpoint
from breakstep.engine.cluster import local_cluster
from breakstep.engine.program import Program
from breakstep.engine.resident import ResidentDispatch
from breakstep.engine.run import RunOptions
from breakstep.errors import CheckpointError, OutputError
from breakstep.mesh.mesh import Edge
from tests.cluster.hazards import lasting_program
from tests.cluster.residents import CLEAN, record, serial, traces
from tests.toys import Toy

pytestmark = pytest.mark.cluster

TILE = (4, 3)
TOYS = {
    "plain": Toy(cycles=5),
    "lags": Toy(cycles=5, dt_lag=1, residual_lag=1),
    "long lag": Toy(cycles=7, dt_lag=3, repeats=False),
    "two orders": Toy(cycles=5, two_orders=True, two_passes=True, dt_lag=1, edges=(Edge.FIXED, Edge.OUTFLOW)),
}


@pytest.mark.parametrize("name", TOYS)
@pytest.mark.parametrize("barriers", [False, True], ids=["tasked", "lockstep"])
def test_going_on_ends_with_the_same_bits(client: Client, tmp_path: Path, name: str, barriers: bool) -> None:
    """On fewer and on more workers than the run that made the checkpoint, with other owners of tiles."""
    program, root = Program(TOYS[name].problem(), TILE), tmp_path / "checkpoints"
    chosen = program.template.barrier_names() if barriers else ()
    expected = serial(program, tmp_path)
    whole = record(
        ResidentDispatch(client, 2, checkpoints=root), program, tmp_path, checkpoint_every=2, barriers=chosen
    )
    assert whole.digest == expected.digest
    found = checkpoints(root)
    cycles = TOYS[name].cycles
    assert [path.name for path in found] == [f"cycle-{c - 1:08d}" for c in range(2, cycles + 1, 2)][-2:]
    assert sorted(root.iterdir()) == found  # nothing partial is left
    for path, workers, placement in ((found[0], 4, "cyclic"), (found[1], 1, "blocks"), (found[1], 3, "curve")):
        dispatch = ResidentDispatch(client, workers, resume=path)
        resumed = record(dispatch, program, tmp_path, barriers=chosen, placement=placement)
        assert resumed.digest == expected.digest
        assert resumed.result.values["dt"].tolist() == expected.result.values["dt"].tolist()
        assert resumed.result.cycles == cycles
        assert resumed.profile.tasks["cycle"].min() == int(path.name.removeprefix("cycle-")) + 1
    assert traces(client) == CLEAN


def test_several_threads_go_on_where_one_left_off(client: Client, tmp_path: Path) -> None:
    program, root = Program(TOYS["lags"].problem(), TILE), tmp_path / "checkpoints"
    record(ResidentDispatch(client, 4, checkpoints=root), program, tmp_path, checkpoint_every=3)
    with local_cluster(1, threads=3) as other:
        resumed = record(ResidentDispatch(other, resume=last_checkpoint(root)), program, tmp_path)
    assert resumed.digest == serial(program, tmp_path).digest


def test_a_run_with_nothing_left_to_do_gives_the_last_results_alone(client: Client, tmp_path: Path) -> None:
    """A checkpoint holds as many earlier results as a lag needs; none of them is a result of the run."""
    program, root = Program(TOYS["long lag"].problem(), TILE), tmp_path / "checkpoints"
    whole = record(ResidentDispatch(client, 2, checkpoints=root), program, tmp_path, checkpoint_every=7)
    resumed = record(ResidentDispatch(client, 1, resume=last_checkpoint(root)), program, tmp_path)
    assert resumed.result.values["dt"].tolist() == whole.result.values["dt"].tolist()


@pytest.mark.parametrize("every", [1, 3])
def test_a_longer_run_goes_on_from_the_end_of_a_shorter_one(client: Client, tmp_path: Path, every: int) -> None:
    toy = TOYS["two orders"]
    short, long = Program(replace(toy, cycles=3).problem(), TILE), Program(replace(toy, cycles=8).problem(), TILE)
    record(ResidentDispatch(client, 2, checkpoints=tmp_path / "short"), short, tmp_path, checkpoint_every=every)
    last = last_checkpoint(tmp_path / "short")
    assert last.name == "cycle-00000002"
    again = ResidentDispatch(client, 3, resume=last, checkpoints=tmp_path / "long")
    assert record(again, long, tmp_path, checkpoint_every=every).digest == serial(long, tmp_path).digest
    assert checkpoints(tmp_path / "long")[-1].name == ("cycle-00000007" if every == 1 else "cycle-00000005")


def test_nothing_is_left_to_do(client: Client, tmp_path: Path) -> None:
    """A run resumed from its own end gives what it gave."""
    program, root = Program(TOYS["plain"].problem(), TILE), tmp_path / "checkpoints"
    whole = record(ResidentDispatch(client, 2, checkpoints=root), program, tmp_path, checkpoint_every=5)
    result = ResidentDispatch(client, 2, resume=last_checkpoint(root)).run(program, RunOptions())
    assert result.failure is None
    for name, tiles in whole.result.fields.items():
        assert all((a == b).all() for a, b in zip(tiles, result.fields[name], strict=True))


def test_checkpoints_change_nothing_and_hold_no_memory(client: Client, tmp_path: Path) -> None:
    program = Program(replace(TOYS["lags"], cycles=12).problem(), TILE)
    without = record(ResidentDispatch(client, 2), program, tmp_path)
    dispatch = ResidentDispatch(client, 2, checkpoints=tmp_path / "checkpoints")
    every_cycle = record(dispatch, program, tmp_path, checkpoint_every=1)
    assert every_cycle.digest == without.digest
    # Each checkpoint under way pins at most one more state; the window lets four cycles be unfinished.
    state = sum(array.nbytes for tiles in without.result.fields.values() for array in tiles)
    most = [peak for run in (every_cycle, without) for peak in run.result.notes["worker_peak_bytes"]]  # type: ignore[attr-defined]
    assert max(most[:2]) <= max(most[2:]) + 4 * state


def damage(path: Path) -> None:
    """Flip one bit in the middle of a file."""
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    path.write_bytes(content)


@pytest.fixture
def saved(client: Client, tmp_path: Path) -> Path:
    """A checkpoint of the plain toy."""
    program = Program(TOYS["plain"].problem(), TILE)
    record(ResidentDispatch(client, 2, checkpoints=tmp_path / "saved"), program, tmp_path, checkpoint_every=2)
    return last_checkpoint(tmp_path / "saved")


def test_a_damaged_checkpoint_ends_the_run_before_it_begins(client: Client, saved: Path) -> None:
    program = Program(TOYS["plain"].problem(), TILE)
    damage(saved / "u" / "c" / "0" / "2" / "1" / "0")
    result = ResidentDispatch(client, 2, resume=saved).run(program, RunOptions())
    assert isinstance(result.failure, CheckpointError)
    assert "field 'u' of tile 7 is not what was written; resume from another checkpoint" in str(result.failure)
    (saved / MANIFEST).unlink()
    result = ResidentDispatch(client, 2, resume=saved).run(program, RunOptions())
    assert isinstance(result.failure, CheckpointError)
    assert traces(client) == CLEAN


def test_a_checkpoint_of_another_problem_is_refused(client: Client, saved: Path) -> None:
    lagging = Program(replace(TOYS["plain"], dt_lag=1).problem(), TILE)
    failure = ResidentDispatch(client, 2, resume=saved).run(lagging, RunOptions()).failure
    assert isinstance(failure, CheckpointError)
    assert "{'dt': 0}, the problem has {'dt': 1}" in str(failure)
    otherwise_tiled = Program(TOYS["plain"].problem(), (6, 3))
    failure = ResidentDispatch(client, 2, resume=saved).run(otherwise_tiled, RunOptions()).failure
    assert isinstance(failure, CheckpointError)


# ---- the disk is full -----------------------------------------------------------------------------


def limit_files(size: int) -> None:
    """Let no file of this process grow beyond a size [bytes]; -1 lifts the limit."""
    _, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (hard if size < 0 else size, hard))


@pytest.fixture
def small_files(client: Client) -> Iterator[Client]:
    """Lifts the limit afterwards."""
    yield client
    client.run(limit_files, -1)


def test_a_disk_that_takes_no_more_stops_the_run_and_spares_the_last_checkpoint(
    small_files: Client, tmp_path: Path
) -> None:
    """The system refuses to let files grow, as it does on a full disk; the error differs in its number only."""
    client, root = small_files, tmp_path / "checkpoints"
    program = lasting_program()

    def fill(cycle: int) -> None:
        if checkpoints(root):
            client.run(limit_files, 10)

    dispatch = ResidentDispatch(client, 2, checkpoints=root)
    result = dispatch.run(program, RunOptions(checkpoint_every=3), fill)
    assert isinstance(result.failure, OutputError)
    assert f"cannot be written to {root} (File too large)" in str(result.failure)
    assert "the run stops" in str(result.failure)
    assert result.notes["restarts"] == 0
    assert traces(client) == CLEAN
    client.run(limit_files, -1)
    before = checkpoints(root)
    assert before
    resumed = record(ResidentDispatch(client, 2, resume=before[-1]), program, tmp_path)
    assert resumed.digest == serial(program, tmp_path).digest


def test_a_disk_that_does_not_take_the_manifest_stops_the_run(
    client: Client, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The driver writes it; what the workers have written by then remains partial."""
    root = tmp_path / "checkpoints"
    real = Path.write_text

    def full(path: Path, *arguments: object, **options: object) -> int:
        if path.name == MANIFEST and checkpoints(root):
            raise OSError(28, "No space left on device")
        return real(path, *arguments, **options)  # type: ignore[arg-type]

    monkeypatch.setattr(Path, "write_text", full)
    result = ResidentDispatch(client, 2, checkpoints=root).run(lasting_program(), RunOptions(checkpoint_every=3))
    assert isinstance(result.failure, OutputError)
    assert f"cannot be completed in {root} (No space left on device)" in str(result.failure)
    assert len(checkpoints(root)) == 1
    assert any(path.name.endswith(".partial") for path in root.iterdir())
    assert traces(client) == CLEAN
    monkeypatch.undo()
    checkpoint.discard_partial(root)
    assert sorted(root.iterdir()) == checkpoints(root)

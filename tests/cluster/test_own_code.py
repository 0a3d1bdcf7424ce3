"""Code of the user's on real workers: files that no worker can import by name, and compiled routines."""

from __future__ import annotations

import asyncio
from pathlib import Path

import pytest
from click.testing import CliRunner, Result
from distributed import Client

from breakstep import api
from breakstep.cli import cli
from breakstep.errors import KernelError
from breakstep.profile.store import read_profile
from breakstep.scenario.setup import DispatchName
from tests.cluster.conftest import NOTHING, leftovers
from tests.compilers import example
from tests.unit.scenario.own import OWN, written

pytestmark = pytest.mark.cluster

SMALL = ("code.arguments.zones=[32, 32]", "run.cycles=6")


@pytest.mark.parametrize("dispatch", ["resident", "native"])
@pytest.mark.parametrize("name", ["heat_c", "heat_fortran"])
def test_a_compiled_routine_gives_the_same_bits_everywhere(
    client: Client, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str, dispatch: DispatchName
) -> None:
    """Lockstep, tasked, and in one thread of this process."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    monkeypatch.chdir(tmp_path)
    file = example(name)
    alone = api.run(file, overrides=SMALL, dispatch="serial")
    both = api.compare(file, overrides=SMALL, dispatch=dispatch, pairs=1, client=client)
    assert both.identical
    assert both.tasked[0].manifest["digest"] == alone.manifest["digest"]
    assert both.tasked[0].manifest["workers"] == 4
    assert len(set(both.tasked[0].tasks["worker"])) == 4
    assert leftovers(client) == NOTHING


@pytest.mark.parametrize("dispatch", ["resident", "native"])
def test_a_file_runs_on_workers_that_cannot_import_it(client: Client, tmp_path: Path, dispatch: DispatchName) -> None:
    """The cluster was there before the file; a file that has changed is another module, on the same workers too."""
    file = written(tmp_path)
    first = api.run(file, dispatch=dispatch, client=client, workers=3, out=tmp_path / "first")
    alone = api.run(file, dispatch="serial", out=tmp_path / "alone")
    assert first.manifest["digest"] == alone.manifest["digest"]
    written(tmp_path, OWN.replace("0.25 *", "0.24 *"))
    other = api.run(file, dispatch=dispatch, client=client, workers=3, out=tmp_path / "other")
    assert other.manifest["digest"] != alone.manifest["digest"]
    assert other.manifest["digest"] == api.run(file, dispatch="serial", out=tmp_path / "again").manifest["digest"]


def test_a_notebook_s_event_loop_does_not_mind(tmp_path: Path) -> None:
    """Where a loop runs in the calling thread already, with a cluster made for the run."""

    async def cell() -> str:
        return str(api.run(written(tmp_path), workers=1, out=tmp_path / "mine").manifest["digest"])

    assert asyncio.run(cell()) == api.run(written(tmp_path), dispatch="serial", out=tmp_path / "too").manifest["digest"]


def shell(*arguments: object) -> Result:
    """The command line in this process."""
    return CliRunner().invoke(cli, [str(one) for one in arguments], standalone_mode=False, catch_exceptions=False)


def test_a_run_of_a_file_is_resumed_and_says_when_the_file_has_changed(client: Client, tmp_path: Path) -> None:
    file, where = written(tmp_path), ("--address", client.scheduler.address)
    whole = api.run(file, dispatch="serial", out=tmp_path / "whole", overrides=["run.cycles=8"])
    assert shell("run", file, *where, "--checkpoint-every", 2, "--out", tmp_path / "a").return_value == 0
    on = ("--set", "run.cycles=8", *where)
    done = shell("run", "--resume", tmp_path / "a", *on, "--out", tmp_path / "b")
    assert (done.return_value, done.stderr) == (0, "")
    assert read_profile(tmp_path / "b").manifest["digest"] == whole.manifest["digest"]
    written(tmp_path, OWN + "# a remark\n")
    done = shell("run", "--resume", tmp_path / "a", *on, "--out", tmp_path / "c")
    assert done.return_value == 0
    assert f"{file} has changed since the run that is gone on with" in done.stderr
    assert read_profile(tmp_path / "c").manifest["digest"] == whole.manifest["digest"]


@pytest.mark.parametrize("dispatch", ["resident", "native"])
def test_what_code_raises_on_a_worker_is_shown_with_its_lines(
    client: Client, tmp_path: Path, dispatch: DispatchName
) -> None:
    faulty = OWN.replace('return {"u": 0.5', 'share = 1 / (call.tile - 2 * call.cycle)\n    return {"u": 0.5')
    with pytest.raises(KernelError, match=r"step smooth, tile 2, cycle 1: .* ZeroDivisionError") as caught:
        api.run(
            written(tmp_path, faulty.replace("call.tile - 2", "(call.tile or 9) - 2")),
            dispatch=dispatch, client=client, out=tmp_path / "mine",
        )  # fmt: skip
    shown = caught.value.details["traceback"]
    assert "own.py" in shown
    assert "share = 1 / (" in shown
    assert "calling.py" not in shown

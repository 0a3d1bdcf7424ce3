"""Kernels that do not return, on real workers: the run ends with a sentence, its profile is kept, nobody is left."""

from __future__ import annotations

import os
import re
import subprocess
import sys
import time
from pathlib import Path

import psutil
import pytest
from distributed import Client

from breakstep import api
from breakstep.engine.run import Dispatch
from breakstep.errors import OverdueError
from breakstep.profile.store import read_profile
from tests.cluster.conftest import NOTHING, leftovers
from tests.stuck import STUCK

pytestmark = [pytest.mark.cluster, pytest.mark.slow]

SENTENCE = re.compile(
    r"step smooth, tile 1, cycle 2, worker \d at tcp://\S+: the kernel has not returned for \S+ s, and 1 s are allowed;"
    r" correct the step, or allow more with --task-timeout"
)


@pytest.fixture
def stuck(tmp_path: Path) -> Path:
    """The file."""
    path = tmp_path / "stuck.py"
    path.write_text(STUCK, encoding="utf-8")
    return path


@pytest.mark.slow
@pytest.mark.parametrize(("dispatch", "how"), [("resident", "held"), ("native", "released")])
def test_workers_that_were_started_here_end_with_the_run(stuck: Path, dispatch: str, how: str) -> None:
    """In a process of its own, which must come to its end: with the interpreter's lock held a worker says nothing."""
    options = ("--task-timeout", "1", "--dispatch", dispatch, "--out", "mine", "--set", f"code.arguments.how={how}")
    command = [sys.executable, "-m", "breakstep", "run", stuck.name, *options]
    with subprocess.Popen(
        command, cwd=stuck.parent, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True
    ) as program:
        out, err = program.communicate(timeout=120)
        left = left_behind(program.pid)
    assert (program.returncode, out) == (2, "")
    first, second = err.splitlines()
    assert SENTENCE.fullmatch(first.removeprefix("breakstep: "))
    assert second == "breakstep: the profile so far is in mine"
    assert left == []
    profile = read_profile(stuck.parent / "mine")
    assert profile.manifest["status"] == "failed"
    assert SENTENCE.fullmatch(profile.manifest["message"])
    assert len(profile.tasks) > 0


def left_behind(session: int) -> list[psutil.Process]:
    """Processes of a session that are still there after a moment: one that has been killed takes its time to go."""
    deadline = time.monotonic() + 5.0
    while left := [one for one in psutil.process_iter() if _session(one) == session]:
        if time.monotonic() > deadline:
            break
        time.sleep(0.1)
    return left


def _session(process: psutil.Process) -> int:
    """Of a process that is there and not merely waiting to be noticed; 0 for one that has just gone."""
    try:
        return 0 if process.status() == psutil.STATUS_ZOMBIE else os.getsid(process.pid)
    except (ProcessLookupError, PermissionError, psutil.Error):
        return 0


@pytest.mark.parametrize("dispatch", ["resident", "native"])
def test_workers_of_the_user_s_are_named_and_left(client: Client, stuck: Path, dispatch: str) -> None:
    """The kernel ends by itself after a few seconds, so that the workers can serve the next test."""
    with pytest.raises(OverdueError) as caught:
        api.run(
            stuck,
            overrides=["code.arguments.how=sleep", "code.arguments.seconds=3"],
            dispatch=dispatch,  # type: ignore[arg-type]
            task_timeout=1.0,
            address=client.scheduler.address,
            workers=2,
            out=stuck.parent / "mine",
        )
    assert SENTENCE.fullmatch(caught.value.message)
    address = caught.value.details["address"]
    assert caught.value.details["remedy"] == f"the kernel still runs on the worker at {address}; restart that worker"
    assert address in client.run(lambda: None)
    assert read_profile(stuck.parent / "mine").manifest["status"] == "failed"
    assert leftovers(client)["futures"] == NOTHING["futures"]


@pytest.mark.parametrize("dispatch", ["resident", "native"])
def test_a_kernel_that_never_returns_ends_the_run_before_it_begins(stuck: Path, dispatch: str, client: Client) -> None:
    """The small copy that loads kernels meets it first, on a worker and not here."""
    from breakstep.engine.native import NativeDispatch
    from breakstep.engine.program import Program
    from breakstep.engine.resident import ResidentDispatch
    from breakstep.engine.run import RunOptions
    from breakstep.scenario import load_scenario

    always = ["code.arguments.how=sleep", "code.arguments.seconds=3", "code.arguments.tile=0", "code.arguments.cycle=0"]
    scenario = load_scenario(stuck, always)
    program = Program(scenario.problem(), scenario.tile)
    chosen: Dispatch = ResidentDispatch(client, 2) if dispatch == "resident" else NativeDispatch(client, 2)
    result = chosen.run(program, RunOptions(task_timeout=1.0))
    assert isinstance(result.failure, OverdueError)
    assert "step smooth, tile 0, cycle 0, worker 0 at tcp://" in result.failure.message

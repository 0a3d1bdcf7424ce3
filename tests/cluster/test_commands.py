"""The program as a user starts it: real processes, real workers, real key presses.

Few and small, since each starts an interpreter and a cluster; what does not need that is in ``tests/unit/commands``.
"""

from __future__ import annotations

import json
import os
import re
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import closing, suppress
from pathlib import Path

import psutil
import pytest
from distributed import Client

from breakstep.profile.store import read_profile

pty = pytest.importorskip("pty")
pytestmark = pytest.mark.cluster

TINY = ("--set", "mesh.zones=[64, 64]", "--set", "mesh.tile=[32, 32]", "--set", "run.cycles=3")
LONG = ("--set", "mesh.zones=[64, 64]", "--set", "mesh.tile=[16, 16]", "--set", "run.cycles=9000")
"""Minutes of work, so that what ends it early is what the test does."""
VACUUM = (
    *("--set", "mesh.zones=[12]", "--set", "mesh.tile=[3]", "--set", "run.cycles=9", "--set", "time_step.lag=10"),
    *("--set", "time_step.cfl=0.5", "--set", "time_step.first=1"),
    *("--set", "initial.right.pressure=1e-10", "--set", "initial.right.density=1e-8"),
)
"""Gas rushes into near vacuum, faster than the sound that the first time steps were made for."""
PROMPT = 20.0  # seconds from Ctrl-C to the end, on a machine of two busy cores; 1 to 5 were measured
PROGRAM = (sys.executable, "-m", "breakstep")


def breakstep(folder: Path, *arguments: object) -> subprocess.CompletedProcess[str]:
    """Run the program to its end."""
    command = [*PROGRAM, *map(str, arguments)]
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, timeout=120, check=False)


class Terminal:
    """The program in a session of its own, with a terminal for its standard error."""

    def __init__(self, folder: Path, *arguments: str) -> None:
        self.end, theirs = pty.openpty()
        environment = {**os.environ, "TERM": "xterm", "COLUMNS": "120"}
        self.process = subprocess.Popen(
            [*PROGRAM, *arguments],
            cwd=folder,
            env=environment,
            stdout=subprocess.DEVNULL,
            stderr=theirs,
            start_new_session=True,
        )
        os.close(theirs)
        self.shown = ""

    def read_until(self, pattern: str, seconds: float = 60.0) -> None:
        """Read until the pattern has been shown; fails when the program ends or time is up before."""
        deadline = time.monotonic() + seconds
        while not re.search(pattern, self.shown):
            assert time.monotonic() < deadline, self.shown
            more = self._read()
            assert more, self.shown
            self.shown += more

    def _read(self) -> str:
        try:
            return os.read(self.end, 65536).decode(errors="replace")
        except OSError:  # Linux tells the end of a terminal as an error
            return ""

    def press_ctrl_c(self) -> None:
        """As a terminal does: to every process of the group."""
        os.killpg(self.process.pid, signal.SIGINT)

    def wait(self, seconds: float) -> int:
        """Exit code, after all that was shown has been read."""
        began = time.monotonic()
        while more := self._read():
            self.shown += more
            assert time.monotonic() - began < seconds
        return self.process.wait(max(0.1, seconds - (time.monotonic() - began)))

    def workers(self) -> list[psutil.Process]:
        """Worker processes, by the word that starts them."""
        children = psutil.Process(self.process.pid).children(recursive=True)
        return [child for child in children if "spawn_main" in " ".join(child.cmdline())]

    def left_behind(self) -> list[str]:
        """Processes of the session that are still there after a moment, other than those nobody has waited for."""
        for _ in range(50):
            left = [process for process in psutil.process_iter() if self._is_ours(process)]
            if not left:
                return []
            time.sleep(0.1)
        return [str(process) for process in left]

    def _is_ours(self, process: psutil.Process) -> bool:
        try:
            return os.getsid(process.pid) == self.process.pid and process.status() != psutil.STATUS_ZOMBIE
        except (ProcessLookupError, psutil.NoSuchProcess):
            return False

    def close(self) -> None:
        """End all there is; harmless when all have ended."""
        with suppress(ProcessLookupError):
            os.killpg(self.process.pid, signal.SIGKILL)
        self.process.wait()
        os.close(self.end)

    @property
    def sentences(self) -> list[str]:
        """What was shown, without the progress bar and its control sequences."""
        plain = re.sub(r"\x1b\[[0-9;?]*[A-Za-z]", "", self.shown.replace("^C", ""))
        lines = [line.strip() for line in re.split(r"[\r\n]+", plain)]
        return [line for line in lines if line and " cycles " not in line]


@pytest.fixture
def terminal(tmp_path: Path) -> Iterator[type[Terminal]]:
    """Starts the program in an empty folder; it is gone when the test ends."""
    started: list[Terminal] = []

    class Here(Terminal):
        def __init__(self, *arguments: str) -> None:
            super().__init__(tmp_path, *arguments)
            started.append(self)

    yield Here
    for one in started:
        one.close()


@pytest.fixture
def taken_port() -> Iterator[None]:
    """Dask's usual port for its status page is in use, as it is when another cluster runs."""
    with closing(socket.socket()) as holder:
        try:
            holder.bind(("127.0.0.1", 8787))
            holder.listen()
        except OSError:  # somebody else holds it, which serves as well
            pass
        yield


@pytest.mark.usefixtures("taken_port")
def test_a_comparison_says_what_it_should_and_nothing_else(tmp_path: Path) -> None:
    done = breakstep(tmp_path, "compare", "quiet_gas", *TINY, "--pairs", "2", "--json", "both.json", "--out", "both")
    assert (done.returncode, done.stderr) == (0, "")
    lines = done.stdout.splitlines()
    assert "2 workers, resident dispatch, 2 pairs" in " ".join(lines[:4])
    assert len(lines) <= 26
    assert max(map(len, lines)) <= 100
    figures = json.loads((tmp_path / "both.json").read_text(encoding="utf-8"))
    assert figures["identical"] is True
    assert figures["workers"] == 2
    assert max(figures[mode]["closure_error"] for mode in ("lockstep", "tasked")) <= 1e-3
    assert figures["tasked"]["bytes_moved"] > 0


@pytest.mark.parametrize("dispatch", ["resident", "native"])
def test_failing_physics_on_workers_is_one_sentence_and_leaves_its_profile(tmp_path: Path, dispatch: str) -> None:
    done = breakstep(tmp_path, "run", "shock_tube", *VACUUM, "--dispatch", dispatch, "--out", "mine")
    assert (done.returncode, done.stdout) == (2, "")
    first, second = done.stderr.splitlines()
    assert first.startswith("breakstep: step sweep_x, tile 2, cycle 2: the time step 0.03521 s has a CFL number of 1.2")
    assert second == "breakstep: the profile so far is in mine"
    manifest = read_profile(tmp_path / "mine").manifest
    assert (manifest["status"], f"breakstep: {manifest['message']}") == ("failed", first)


def test_no_convergence_ends_the_run(tmp_path: Path) -> None:
    """Found while a reduction arrives and not in a kernel, hence in another part of the dispatch."""
    mesh = ("--set", "mesh.zones=[8, 8]", "--set", "mesh.tile=[4, 4]", "--set", "transport.groups=2")
    limits = ("--set", "transport.at_most=1", "--dispatch", "resident", "--out", "mine")
    done = breakstep(tmp_path, "run", "radiation_wave", *mesh, *limits)
    assert done.returncode == 2
    first, second = done.stderr.splitlines()
    assert first.startswith("breakstep: solve did not converge in cycle 0")
    assert second == "breakstep: the profile so far is in mine"


@pytest.mark.parametrize("dispatch", ["resident", "native", "serial"])
def test_ctrl_c_in_mid_run(terminal: type[Terminal], tmp_path: Path, dispatch: str) -> None:
    program = terminal("run", "quiet_gas", *LONG, "--dispatch", dispatch, "--out", "mine")
    program.read_until(r" [1-9][0-9]*/9000")
    program.press_ctrl_c()
    assert program.wait(PROMPT) == 130
    assert program.sentences == ["breakstep: stopped; the profile so far is in mine"]
    assert program.left_behind() == []
    manifest = read_profile(tmp_path / "mine").manifest
    assert manifest["status"] == "interrupted"
    assert 0 < manifest["cycles"] < 9000
    told = breakstep(tmp_path, "ledger", "mine")
    assert (told.returncode, told.stderr) == (0, "")
    assert f"{dispatch} dispatch, interrupted" in " ".join(told.stdout.splitlines()[:2])


def test_ctrl_c_while_the_cluster_starts(terminal: type[Terminal], tmp_path: Path) -> None:
    """A worker process is there, and in the middle of its imports."""
    program = terminal("run", "quiet_gas", *LONG, "--out", "mine")
    deadline = time.monotonic() + 60.0
    while not program.workers():
        assert time.monotonic() < deadline
        time.sleep(0.02)
    program.press_ctrl_c()
    assert program.wait(PROMPT) == 130
    assert program.sentences == ["breakstep: stopped"]
    assert program.left_behind() == []
    assert list(tmp_path.iterdir()) == []


def test_a_lost_worker_is_told_and_the_profile_can_be_read(terminal: type[Terminal], tmp_path: Path) -> None:
    program = terminal("run", "quiet_gas", *LONG, "--dispatch", "native", "--out", "mine")
    program.read_until(r" [1-9][0-9]*/9000")
    program.workers()[0].kill()
    assert program.wait(60.0) == 2
    first, second = program.sentences
    assert first.startswith("breakstep: worker tcp://127.0.0.1:")
    assert "has gone" in first
    assert second == "breakstep: the profile so far is in mine"
    profile = read_profile(tmp_path / "mine")
    assert profile.manifest["status"] == "failed"
    assert set(profile.tasks["worker"]) <= {0, 1}
    assert len(profile.threads) == 2


def test_a_cluster_of_the_user_s(client: Client, tmp_path: Path) -> None:
    """By address and by file, all of its workers by default, and a sentence for more than there are."""
    address = client.scheduler.address
    file = tmp_path / "scheduler.json"
    client.write_scheduler_file(str(file))
    done = breakstep(tmp_path, "run", "quiet_gas", *TINY, "--address", address, "--out", "mine")
    assert (done.returncode, done.stderr) == (0, "")
    assert " on 4 workers with 4 threads" in " ".join(done.stdout.split())
    done = breakstep(tmp_path, "run", "quiet_gas", *TINY, "--scheduler-file", file, "--workers", "9")
    assert done.returncode == 2
    assert done.stderr == "breakstep: 9 workers were asked for, but the Dask cluster has 4\n"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["mine", "scheduler.json"]


def test_a_cluster_that_does_not_answer(tmp_path: Path) -> None:
    """Dask tries for 5 s; loading the program takes two more."""
    began = time.monotonic()
    done = breakstep(tmp_path, "compare", "quiet_gas", *TINY, "--address", "tcp://127.0.0.1:1")
    assert time.monotonic() - began < 20.0
    assert (done.returncode, done.stdout) == (2, "")
    (only,) = done.stderr.splitlines()
    assert only.startswith("breakstep: no Dask scheduler answers at tcp://127.0.0.1:1 within 5 s")
    assert list(tmp_path.iterdir()) == []

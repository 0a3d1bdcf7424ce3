"""Runs that go well, and runs whose physics does not: what is printed, written and left."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from breakstep.engine import recorded
from breakstep.errors import OutputError, ProfileError
from breakstep.profile.store import read_profile
from breakstep.scenario.load import Scenario
from breakstep.steps.problem import Problem
from tests.toys import Toy, faulty_problem
from tests.unit.commands.conftest import TINY, Shell, files
from tests.unit.report.test_figures import BESIDE_OF_A_RUN, DOCUMENTED_OF_A_RUN

VACUUM = (
    *("--set", "time_step.lag=10", "--set", "time_step.cfl=0.5", "--set", "time_step.first=1", "--set", "run.cycles=9"),
    *("--set", "initial.right.pressure=1e-10", "--set", "initial.right.density=1e-8"),
)
"""Gas rushes into near vacuum, faster than the sound that the first time steps were made for."""


def substitute(monkeypatch: pytest.MonkeyPatch, problem: Problem) -> None:
    """Let every scenario stand for a problem; the toys' mesh of 12 zones is that of TINY."""
    monkeypatch.setattr(Scenario, "problem", lambda self: problem)


def test_a_run(breakstep: Shell) -> None:
    answer = breakstep("run", "shock_tube", *TINY, "--out", "mine", "--json", "mine.json")
    assert (answer.code, answer.err) == (0, "")
    lines = answer.out.splitlines()
    assert lines[0].startswith("shock_tube, tasked: ")
    assert " on 1 worker with 1 thread, 3 cycles, 20 tasks, serial dispatch, complete" in " ".join(lines[:2])
    assert lines[-1] == "Profile: mine"
    figures = json.loads(Path("mine.json").read_text(encoding="utf-8"))
    assert set(figures) == {"scenario", *DOCUMENTED_OF_A_RUN, *BESIDE_OF_A_RUN}
    profile = read_profile(Path("mine"))
    assert figures["digest"] == profile.manifest["digest"] != ""
    assert figures["status"] == "complete"
    assert figures["core_seconds"] == profile.ledger.accounts_seconds


def test_ledger_prints_what_the_run_printed(breakstep: Shell) -> None:
    first = breakstep("run", "shock_tube", *TINY, "--out", "mine", "--json", "first.json")
    second = breakstep("ledger", "mine", "--json", "second.json")
    assert second.out + "Profile: mine\n" == first.out
    assert Path("first.json").read_text(encoding="utf-8") == Path("second.json").read_text(encoding="utf-8")


def test_without_out_each_run_has_a_folder_of_its_own(breakstep: Shell) -> None:
    """Three runs are over within a second or two, so some begin in the same one."""
    told = [breakstep("run", "shock_tube", *TINY).out.splitlines()[-1] for _ in range(3)]
    folders = {line.removeprefix("Profile: ") for line in told}
    assert len(folders) == 3
    assert all(Path(folder).parent == Path("runs") for folder in folders)
    assert all((Path(folder) / "manifest.json").is_file() for folder in folders)


def test_overrides_reach_the_run(breakstep: Shell) -> None:
    answer = breakstep(
        *("run", "shock_tube", *TINY, "--out", "mine"),
        *("--set", "run.cycles=5", "--set", "mesh.tile=[4]", "--set", "initial.left.density=2.0"),
        *("--set", "time_step.lag=1", "--set", "time_step.cfl=0.3"),
    )
    assert answer.code == 0
    profile = read_profile(Path("mine"))
    assert profile.manifest["cycles"] == 5
    assert len(profile.manifest["mesh"]["tiles"]) == 3
    assert profile.manifest["notes"]["lags"] == {"dt": 1}
    assert profile.manifest["scenario"]["resolved"]["initial"]["left"]["density"] == 2.0
    density = profile.fields["gas"].values[0, :, 0, 0]
    assert density[0] == pytest.approx(2.0)  # no signal has crossed six zones in five cycles of CFL number 0.3
    assert not np.allclose(density, 2.0)


@pytest.mark.parametrize(
    ("choice", "on", "count"),
    [("lockstep", {"sweep_x", "dt"}, True), ("tasked", set(), False), ("sweep_x", {"sweep_x"}, True)],
)
def test_barriers_reach_the_run(breakstep: Shell, choice: str, on: set[str], count: bool) -> None:
    assert breakstep("run", "shock_tube", *TINY, "--barriers", choice, "--out", "mine").code == 0
    profile = read_profile(Path("mine"))
    assert profile.manifest["mode"] == choice
    assert set(profile.manifest["barriers"]) == on
    assert ("release" in set(profile.tasks["kind"])) is count
    assert ("barrier" in set(profile.edges["kind"])) is count


def test_kernels_are_warm_before_the_clock_starts(tmp_path: Path) -> None:
    """In a process of its own, since in this one they are loaded already.

    Cold, the first sweep of 80 took 0.90 of the sweeps' processor time, warm 0.06 to 0.07.
    """
    command = [sys.executable, "-m", "breakstep", "run", "shock_tube", *TINY, "--set", "run.cycles=20"]
    subprocess.run([*command, "--out", "mine"], cwd=tmp_path, check=True, capture_output=True, timeout=60)
    intervals = read_profile(tmp_path / "mine").intervals
    sweeps = intervals[(intervals["what"] == "kernel") & (intervals["step"] == "sweep_x")]["cpu_ns"]
    assert len(sweeps) == 80
    assert sweeps.iloc[0] < 0.3 * sweeps.sum()


@pytest.mark.parametrize(
    ("scenario", "options", "sentence"),
    [
        ("shock_tube", VACUUM, "step sweep_x, tile 2, cycle 2: the time step 0.03521 s has a CFL number of 1.2"),
        (
            "flash_cell",
            ("--set", "mesh.zones=[2]", "--set", "mesh.tile=[1]", "--set", "burning.sub_step_limit=3"),
            "step burn, tile 0, cycle 0: burning stopped at zone (0, 0, 0): the sub-step limit was reached; density",
        ),
        (
            "radiation_wave",
            (
                *("--set", "mesh.zones=[8, 8]", "--set", "mesh.tile=[4, 4]", "--set", "transport.groups=2"),
                *("--set", "transport.at_most=1"),
            ),
            "solve did not converge in cycle 0: after 1 iteration its residual is",
        ),
    ],
)
def test_physics_that_fails(breakstep: Shell, scenario: str, options: tuple[str, ...], sentence: str) -> None:
    tiny = TINY if scenario == "shock_tube" else TINY[:2]
    answer = breakstep("run", scenario, *tiny, *options, "--out", "mine", "--json", "mine.json")
    assert answer.code == 2
    assert answer.out == ""
    assert len(answer.complaints) == 2
    assert sentence in answer.complaints[0]
    assert answer.complaints[1] == "breakstep: the profile so far is in mine"
    assert not Path("mine.json").exists()

    told = breakstep("ledger", "mine", "--json", "mine.json")
    assert told.code == 0
    assert "serial dispatch, failed" in told.out.replace("\n", " ")
    assert sentence in told.out.replace("\n", " ")
    assert json.loads(Path("mine.json").read_text(encoding="utf-8"))["status"] == "failed"


@pytest.mark.parametrize(
    ("fault", "sentence"),
    [
        ("nan", "step broken, tile 1, cycle 1: u u is nan in zone (5, 0, 0)"),
        ("infinite", "u u is -inf in zone (3, 0, 0)"),
        ("misshapen", "field 'u' must be float64 of shape"),
        ("mutates", "a function may not change the arrays it is given"),
        ("divides", "the user's function raised ZeroDivisionError"),
    ],
)
def test_a_kernel_that_misbehaves(breakstep: Shell, monkeypatch: pytest.MonkeyPatch, fault: str, sentence: str) -> None:
    substitute(monkeypatch, faulty_problem(fault))
    answer = breakstep("run", "shock_tube", *TINY, "--out", "mine")
    assert answer.code == 2
    assert sentence in answer.complaints[0]
    *shown, last = answer.complaints[1:]
    assert last == "breakstep: the profile so far is in mine"
    assert bool(shown) == (fault in ("mutates", "divides"))  # what the kernel itself raised: with its own lines
    assert all(line.startswith("    ") for line in shown)
    assert not shown or "toys.py" in shown[1]
    manifest = read_profile(Path("mine")).manifest
    assert manifest["status"] == "failed"
    assert sentence in manifest["message"]
    assert manifest["cycles"] == 1


def test_a_comparison_that_fails_leaves_what_there_is(breakstep: Shell, monkeypatch: pytest.MonkeyPatch) -> None:
    substitute(monkeypatch, faulty_problem("nan"))
    answer = breakstep("compare", "shock_tube", *TINY, "--out", "both", "--json", "both.json")
    assert answer.code == 2
    assert answer.complaints[1:] == ["breakstep: the profile so far is in both/lockstep-1"]
    assert "lockstep-1/manifest.json" in files(Path("both"))
    assert not Path("both.json").exists()


@pytest.mark.parametrize("kind", [OutputError, ProfileError])
def test_the_failure_of_a_run_is_told_even_when_its_profile_cannot_be_written(
    breakstep: Shell, monkeypatch: pytest.MonkeyPatch, kind: type[Exception]
) -> None:
    def full(*arguments: object, **options: object) -> None:
        raise kind("the disk is full")

    monkeypatch.setattr(recorded, "write_profile", full)
    substitute(monkeypatch, faulty_problem("nan"))
    answer = breakstep("run", "shock_tube", *TINY)
    assert answer.code == 2
    assert "u u is nan in zone" in answer.complaints[0]
    substitute(monkeypatch, Toy((12,), repeats=False).problem())
    answer = breakstep("run", "shock_tube", *TINY)
    assert (answer.code, answer.err) == (2, "breakstep: the disk is full\n")

"""Running from a program: what an import costs, what the functions take and return, and where they may stand."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest
import xarray as xr

import breakstep
from breakstep import Comparison, Profile
from breakstep.errors import KernelError, ScenarioError
from tests.unit.scenario.own import OWN, written

WORKING = OWN + "\nimport breakstep\n"


@pytest.fixture(autouse=True)
def _elsewhere(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Profiles go into a folder of the test's own."""
    monkeypatch.chdir(tmp_path)


def program(folder: Path, text: str, how: tuple[str, ...] = ("program.py",)) -> subprocess.CompletedProcess[str]:
    """Run a text as a program of its own."""
    (folder / "program.py").write_text(text, encoding="utf-8")
    command = [sys.executable, *how]
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, timeout=120, check=False)


def test_every_public_name_is_there() -> None:
    for name in breakstep.__all__:
        assert getattr(breakstep, name) is not None
    assert set(breakstep.__all__) <= set(dir(breakstep))
    with pytest.raises(AttributeError, match="'breakstep' has no attribute 'nothing'"):
        breakstep.nothing  # noqa: B018


def test_importing_it_loads_nothing_large(tmp_path: Path) -> None:
    """A declaration needs no Dask and no compiler either."""
    large = "{'numba', 'distributed', 'dask', 'pandas', 'xarray', 'pyarrow', 'zarr', 'scipy', 'numpy'}"
    done = program(tmp_path, f"import sys, breakstep\nprint(sorted({large} & set(sys.modules)))\n")
    assert done.stdout == "[]\n"
    done = program(tmp_path, f"import sys\nfrom breakstep import Mesh\nprint(sorted({large} & set(sys.modules)))\n")
    assert done.stdout == "[]\n"


def test_a_run_returns_its_profile(tmp_path: Path) -> None:
    profile = breakstep.run(written(tmp_path), dispatch="serial", barriers="lockstep", out="mine")
    assert isinstance(profile, Profile)
    assert isinstance(profile.fields, xr.Dataset)
    assert isinstance(profile.tasks, pd.DataFrame)
    assert profile.manifest["mode"] == "lockstep"
    assert breakstep.read_profile(tmp_path / "mine").manifest["digest"] == profile.manifest["digest"]


def test_a_setup_made_by_the_program_runs_too(tmp_path: Path) -> None:
    space: dict[str, object] = {}
    exec(OWN, space)
    ready = space["setup"](zones=24)  # type: ignore[operator]
    profile = breakstep.run(ready, dispatch="serial", overrides=["run.cycles=2", "mesh.tile=[6]"])
    assert profile.fields["u"].shape == (1, 24, 1, 1)
    assert profile.manifest["cycles"] == 2
    assert len(profile.manifest["mesh"]["tiles"]) == 4
    assert profile.folder is None or profile.folder.parent == Path("runs")


def test_a_comparison_has_both_and_the_gain(tmp_path: Path) -> None:
    both = breakstep.compare(written(tmp_path), pairs=2, dispatch="serial", out="both")
    assert isinstance(both, Comparison)
    assert both.identical
    assert len(both.lockstep) == len(both.tasked) == 2
    assert both.gain.low is not None
    assert both.gain.high is not None
    assert both.gain.low <= both.gain.high


def test_a_scenario_by_name(tmp_path: Path) -> None:
    small = ["mesh.zones=[12]", "mesh.tile=[3]", "run.cycles=2"]
    assert breakstep.run("shock_tube", overrides=small, dispatch="serial").manifest["scenario"]["name"] == "shock_tube"


def test_what_the_user_s_code_raises_is_shown_with_its_lines(tmp_path: Path) -> None:
    file = written(tmp_path, OWN.replace('return {"u": 0.5', '1 / (call.cycle - 3)\n    return {"u": 0.5'))
    with pytest.raises(KernelError, match=r"step smooth, tile 0, cycle 3: .*ZeroDivisionError") as caught:
        breakstep.run(file, dispatch="serial", out="mine")
    assert "1 / (call.cycle - 3)" in "".join(caught.value.__notes__)
    assert caught.value.details["profile"] == "mine"


@pytest.mark.parametrize("options", [{"pairs": 0}, {"barriers": "nope"}])
def test_faulty_options(tmp_path: Path, options: dict[str, object]) -> None:
    with pytest.raises(breakstep.BreakstepError):
        breakstep.compare(written(tmp_path), dispatch="serial", **options)  # type: ignore[arg-type]
    with pytest.raises(ScenarioError, match="there is no such file"):
        breakstep.run("nowhere.py")


@pytest.mark.parametrize("how", [("program.py",), ("-m", "program")])
def test_a_program_without_a_guard_is_told_so_before_anything_starts(tmp_path: Path, how: tuple[str, ...]) -> None:
    """Its workers would run it again and again."""
    done = program(tmp_path, WORKING + "def main():\n    breakstep.run(setup())\n\nif True:\n    main()\n", how)
    assert done.returncode == 1
    last = done.stderr.splitlines()[-1]
    assert last.startswith("breakstep.errors.ClusterError: ")
    assert "worker processes import this program, and would run it again; put what it runs under a line" in last
    assert 'if __name__ == "__main__":' in last
    assert done.stderr.count("Traceback") == 1
    assert not (tmp_path / "runs").exists()


def test_in_one_thread_no_guard_is_needed(tmp_path: Path) -> None:
    done = program(tmp_path, WORKING + "print(breakstep.run(setup(), dispatch='serial').manifest['cycles'])\n")
    assert (done.stdout, done.stderr) == ("5\n", "")


def test_a_guard_may_stand_within_another_statement(tmp_path: Path) -> None:
    """The workers of the run import the program, and come to nothing there."""
    text = (
        WORKING
        + "with open(__file__):\n    if __name__ == '__main__':\n        check_guard()\n        print('passed')\n"
    )
    done = program(tmp_path, "from breakstep.commands.guarded import check_guard\n" + text)
    assert (done.stdout, done.stderr) == ("passed\n", "")


def test_a_program_in_no_file_is_told_so(tmp_path: Path) -> None:
    """Python calls what it reads from standard input a file, and its workers look for that."""
    text = "from breakstep.commands.guarded import check_guard\ncheck_guard()\n"
    done = subprocess.run([sys.executable, "-"], input=text, cwd=tmp_path, capture_output=True, text=True, check=False)
    assert "worker processes import the program that starts them, and this one is in no file" in done.stderr

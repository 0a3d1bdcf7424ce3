"""Scenarios written in Python: which forms are taken, what may be changed of them, and what is said of faults."""

from __future__ import annotations

import pickle
import subprocess
import sys
from pathlib import Path

import pytest

from breakstep.engine.program import Program
from breakstep.errors import ScenarioError
from breakstep.scenario import load_scenario
from breakstep.scenario.code import CodeScenario, code_target
from tests.unit.scenario.own import OWN, written


def refused(*arguments: object) -> ScenarioError:
    """The error that loading ends with."""
    with pytest.raises(ScenarioError) as caught:
        load_scenario(*arguments)  # type: ignore[arg-type]
    return caught.value


@pytest.mark.parametrize(
    ("text", "table"),
    [
        ("mine.py", {"file": "mine.py"}),
        ("some/where/mine.py:other", {"file": "some/where/mine.py", "name": "other"}),
        ("package.module", {"module": "package.module"}),
        ("module:other", {"module": "module", "name": "other"}),
        ("ember_field", None),
        ("ember_field.toml", None),
        ("../mine.toml", None),
        ("./mine", None),
    ],
)
def test_what_is_taken_for_code(text: str, table: dict[str, str] | None) -> None:
    assert code_target(text) == table


def test_a_file_is_a_scenario(tmp_path: Path) -> None:
    scenario = load_scenario(written(tmp_path))
    assert isinstance(scenario, CodeScenario)
    assert (scenario.name, scenario.title, scenario.tile) == ("own", "an invented one", (4,))
    assert (scenario.run.cycles, scenario.run.workers, scenario.run.window) == (5, 3, 4)
    assert scenario.problem().mesh.shape == (12,)
    assert scenario.remarks == ()


def test_a_function_of_another_name_or_a_finished_setup(tmp_path: Path) -> None:
    file = written(tmp_path, OWN + "\nready = setup(zones=8)\ndef other():\n    return setup(zones=20)\n")
    assert load_scenario(f"{file}:other").problem().mesh.shape == (20,)
    assert load_scenario(f"{file}:ready").problem().mesh.shape == (8,)


def test_a_module_is_a_scenario(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    written(tmp_path, name="module_of_mine.py")
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(sys, "path", list(sys.path))
    assert load_scenario("module_of_mine:setup").problem().mesh.shape == (12,)


def test_files_beside_it_can_be_imported(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "path", list(sys.path))
    (tmp_path / "beside_mine.py").write_text("ZONES = 16\n", encoding="utf-8")
    file = written(tmp_path, OWN.replace("zones=12", "zones=beside_mine.ZONES") + "", "import beside_mine\n")
    assert load_scenario(file).problem().mesh.shape == (16,)


def test_files_beside_it_travel_and_are_loaded_anew_when_they_change(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Another process unpickles functions of theirs, with the files gone; here the changed text is what runs."""
    monkeypatch.setattr(sys, "path", list(sys.path))
    (tmp_path / "deeper_of_mine.py").write_text("SHARE = 0.5\n", encoding="utf-8")
    middle = tmp_path / "smoothing_of_mine.py"
    text = "from deeper_of_mine import SHARE\nimport numpy as np\ndef start(tile, mesh):\n"
    text += "    return {'u': SHARE * np.ones((1, *tile.shape))}\n"
    middle.write_text(text, encoding="utf-8")
    file = written(tmp_path, OWN.replace("lie([step]), start", "lie([step]), smoothing_of_mine.start"))
    file.write_text("import smoothing_of_mine\n" + file.read_text(encoding="utf-8"), encoding="utf-8")

    first = load_scenario(file)
    assert [Path(one.path).stem for one in first.problem().sources[0].beside] == ["deeper_of_mine", "smoothing_of_mine"]
    program = Program(first.problem(), first.tile)
    assert float(program.initial(1)["u"].sum()) == 2.0
    packed = pickle.dumps(program)
    (tmp_path / "deeper_of_mine.py").write_text("SHARE = 0.75\n", encoding="utf-8")
    other = load_scenario(file)
    assert other.resolved()["code"]["digest"] != first.resolved()["code"]["digest"]
    assert float(Program(other.problem(), other.tile).initial(1)["u"].sum()) == 3.0
    assert unpacked_elsewhere(packed, tmp_path) == 2.0


def unpacked_elsewhere(packed: bytes, folder: Path) -> float:
    """The sum of a tile's initial state in a process that can see none of the files."""
    (folder / "program").write_bytes(packed)
    for file in folder.glob("*.py"):
        file.unlink()
    read = "import pickle, sys; p = pickle.load(open('program', 'rb')); print(float(p.initial(1)['u'].sum()))"
    environment = {"PATH": "", "PYTHONPATH": ":".join(sys.path), "XDG_CACHE_HOME": str(folder / "cache")}
    done = subprocess.run(
        [sys.executable, "-c", read], cwd=folder, env=environment, capture_output=True, text=True, check=False
    )
    assert done.stderr == ""
    assert (folder / "cache" / "breakstep" / "code").is_dir()
    return float(done.stdout)


def test_a_file_beside_it_hides_no_module_of_python_s(tmp_path: Path) -> None:
    (tmp_path / "random.py").write_text("raise RuntimeError('hidden')\n", encoding="utf-8")
    scenario = load_scenario(written(tmp_path, before="import random\nassert random.random() < 1.0\n"))
    assert scenario.problem().sources[0].beside == ()
    (remark,) = scenario.remarks
    assert remark.startswith(f"{tmp_path / 'random.py'} is not imported: Python finds another module by that name")


def test_imports_that_fail_for_a_hidden_reason(tmp_path: Path) -> None:
    (tmp_path / "profile.py").write_text("STEP = 1.0\n", encoding="utf-8")
    error = refused(written(tmp_path, "from profile import STEP\n"))
    assert "profile.py is not what Python imports by that name, which is taken" in error.message
    error = refused(written(tmp_path, "from .profile import STEP\n"))
    assert "a file given by its path belongs to no package: name it as package.module" in error.message


def test_overrides(tmp_path: Path) -> None:
    file = written(tmp_path)
    scenario = load_scenario(file, ["run.cycles=7", "mesh.tile=[6]", "code.arguments.zones=24", "run.threads=2"])
    assert scenario.problem().cycles == 7
    assert scenario.problem().mesh.shape == (24,)
    assert (scenario.tile, scenario.run.threads) == ((6,), 2)


def test_a_toml_file_points_at_code(tmp_path: Path) -> None:
    written(tmp_path)
    toml = tmp_path / "mine.toml"
    toml.write_text(
        "name = 'mine'\n[code]\nfile = 'own.py'\n[code.arguments]\nzones = 16\n[mesh]\ntile = [8]\n[run]\ncycles = 2\n",
        encoding="utf-8",
    )
    scenario = load_scenario(toml)
    assert (scenario.name, scenario.tile, scenario.run.cycles, scenario.run.workers) == ("mine", (8,), 2, 3)
    assert scenario.problem().mesh.shape == (16,)


def test_a_resolved_one_loads_as_itself(tmp_path: Path) -> None:
    from breakstep.scenario import any_scenario_from

    file = written(tmp_path)
    scenario = load_scenario(file, ["run.cycles=7", "code.arguments.zones=24"])
    again = any_scenario_from(scenario.resolved(), source="x")
    assert again.resolved() == scenario.resolved()
    assert again.remarks == ()
    written(tmp_path, OWN + "# changed\n")
    (remark,) = any_scenario_from(scenario.resolved(), source="x").remarks
    assert "has changed since" in remark


@pytest.mark.parametrize(
    ("text", "sentence", "line"),
    [
        ("def setup(:\n", "own.py cannot be imported: SyntaxError", "def setup(:"),
        (
            "import nowhere_at_all\n",
            "cannot be imported: ModuleNotFoundError: No module named",
            "import nowhere_at_all",
        ),
        ("x = 1 / 0\n", "own.py cannot be imported: ZeroDivisionError: division by zero", "x = 1 / 0"),
        ("raise SystemExit(3)\n", "own.py cannot be imported: SystemExit: 3", "raise SystemExit(3)"),
        ("def stup():\n    pass\n", "own.py offers no 'setup': expected a function that returns a breakstep.Setup", ""),
        ("setup = 3\n", "expected setup to be a breakstep.Setup, came int", ""),
        ("def setup():\n    return 3\n", "expected setup() to be a breakstep.Setup, came int", ""),
        ("def setup(n):\n    pass\n", "code.arguments: setup() takes n, but: missing a required argument: 'n'", ""),
        ("def setup():\n    return [][1]\n", "setup() failed: IndexError: list index out of range", "return [][1]"),
        (
            "import breakstep\ndef setup():\n    return breakstep.Mesh((0,), (1.0,), ())\n",
            "setup() failed: shape, spacing and edges of a mesh need one entry",
            "return breakstep.Mesh(",
        ),
    ],
)
def test_faulty_code(tmp_path: Path, text: str, sentence: str, line: str) -> None:
    """One sentence, and the user's own lines where there are any: none of ours, none of the import machinery's."""
    error = refused(written(tmp_path, text))
    assert sentence in error.message
    assert "\n" not in error.message
    shown = str(error.details.get("traceback", ""))
    assert line in shown
    assert "importlib" not in shown
    assert "src/breakstep" not in shown


def test_a_problem_is_no_setup_yet(tmp_path: Path) -> None:
    error = refused(written(tmp_path, OWN + "\ndef bare():\n    return setup().problem\n").as_posix() + ":bare")
    assert "came Problem; put it into one: Setup(problem, tile=(...))" in error.message


def test_files_and_modules_that_are_not_there(tmp_path: Path) -> None:
    assert refused(tmp_path / "nowhere.py").message.endswith("nowhere.py: there is no such file")
    assert "no module named 'nowhere_at_all' can be imported here" in refused("nowhere_at_all.deeper").message


@pytest.mark.parametrize(
    ("override", "sentence"),
    [
        ("run.cylces=3", "--set: run.cylces: unknown key; did you mean run.cycles?"),
        ("run.cycles=0", "--set: run.cycles: expected a number of at least 1, came 0"),
        ("mesh.zones=[3]", "--set: mesh.zones: unknown key"),
        ("mesh.tile=[5000]", "a tile 5000 zones long does not fit 12 zones along x"),
        ("code.arguments.zonse=3", "code.arguments: setup() takes zones, but: got an unexpected keyword argument"),
    ],
)
def test_faulty_overrides(tmp_path: Path, override: str, sentence: str) -> None:
    assert sentence in refused(written(tmp_path), [override]).message


def test_the_program_brings_its_code_along(tmp_path: Path) -> None:
    """A process that never saw the file, even after it is gone, unpickles the program and can call its functions."""
    file = written(tmp_path)
    scenario = load_scenario(file)
    program = Program(scenario.problem(), scenario.tile)
    expected = float(program.initial(1)["u"].sum())
    assert unpacked_elsewhere(pickle.dumps(program), tmp_path) == expected

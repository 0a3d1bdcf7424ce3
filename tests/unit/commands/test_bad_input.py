"""What a user gets for a mistake: one clear sentence for each fault, exit code 2, and nothing made or lost."""

from __future__ import annotations

from pathlib import Path

import pytest

from breakstep.engine import cluster
from tests.unit.commands.conftest import TINY, Shell, files, refused

COMMANDS = ("run", "compare")


def nothing_made() -> None:
    """The current folder, in which the call was made, is as empty as it was before."""
    assert files(Path.cwd()) == []


@pytest.mark.parametrize("command", COMMANDS)
def test_an_unknown_scenario(breakstep: Shell, command: str) -> None:
    refused(breakstep(command, "ember_feild"), "no scenario is named 'ember_feild'; did you mean ember_field?")
    refused(breakstep(command, "nowhere.toml"), "nowhere.toml: there is no such file")
    nothing_made()


@pytest.mark.parametrize("command", COMMANDS)
def test_no_scenario(breakstep: Shell, command: str) -> None:
    refused(breakstep(command), "name a scenario")


@pytest.mark.parametrize(
    ("override", "sentence"),
    [
        ("run.cylces=3", "--set: run.cylces: unknown key; did you mean run.cycles?"),
        ("run.cycles=abc", '--set: run.cycles: expected a whole number, came "abc"'),
        ("run.cycles=0", "--set: run.cycles: expected a number of at least 1, came 0"),
        ("mesh.tile=[7000]", "--set: mesh.tile: a tile 7000 zones long does not fit 400 zones along x"),
        ("initial.left.density=-1", "--set: initial.left.density: expected a number above 0, came -1"),
        ("time_step.cfl=40", "--set: time_step.cfl: expected a number of at most 0.9, came 40"),
        ("run.cycles", "--set: run.cycles: expected key.path=value"),
        ("", "--set: expected key.path=value"),
    ],
)
def test_a_faulty_override(breakstep: Shell, override: str, sentence: str) -> None:
    refused(breakstep("run", "shock_tube", "--set", override), sentence)
    nothing_made()


def test_all_faults_are_told_at_once(breakstep: Shell) -> None:
    faults = ("run.cycles=abc", "mesh.tile=[7000]", "initial.left.density=-1", "run.cylces=3")
    answer = breakstep("compare", "shock_tube", *(part for fault in faults for part in ("--set", fault)))
    refused(
        answer,
        "--set: run.cylces: unknown key",
        "--set: run.cycles: expected a whole number",
        "--set: initial.left.density: expected a number above 0",
        "--set: mesh.tile: a tile 7000 zones long",
    )
    nothing_made()


def test_a_faulty_file_is_told_with_file_and_key(breakstep: Shell, tmp_path: Path) -> None:
    mine = tmp_path / "mine.toml"
    mine.write_text("name = 'mine'\n[mesh]\nzones = [4,,]\n", encoding="utf-8")
    refused(breakstep("run", mine), "mine.toml: line 3, column 12: expected TOML, but: ")
    mine.write_text("name = 'mine'\n[mesh]\nzones = 'four'\n", encoding="utf-8")
    answer = breakstep("run", mine)
    assert answer.code == 2
    assert any('mine.toml: mesh.zones: expected a list, came "four"' in line for line in answer.complaints)
    assert any("mine.toml: run" in line for line in answer.complaints)
    assert all(line.startswith("breakstep: mine.toml: ") for line in answer.complaints)
    nothing_made()


@pytest.mark.parametrize("command", COMMANDS)
@pytest.mark.parametrize("name", ["nope", "sweep_x,nope"])
def test_an_unknown_barrier_lists_the_choices(breakstep: Shell, command: str, name: str) -> None:
    answer = breakstep(command, "shock_tube", "--barriers", name)
    refused(answer, "no barrier is called nope; choose from lockstep, tasked or a list of dt, sweep_x")
    nothing_made()


@pytest.mark.parametrize("name", ["", ",", " , "])
def test_no_barrier_at_all(breakstep: Shell, name: str) -> None:
    refused(breakstep("compare", "shock_tube", "--barriers", name), "expected lockstep, tasked or a list of names")


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (("run", "shock_tube", "--workers", "0"), "Invalid value for '--workers': 0 is not in the range x>=1."),
        (("run", "shock_tube", "--workers", "two"), "Invalid value for '--workers': 'two' is not a valid integer"),
        (("run", "shock_tube", "--threads", "-1"), "Invalid value for '--threads'"),
        (("run", "shock_tube", "--dispatch", "quick"), "'quick' is not one of 'resident', 'native', 'serial'"),
        (("run", "shock_tube", "--placement", "here"), "Invalid value for '--placement': 'here' is not one of"),
        (("run", "shock_tube", "--memory-limit", "-5"), "Invalid value for '--memory-limit'"),
        (("run", "shock_tube", "--checkpoint-every", "0"), "Invalid value for '--checkpoint-every'"),
        (("run", "shock_tube", "blast"), "unexpected extra argument"),
        (("compare", "shock_tube", "--pairs", "0"), "Invalid value for '--pairs': 0 is not in the range x>=1."),
        (("compare", "shock_tube", "--pair", "3"), "No such option '--pair'. Did you mean '--pairs'?"),
        (("ledger",), "Missing argument 'PROFILE'"),
        (("legder", "x"), "No such command 'legder'"),
        ((*("run", "shock_tube"), *TINY, "--workers", "2"), "the serial dispatch runs in one thread"),
        ((*("run", "shock_tube"), *TINY, "--threads", "2"), "leave --threads out"),
        ((*("compare", "shock_tube"), *TINY, "--address", "tcp://127.0.0.1:1"), "leave --address out"),
        ((*("run", "shock_tube"), *TINY, "--scheduler-file", "s.json"), "leave --scheduler-file out"),
        (("run", "shock_tube", "--address", "tcp://127.0.0.1:1", "--scheduler-file", "s"), "give one of them"),
        (("run", "shock_tube", "--address", "tcp://127.0.0.1:1", "--threads", "2"), "leave --threads out"),
    ],
)
def test_bad_options(breakstep: Shell, arguments: tuple[str, ...], sentence: str) -> None:
    """The sentence stands behind a line or two on usage."""
    answer = breakstep(*arguments)
    assert answer.code == 2
    assert answer.out == ""
    assert answer.complaints[-1].startswith("Error: ")
    assert sentence in answer.complaints[-1]
    assert answer.complaints[0].startswith("Usage: breakstep")
    assert len(answer.complaints) == 4
    nothing_made()


def test_checkpoints_need_the_resident_dispatch(breakstep: Shell) -> None:
    refused(breakstep("run", "shock_tube", *TINY, "--checkpoint-every", "1"), "checkpoints need the resident dispatch")
    nothing_made()


@pytest.mark.parametrize("command", ["run", "compare"])
@pytest.mark.parametrize(
    ("options", "sentence"),
    [
        (("--dispatch", "native", "--memory-limit", "5"), "a memory limit needs the resident dispatch"),
        (("--dispatch", "native", "--placement", "shared"), "the placement 'shared' needs the resident dispatch"),
        (("--dispatch", "resident", "--placement", "dask"), "the placement 'dask' needs the native dispatch"),
    ],
)
def test_options_that_a_dispatch_would_ignore(
    breakstep: Shell, command: str, options: tuple[str, ...], sentence: str
) -> None:
    answer = breakstep(command, "shock_tube", *options)
    assert answer.code == 2
    assert sentence in answer.err


def test_resuming_from_nothing(breakstep: Shell) -> None:
    refused(breakstep("run", "--resume", "gone"), "gone holds no complete checkpoint")
    refused(breakstep("run", "shock_tube", "--resume", "gone"), "leave SCENARIO out")


@pytest.mark.parametrize("command", COMMANDS)
def test_an_output_folder_that_cannot_be(breakstep: Shell, tmp_path: Path, command: str) -> None:
    """Below a regular file nobody can make a folder, whatever their rights."""
    file = tmp_path / "file"
    file.write_text("precious", encoding="utf-8")
    answer = breakstep(command, "shock_tube", *TINY, "--out", file / "below")
    refused(answer, f"the folder {file / 'below'} cannot be written (Not a directory); choose another with --out")
    refused(breakstep(command, "shock_tube", *TINY, "--out", file), "cannot be written (File exists)")
    assert file.read_text(encoding="utf-8") == "precious"
    refused(breakstep(command, "shock_tube", *TINY, "--out", "x" * 300), "File name too long")
    nothing_made()


@pytest.mark.parametrize("command", COMMANDS)
def test_an_output_folder_that_is_used(breakstep: Shell, tmp_path: Path, command: str) -> None:
    used = tmp_path / "used"
    used.mkdir()
    (used / "thesis.tex").write_text("precious", encoding="utf-8")
    answer = breakstep(command, "shock_tube", *TINY, "--out", used)
    refused(answer, f"the folder {used} is not empty; choose another with --out, or remove it")
    assert files(used) == ["thesis.tex"]


def test_an_empty_output_folder_is_welcome(breakstep: Shell, tmp_path: Path) -> None:
    empty = tmp_path / "empty"
    empty.mkdir()
    assert breakstep("run", "shock_tube", *TINY, "--out", empty).code == 0
    assert (empty / "manifest.json").is_file()


@pytest.mark.parametrize("command", COMMANDS)
def test_a_json_file_that_cannot_be_written(breakstep: Shell, tmp_path: Path, command: str) -> None:
    file = tmp_path / "file"
    file.write_text("precious", encoding="utf-8")
    for target in (file / "x.json", tmp_path / "gone" / "x.json", tmp_path, "y" * 300):
        refused(breakstep(command, "shock_tube", *TINY, "--json", target), f"--json {target} cannot be written")
    assert file.read_text(encoding="utf-8") == "precious"
    nothing_made()


def test_a_json_file_is_kept_until_there_are_figures(breakstep: Shell, tmp_path: Path) -> None:
    old, new = tmp_path / "old.json", tmp_path / "new.json"
    old.write_text("{}", encoding="utf-8")
    for target in (old, new):
        assert breakstep("run", "shock_tube", *TINY, "--json", target, "--out", tmp_path).code == 2
    assert old.read_text(encoding="utf-8") == "{}"
    assert not new.exists()


def test_a_scheduler_file_that_is_not_there(breakstep: Shell) -> None:
    refused(breakstep("run", "shock_tube", "--scheduler-file", "gone.json"), "there is no scheduler file gone.json")
    nothing_made()


@pytest.mark.parametrize("content", ["", "{}", "[1]", '"tcp://127.0.0.1:1"', "\x00\xff"])
def test_a_scheduler_file_that_is_none(breakstep: Shell, tmp_path: Path, content: str) -> None:
    file = tmp_path / "scheduler.json"
    file.write_bytes(content.encode("latin-1"))
    answer = breakstep("compare", "shock_tube", "--scheduler-file", file)
    refused(answer, f"{file} is no scheduler file: expected JSON with the key address")
    nothing_made()


@pytest.mark.parametrize("address", ["nonsense", "tcp://127.0.0.1", "tcp://127.0.0.1:port", ""])
def test_an_address_that_is_none(breakstep: Shell, address: str) -> None:
    refused(breakstep("run", "shock_tube", "--address", address), "is no address of a Dask scheduler")
    nothing_made()


@pytest.mark.parametrize("error", [RuntimeError("Nanny failed to start."), OSError("no more processes")])
def test_workers_that_do_not_start(breakstep: Shell, monkeypatch: pytest.MonkeyPatch, error: Exception) -> None:
    def fails(**options: object) -> None:
        raise error

    monkeypatch.setattr(cluster, "LocalCluster", fails)
    answer = breakstep("run", "shock_tube", "--workers", "64")
    refused(answer, f"this machine does not start 64 worker processes ({error}); ask for fewer")
    nothing_made()


def test_names_that_no_file_system_takes(breakstep: Shell) -> None:
    long = "x" * 300
    for arguments in (("ledger", long), ("run", f"{long}.toml"), ("run", "--resume", long)):
        refused(breakstep(*arguments), "cannot be read (File name too long)")
    refused(breakstep("run", "shock_tube", "--scheduler-file", long), "File name too long")


def test_dilation_needs_steps_by_timer(breakstep: Shell) -> None:
    for command in ("compare", "run"):
        refused(breakstep(command, "shock_tube", "--dilate", "2"), "--dilate stretches the waits of steps by timer")


def test_faults_of_timer_records_are_said_together(breakstep: Shell, tmp_path: Path) -> None:
    (tmp_path / "r.csv").write_text("rank,step,cycle,seconds\n0,burn,0,0.1\n1,burn,0,-1\n0,burn,1,0.1\n1,brun,1,0.1\n")
    text = 'name = "s"\n[run]\ncycles = 2\n[timers]\nfile = "r.csv"\nranks = [2]\n[[timers.steps]]\nname = "burn"\n'
    (tmp_path / "s.toml").write_text(text)
    refused(
        breakstep("run", tmp_path / "s.toml"),
        "s.toml: timers.file: r.csv: seconds: expected numbers from 0 to 1e+06, came -1.0 in line 3",
        "r.csv: step: expected burn, came brun in line 5; did you mean burn?",
        "r.csv: there is no record of rank 1, step burn, cycle 1",
    )


@pytest.mark.parametrize("seconds", ["nan", "inf", "1e300"])
@pytest.mark.parametrize("command", COMMANDS)
def test_a_task_timeout_that_no_clock_could_measure(breakstep: Shell, command: str, seconds: str) -> None:
    """NaN would pass for a limit that is never reached; what is too large overflows the timer that ends a run."""
    given = breakstep(command, "shock_tube", *TINY, "--task-timeout", seconds)
    refused(given, "a task timeout needs seconds above 0 and up to 1e+09, not")
    nothing_made()

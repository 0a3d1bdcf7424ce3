"""The help texts name every command and option, and the program can be called as a module."""

from __future__ import annotations

import re
import subprocess
import sys

import pytest

from breakstep.cli import COMMANDS, cli
from tests.unit.commands.conftest import Shell

SHARED = (
    *("--set", "--workers", "--threads", "--dilate", "--placement", "--dispatch", "--memory-limit"),
    *("--address", "--scheduler-file", "--out", "--json"),
)
OPTIONS = {
    "run": (*SHARED, "--barriers", "--checkpoint-every", "--resume"),
    "compare": (*SHARED, "--pairs", "--barriers"),
    "ledger": ("--json",),
    "why": ("--tile", "--cycle", "--step", "--json"),
    "forecast": ("--machine", "--workers", "--what-if", "--check", "--json"),
    "advise": ("--machine", "--workers", "--what-if", "--verify", "--pairs", "--out", "--json"),
    "kernels": ("--json", "--quick"),
    "simulator": ("--json", "--quick"),
}


def test_help_names_every_command(breakstep: Shell) -> None:
    answer = breakstep("--help")
    assert (answer.code, answer.err) == (0, "")
    for name in COMMANDS:
        assert re.search(rf"^  {name} ", answer.out, re.MULTILINE)


@pytest.mark.parametrize("name", sorted(OPTIONS))
def test_help_of_a_command_names_its_options(breakstep: Shell, name: str) -> None:
    for flag in ("--help", "-h"):
        answer = breakstep(name, flag)
        assert (answer.code, answer.err) == (0, "")
        for option in OPTIONS[name]:
            assert re.search(rf"^  {option} ", answer.out, re.MULTILINE), option


@pytest.mark.parametrize("name", COMMANDS)
def test_every_option_has_a_sentence(name: str) -> None:
    command = cli.get_command(None, name)  # type: ignore[arg-type]
    assert command is not None
    assert command.help
    for parameter in command.params:
        if parameter.param_type_name == "option":
            assert getattr(parameter, "help", None), parameter.name


def test_no_command_shows_the_help_and_is_a_mistake(breakstep: Shell) -> None:
    answer = breakstep()
    assert answer.code == 2
    assert "Usage: breakstep [OPTIONS] COMMAND" in answer.err


def test_version(breakstep: Shell) -> None:
    answer = breakstep("--version")
    assert answer.code == 0
    assert re.search(r"\d+\.\d+", answer.out)


def test_as_a_module_and_without_loading_what_help_does_not_need() -> None:
    """Dask and numba take longer to load than all the rest together."""
    code = "import sys, breakstep.cli; print([name for name in ('distributed', 'numba') if name in sys.modules])"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60)
    assert found.stdout.strip() == "[]"
    found = subprocess.run(
        [sys.executable, "-m", "breakstep", "ledger", "gone"], capture_output=True, text=True, timeout=60, check=False
    )
    assert found.returncode == 2
    assert found.stderr == "breakstep: gone: expected a profile folder, there is none; check the path\n"

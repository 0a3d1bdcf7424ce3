"""Ctrl-C, too little memory, and errors of our own, as far as they can be tried in one process."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
from collections.abc import Iterator, Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from breakstep.commands import ledger
from breakstep.engine import recorded
from breakstep.engine.interrupts import children_deaf, interrupts_counted, interrupts_held
from breakstep.engine.serial import SerialDispatch
from breakstep.profile.store import read_profile
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import lie
from breakstep.steps.step import Array, Call, Read, Step
from tests.toys import Toy, faulty_problem
from tests.unit.commands.conftest import TINY, Shell
from tests.unit.commands.test_runs import substitute


def press() -> None:
    """Ctrl-C in this process alone."""
    os.kill(os.getpid(), signal.SIGINT)


@pytest.fixture(autouse=True)
def handler() -> Iterator[None]:
    """Python's own handler during the test, and whatever was there behind it."""
    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    yield
    assert signal.signal(signal.SIGINT, before) is signal.default_int_handler


def press_in_cycle_2(arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
    """A kernel during which the user presses Ctrl-C, as a signal."""
    if call.cycle == 2 and call.tile == 1:
        press()
    return {"u": arrays["u"]}


def interrupting_problem() -> Problem:
    """It stops in its third cycle."""
    step = Step("pressing", press_in_cycle_2, (Read("u"),), ("u",))
    return replace(Toy((12,), cycles=5).problem(), splitting=lie([step]))


def test_ctrl_c_leaves_a_readable_profile(breakstep: Shell, monkeypatch: pytest.MonkeyPatch) -> None:
    substitute(monkeypatch, faulty_problem("interrupts"))
    answer = breakstep("run", "shock_tube", *TINY, "--out", "mine", "--json", "mine.json")
    assert answer.code == 130
    assert answer.out == ""
    assert answer.err == "breakstep: stopped; the profile so far is in mine\n"
    assert not Path("mine.json").exists()
    told = breakstep("ledger", "mine")
    assert told.code == 0
    assert "serial dispatch, interrupted stopped by the user" in told.out.replace("\n", " ")
    assert read_profile(Path("mine")).manifest["cycles"] == 1


def test_ctrl_c_ends_a_comparison(breakstep: Shell, monkeypatch: pytest.MonkeyPatch) -> None:
    substitute(monkeypatch, faulty_problem("interrupts"))
    answer = breakstep("compare", "shock_tube", *TINY, "--out", "both")
    assert (answer.code, answer.out) == (130, "")
    assert answer.err == "breakstep: stopped; the profile so far is in both/lockstep-1\n"


def test_ctrl_c_while_the_profile_is_written_waits(breakstep: Shell, monkeypatch: pytest.MonkeyPatch) -> None:
    """An hour's run is not lost to an impatient key press at its end."""
    write = recorded.write_profile

    def write_slowly(*arguments: Any) -> Any:
        press()
        press()
        return write(*arguments)

    monkeypatch.setattr(recorded, "write_profile", write_slowly)
    substitute(monkeypatch, Toy((12,), repeats=False).problem())
    answer = breakstep("run", "shock_tube", *TINY, "--out", "mine")
    assert answer.code == 130
    assert answer.err.strip() == "breakstep: stopped"
    assert read_profile(Path("mine")).manifest["status"] == "complete"


@pytest.mark.parametrize(("more", "there"), [(1, True), (2, False)])
def test_ctrl_c_again_while_an_interrupted_run_is_written(
    breakstep: Shell, monkeypatch: pytest.MonkeyPatch, more: int, there: bool
) -> None:
    """The second press loses nothing; the third is meant."""
    write = recorded.write_profile

    def write_slowly(*arguments: Any) -> Any:
        for _ in range(more):
            press()
        return write(*arguments)

    monkeypatch.setattr(recorded, "write_profile", write_slowly)
    substitute(monkeypatch, interrupting_problem())
    answer = breakstep("run", "shock_tube", *TINY, "--out", "mine")
    assert answer.code == 130
    assert Path("mine", "manifest.json").exists() is there
    if there:
        assert answer.err == "breakstep: stopped; the profile so far is in mine\n"
        assert read_profile(Path("mine")).manifest["status"] == "interrupted"
    else:
        assert answer.err.strip() == "breakstep: stopped"


def test_where_ctrl_c_is_not_heard_it_stays_unheard() -> None:
    """As in a run put into the background with nohup."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    with interrupts_counted():
        press()
    assert signal.signal(signal.SIGINT, signal.default_int_handler) is signal.SIG_IGN


@pytest.mark.parametrize(("error", "sentence"), [(MemoryError(), "suffice;"), (MemoryError("9 TB"), "(9 TB);")])
def test_too_little_memory_is_a_sentence(
    breakstep: Shell, monkeypatch: pytest.MonkeyPatch, error: MemoryError, sentence: str
) -> None:
    monkeypatch.setattr(SerialDispatch, "run", lambda *arguments: (_ for _ in ()).throw(error))
    answer = breakstep("run", "shock_tube", *TINY)
    assert answer.code == 2
    assert answer.err.startswith("breakstep: this machine's memory does not suffice")
    assert sentence in answer.err
    assert len(answer.complaints) == 1


@pytest.mark.parametrize(
    "error", [RuntimeError("a bug"), AssertionError("a bug"), TypeError("a bug"), OSError("a bug")]
)
def test_a_defect_of_ours_keeps_its_traceback(
    breakstep: Shell, monkeypatch: pytest.MonkeyPatch, error: Exception
) -> None:
    def broken(*arguments: object) -> None:
        raise error

    monkeypatch.setattr(ledger, "ledger_lines", broken)
    substitute(monkeypatch, Toy((12,), repeats=False).problem())
    assert breakstep("run", "shock_tube", *TINY, "--out", "mine").code == 0
    with pytest.raises(type(error), match="a bug"):
        breakstep("ledger", "mine")


def test_held_interrupts_come_at_the_end() -> None:
    done = []
    with pytest.raises(KeyboardInterrupt), interrupts_held():  # noqa: PT012  (the block goes on behind the press)
        press()
        done.append("all")
    assert done == ["all"]
    with interrupts_held():
        pass


def test_an_error_goes_before_a_held_interrupt() -> None:
    with pytest.raises(ValueError, match="first"), interrupts_held():  # noqa: PT012  (both happen in it)
        press()
        raise ValueError("first")


def test_elsewhere_than_in_the_main_thread_nothing_is_held() -> None:
    entered = []

    def enter() -> None:
        with interrupts_held():
            entered.append(signal.getsignal(signal.SIGINT))

    thread = threading.Thread(target=enter)
    thread.start()
    thread.join()
    assert entered == [signal.default_int_handler]


def test_children_are_deaf_and_their_parent_is_not_for_long() -> None:
    """The mask that a thread and a process inherit; behind the block ours is as it was."""
    ask = "import signal; print(signal.SIGINT in signal.pthread_sigmask(signal.SIG_BLOCK, ()))"
    before = signal.pthread_sigmask(signal.SIG_BLOCK, ())
    masks = []
    with children_deaf():
        thread = threading.Thread(target=lambda: masks.append(signal.pthread_sigmask(signal.SIG_BLOCK, ())))
        thread.start()
        thread.join()
        told = subprocess.run([sys.executable, "-c", ask], capture_output=True, text=True, check=True, timeout=60)
    assert signal.SIGINT in masks[0]
    assert told.stdout == "True\n"
    assert signal.pthread_sigmask(signal.SIG_BLOCK, ()) == before
    assert signal.SIGINT not in before


def test_ctrl_c_while_kernels_compile_ends_the_run_before_it_began(
    breakstep: Shell, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The small copy that warms up has one tile; compiling may take a minute, and the run must not follow."""
    substitute(monkeypatch, faulty_problem("interrupts", tile=0, cycle=0))
    answer = breakstep("run", "shock_tube", *TINY, "--out", "mine")
    assert (answer.code, answer.err.strip()) == (130, "breakstep: stopped")
    assert not Path("mine").exists()

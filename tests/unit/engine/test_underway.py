"""Kernels that do not return: what is known of them, from inside and outside their process, and a serial run's end."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

import pytest

from breakstep import api
from breakstep.engine.overdue import overdue
from breakstep.engine.underway import Calls, read_underway
from breakstep.errors import OverdueError
from breakstep.profile.store import read_profile
from breakstep.steps.step import Call
from tests.stuck import STUCK

CALL = Call("burn", 7, 2, 3, (0, 0, 0), (4, 4, 1), (1.0, 1.0, 1.0), (True, True, False), {})


def test_a_call_is_known_while_it_lasts(tmp_path: Path) -> None:
    """Inside, and by the file outside, by the same clock."""
    file = tmp_path / "calls"
    file.touch()
    calls = Calls()
    calls.keep(str(file))
    with calls.under_way(CALL):
        time.sleep(0.02)
        (inside,), (outside,) = calls.now(), read_underway(file)
    assert inside.where() == outside.where() == "step burn, tile 3, cycle 7, iteration 2"
    assert 0.02 <= inside.seconds <= outside.seconds < inside.seconds + 1.0
    assert calls.now() == read_underway(file) == []
    calls.forget()


def test_what_an_earlier_run_left_behind_is_not_this_one_s() -> None:
    calls = Calls()
    calls.keep()
    with calls.under_way(CALL):  # a kernel that never returned
        calls.forget()
        calls.keep()
        assert calls.now() == []
    calls.forget()


def test_a_compiler_s_time_does_not_count(tmp_path: Path) -> None:
    file = tmp_path / "calls"
    file.touch()
    calls = Calls()
    calls.keep(str(file))
    with calls.under_way(CALL):
        before = calls.now()[0].seconds
        calls.pause()
        time.sleep(0.3)
        assert read_underway(file)[0].seconds < before + 0.2
        calls.go_on()
        assert calls.now()[0].seconds < before + 0.2
        assert read_underway(file)[0].seconds < before + 0.2
    calls.forget()


def test_a_file_that_is_not_there_is_no_matter(tmp_path: Path) -> None:
    """As on a worker of another machine."""
    calls = Calls()
    calls.keep(str(tmp_path / "elsewhere" / "calls"))
    with calls.under_way(CALL):
        assert len(calls.now()) == 1
    calls.forget()


def test_what_is_overdue() -> None:
    calls = Calls()
    with calls.under_way(CALL):
        overdue(calls.now(), 5.0)
        with pytest.raises(OverdueError, match="tile 3, cycle 7, iteration 2, worker 4: the kernel has not"):
            overdue(calls.now(), 0.0, "worker 4")


def test_a_serial_run_ends_when_a_kernel_does_not_return(tmp_path: Path) -> None:
    """The thread that is left behind sleeps and ends by itself."""
    (tmp_path / "stuck.py").write_text(STUCK, encoding="utf-8")
    with pytest.raises(OverdueError, match=r"step smooth, tile 1, cycle 2: the kernel has not returned for 0\.\d+ s"):
        api.run(
            tmp_path / "stuck.py",
            overrides=["code.arguments.how='sleep'", "code.arguments.seconds=2"],
            dispatch="serial",
            task_timeout=0.3,
            out=tmp_path / "mine",
        )
    profile = read_profile(tmp_path / "mine")
    assert (profile.manifest["status"], profile.manifest["cycles"]) == ("failed", 2)
    assert len(profile.tasks) == 7
    assert "step smooth, tile 1, cycle 2" in profile.manifest["message"]


def test_a_serial_run_in_time_is_a_run(tmp_path: Path) -> None:
    (tmp_path / "stuck.py").write_text(STUCK, encoding="utf-8")
    file, fine = tmp_path / "stuck.py", ["code.arguments.how='not'"]
    limited = api.run(file, overrides=fine, dispatch="serial", task_timeout=60.0, out=tmp_path / "one")
    free = api.run(file, overrides=fine, dispatch="serial", out=tmp_path / "two")
    assert limited.manifest["digest"] == free.manifest["digest"]
    assert len(limited.tasks) == len(free.tasks)


def test_a_serial_run_that_is_silenced_ends_too(tmp_path: Path) -> None:
    """A kernel that holds the interpreter's lock leaves nobody to say so but a timer below Python."""
    (tmp_path / "stuck.py").write_text(STUCK, encoding="utf-8")
    program = (
        "import breakstep, breakstep.engine.serial as serial; serial.SILENCE_SECONDS = 0.5;"
        "breakstep.run('stuck.py', overrides=['code.arguments.how=\"held\"'], dispatch='serial', task_timeout=0.3)"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], cwd=tmp_path, capture_output=True, text=True, timeout=60, check=False
    )
    assert done.returncode == 1
    assert "Timeout" in done.stderr
    assert "in smooth" in done.stderr

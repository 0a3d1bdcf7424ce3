"""Calling a user's functions: errors on purpose pass, all others say where and show the user's line."""

from __future__ import annotations

import pickle

import numpy as np
import pytest

from breakstep.errors import CourantError, KernelError
from breakstep.steps.calling import ask_user, call_user


def halve(number: float) -> float:
    """Fine."""
    return number / 2.0


def inner() -> int:
    """Where it goes wrong."""
    return 1 // 0


def outer() -> int:
    """What was called."""
    return inner() + 1


def complain() -> None:
    """An error raised on purpose."""
    raise CourantError("the time step is too large", courant=1.5)


def interrupt() -> None:
    """Not an error of the function's."""
    raise KeyboardInterrupt


def test_results_pass() -> None:
    assert call_user(halve, 3.0, where="here") == 1.5


def test_an_error_names_the_call_the_error_and_the_line() -> None:
    with pytest.raises(KernelError) as caught:
        call_user(outer, where="step burn, tile 3, cycle 2")
    message = str(caught.value)
    assert message.startswith("step burn, tile 3, cycle 2: the user's function raised ZeroDivisionError: ")
    assert "test_calling.py, line " in message
    assert "in outer)" in message
    trace = caught.value.details["traceback"]
    assert "in outer" in trace
    assert "return 1 // 0" in trace
    assert "calling.py, line" not in trace.replace("test_calling.py", "")
    assert trace.rstrip().splitlines()[-1].startswith("ZeroDivisionError: ")


def test_the_wrong_number_of_arguments_is_the_user_s_error_too() -> None:
    with pytest.raises(KernelError, match=r"raised TypeError: outer\(\) takes 0 positional arguments"):
        call_user(outer, 1, where="here")


def test_changing_an_input_says_what_to_do_instead() -> None:
    protected = np.zeros(3)
    protected.flags.writeable = False
    with pytest.raises(KernelError, match=r"read-only.*may not change the arrays it is given, only return new ones"):
        call_user(np.add, protected, 1.0, protected, where="here")


def test_errors_raised_on_purpose_and_interrupts_pass_unchanged() -> None:
    with pytest.raises(CourantError) as caught:
        call_user(complain, where="here")
    assert caught.value.details == {"courant": 1.5}
    with pytest.raises(KeyboardInterrupt):
        call_user(interrupt, where="here")


def test_errors_survive_the_journey_from_a_worker() -> None:
    with pytest.raises(KernelError) as caught:
        call_user(outer, where="here")
    copy = pickle.loads(pickle.dumps(caught.value))
    assert type(copy) is KernelError
    assert str(copy) == str(caught.value)
    assert copy.details == caught.value.details


def leave() -> None:
    """What ends a worker without a word."""
    raise SystemExit(3)


def test_leaving_is_an_error_as_well() -> None:
    with pytest.raises(KernelError, match=r"^here: the user's function raised SystemExit: 3 \("):
        call_user(leave, where="here")


@pytest.mark.parametrize(("answer", "said"), [(True, True), (np.array([0.0]) > 1.0, False), (np.bool_(True), True)])
def test_answers(answer: object, said: bool) -> None:
    assert ask_user(lambda: answer, where="here") is said


@pytest.mark.parametrize("answer", [None, np.array([True, False])])
def test_what_is_neither_yes_nor_no(answer: object) -> None:
    with pytest.raises(KernelError, match=r"^here: expected True or False, got "):
        ask_user(lambda: answer, where="here")

"""Calling a user's functions: what they raise becomes a KernelError that says where and shows the line.

Everything that a problem brings along is called through here: kernels, initial states, the functions of
reductions and repeats. Errors raised on purpose pass unchanged.
"""

from __future__ import annotations

import contextlib
import traceback
from collections.abc import Callable
from typing import Any, TypeVar

from breakstep.errors import BreakstepError, KernelError

_T = TypeVar("_T")


def call_user(function: Callable[..., _T], *arguments: Any, where: str) -> _T:
    """Call ``function`` with ``arguments``.

    Parameters
    ----------
    where : str
        Which call this is, in words: it begins the message.

    Raises
    ------
    KernelError
        The function raised; ``details["traceback"]`` holds the frames below this one as text.
    """
    try:
        return function(*arguments)
    except BreakstepError:
        raise
    except (Exception, SystemExit) as error:  # sys.exit() of a kernel would end a worker without a word
        raise _failed(error, where) from error


def ask_user(function: Callable[..., Any], *arguments: Any, where: str) -> bool:
    """What a function of the user's that says yes or no says.

    Raises
    ------
    KernelError
        It raised, or returned what is neither, such as an array of several entries.
    """
    answer = call_user(function, *arguments, where=where)
    with contextlib.suppress(TypeError, ValueError):
        if answer is not None:
            return bool(answer)
    raise KernelError(f"{where}: expected True or False, got {type(answer).__name__}; return one answer")


def _failed(error: BaseException, where: str) -> KernelError:
    below = error.__traceback__.tb_next if error.__traceback__ is not None else None
    frames = traceback.extract_tb(below)
    place = f" ({frames[0].filename}, line {frames[0].lineno}, in {frames[0].name})" if frames else ""
    text = "".join(traceback.format_exception(type(error), error, below))
    said = (str(error).splitlines() or [""])[0]  # a compiler's may have hundreds; the traceback has them all
    return KernelError(
        f"{where}: the user's function raised {type(error).__name__}: {said}{place}; {_advice(error)}",
        traceback=text,
    )


def _advice(error: BaseException) -> str:
    """What to do: NumPy says "read-only", Numba "readonly", of an array that may not be changed."""
    if "read-only" in str(error) or "readonly" in str(error):
        return "a function may not change the arrays it is given, only return new ones"
    return "correct the function, or look at the state it was given"

"""How this layer compiles the few loops that numpy cannot express: integers in, integers out.

Their arithmetic is on int64 alone, so no flag can change a result. Set ``NUMBA_DISABLE_JIT=1`` to run
them as plain Python.

What is compiled is kept on disk, and made anew only when the file that a function stands in has changed.
So a compiled loop uses nothing from another file: codes and array layouts that it knows are written in its
own, and a test compares the codes with the schema.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

import numba

_F = TypeVar("_F", bound=Callable[..., Any])


def compiled_loop(function: _F) -> _F:
    """Compile a module-level function, cached on disk, releasing the interpreter lock."""
    return numba.njit(cache=True, nogil=True)(function)  # type: ignore[no-any-return]

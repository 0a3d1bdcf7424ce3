"""Compilation without reference counting, for kernels that only fill arrays they are given.

numba counts references to arrays atomically, also when they are members of a tuple that is handed on.
For kernels that pass tuples of many small arrays around that is most of their time (one right-hand side
of the 13-isotope network: 1470 ns with counting, 260 without), and the counters are shared by all threads
that use one network. A function compiled here cannot create an array, nor call one that does.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

from breakstep.kernels.compiled import _FLAGS  # isort: skip  (must precede numba)

import numba

_F = TypeVar("_F", bound=Callable[..., Any])


def unmanaged(function: _F) -> _F:
    """Compile as `compiled` does, without reference counting; bits are the same."""
    # The option's underscore marks it as numba's own; it has been there since the reference counts have.
    return numba.njit(_nrt=False, forceinline=True, **_FLAGS)(function)  # type: ignore[no-any-return]

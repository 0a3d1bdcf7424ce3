"""Compilation without reference counting, for kernels that only fill arrays they are given.

numba counts references to arrays atomically, also when they are members of a tuple that is handed on, and
a call copies every member's descriptor. For kernels that hand on tuples of many small arrays this is most
of the time: a sub-step of the 13-isotope network took 11.7 microseconds with `compiled`, 5.1 without
counting, 2.2 with helpers merged into their callers as well. The counts would also be shared, and fought
over, by all threads that use one network.

Functions compiled here cannot create an array, nor call one that does. Bits are those of `compiled`.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

from breakstep.kernels.compiled import _FLAGS  # isort: skip  (must precede numba)

import numba

_F = TypeVar("_F", bound=Callable[..., Any])

# The leading underscore marks numba's own option; it is as old as its reference counting.
_WITHOUT_COUNTING: dict[str, Any] = {"_nrt": False, **_FLAGS}


def unmanaged(function: _F) -> _F:
    """Compile a kernel entry point without reference counting."""
    return numba.njit(**_WITHOUT_COUNTING)(function)  # type: ignore[no-any-return]


def merged(function: _F) -> _F:
    """Compile a helper that the optimiser must merge into its callers, without counting."""
    return numba.njit(forceinline=True, **_WITHOUT_COUNTING)(function)  # type: ignore[no-any-return]

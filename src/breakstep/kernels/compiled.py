"""How kernels are compiled: one place for the flags, one place for the cache.

Every kernel is a module-level function decorated with :func:`compiled` (or :func:`inlined` for
helpers), so that numba's on-disk cache serves all worker processes. The flags are part of the
contract: no ``fastmath`` (it would make bits depend on the loop a zone lands in, hence on the tiling),
``error_model="numpy"`` (a checked division does not vectorise), ``nogil`` (threads of one worker
compute side by side).

Importing this module must come before numba's own import in a process: it points the cache at a
folder named after a hash of all kernel sources, because numba notices an edit of the function's own
file only, not of a helper in another one.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import platformdirs

_F = TypeVar("_F", bound=Callable[..., Any])
_FLAGS: dict[str, Any] = {"nogil": True, "cache": True, "error_model": "numpy", "fastmath": False}


def _sources_digest() -> str:
    digest = hashlib.sha256(repr(sorted(_FLAGS.items())).encode())
    for source in sorted(Path(__file__).parent.rglob("*.py")):
        digest.update(source.read_bytes())
    return digest.hexdigest()[:16]


def _prepare_environment() -> None:
    """Set numba's variables, unless the user has set them."""
    cache = Path(platformdirs.user_cache_dir("breakstep")) / "numba" / _sources_digest()
    os.environ.setdefault("NUMBA_CACHE_DIR", str(cache))
    # The superword vectoriser is what turns "eight zones at once" loops into vector code.
    os.environ.setdefault("NUMBA_SLP_VECTORIZE", "1")


_prepare_environment()

import numba  # noqa: E402  (the environment must be set first)

numba.config.reload_config()


def compiled(function: _F) -> _F:
    """Compile a kernel entry point: cached, releases the interpreter lock, bits as numpy."""
    return numba.njit(**_FLAGS)(function)  # type: ignore[no-any-return]


def inlined(function: _F) -> _F:
    """Compile a small helper that must be inlined for its caller's loop to vectorise."""
    return numba.njit(inline="always", **_FLAGS)(function)  # type: ignore[no-any-return]

"""What the C library does with memory that arrays give back, while a run lasts: keep it for the next arrays.

Every task makes new arrays and lets old ones go, some hundred kilobytes each. By default the GNU C library hands
such blocks back to the operating system at once (and Dask's worker processes are started with
``MALLOC_TRIM_THRESHOLD_=65536``, so that they hand back everything), which then has to clear each page again for
the next task: on the scenario ``ember_field`` 900,000 page faults a run and 1.4 of 8 seconds of processor time spent in
the system; 55,000 and 0.2 with the memory kept (``getrusage`` of the one worker, two threads). Where the C library has
no such settings nothing is done.
"""

from __future__ import annotations

import ctypes
import os
import threading
from typing import Final

# Parameters of mallopt(3), from the GNU C library's malloc.h.
_TRIM_THRESHOLD: Final = -1  # free memory at the heap's end above which it is handed back [bytes]
_TOP_PAD: Final = -2  # what is asked for beyond each need [bytes]
_MMAP_THRESHOLD: Final = -3  # size from which a block is mapped by itself, and unmapped when it is freed [bytes]

_KEPT: Final = {_MMAP_THRESHOLD: 32 * 2**20, _TRIM_THRESHOLD: 2**30, _TOP_PAD: 16 * 2**20}  # 32 MiB is the most allowed
_DEFAULTS: Final = {
    _MMAP_THRESHOLD: ("MALLOC_MMAP_THRESHOLD_", 128 * 2**10),
    _TRIM_THRESHOLD: ("MALLOC_TRIM_THRESHOLD_", 128 * 2**10),
    _TOP_PAD: ("MALLOC_TOP_PAD_", 128 * 2**10),
}

_lock = threading.Lock()
_runs: set[str] = set()


def keep_memory(run: str) -> None:
    """Keep freed memory until every run that asked for it is over."""
    with _lock:
        if not _runs:
            for parameter, value in _KEPT.items():
                _set(parameter, value)
        _runs.add(run)


def release_memory(run: str) -> None:
    """A run is over: with the last one the settings of the environment return, and free memory is handed back."""
    with _lock:
        if run not in _runs:
            return
        _runs.discard(run)
        if not _runs:
            for parameter, (variable, default) in _DEFAULTS.items():
                _set(parameter, _number(os.environ.get(variable), default))
            _trim()


def _number(text: str | None, default: int) -> int:
    return int(text) if text is not None and text.isdigit() else default


def _set(parameter: int, value: int) -> None:
    mallopt = getattr(ctypes.CDLL(None), "mallopt", None)
    if mallopt is not None:
        mallopt(parameter, value)


def _trim() -> None:
    malloc_trim = getattr(ctypes.CDLL(None), "malloc_trim", None)
    if malloc_trim is not None:
        malloc_trim(ctypes.c_size_t(0))

"""Ctrl-C kept away from what it must not break: a cluster that is being started, a profile that is being written.

A terminal sends SIGINT to every process of its foreground group, so that workers get it too; and Python
raises KeyboardInterrupt in the main thread wherever that happens to be.
"""

from __future__ import annotations

import contextlib
import signal
import threading
from collections.abc import Iterator
from multiprocessing import resource_tracker


@contextlib.contextmanager
def interrupts_held() -> Iterator[None]:
    """Ctrl-C waits for the end of the block, where it is raised as KeyboardInterrupt.

    An error that ends the block goes first. Outside the main thread, where Python raises nothing, this
    does nothing.
    """
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    came: list[int] = []
    before = signal.signal(signal.SIGINT, lambda number, frame: came.append(number))
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)
    if came:
        raise KeyboardInterrupt


@contextlib.contextmanager
def children_deaf() -> Iterator[None]:
    """Threads and processes that are started in the block never see Ctrl-C, nor do those that they start.

    The mask of blocked signals is inherited, also by a new program in a new process; a handler is not.
    Python's resource tracker, which is started with the first process, ends by unblocking SIGINT in the
    thread that started it: so it goes first.
    """
    resource_tracker.ensure_running()
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)

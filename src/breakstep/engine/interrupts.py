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


GIVE_UP = 3  # the press of Ctrl-C that is obeyed at once, whatever it breaks


class Presses:
    """Ctrl-C as a run takes it: see :func:`interrupts_counted`.

    Attributes
    ----------
    count : int
    held : bool
        Whether the first press, too, waits for the end.
    owed : bool
        Whether the first press has come and waits.
    """

    def __init__(self) -> None:
        self.count, self.held, self.owed = 0, False, False

    def press(self, *_: object) -> None:
        """Handle one."""
        self.count += 1
        if self.count >= GIVE_UP or (self.count == 1 and not self.held):
            raise KeyboardInterrupt
        self.owed = self.owed or self.count == 1


@contextlib.contextmanager
def interrupts_counted() -> Iterator[Presses]:
    """The first Ctrl-C in the block is raised where it falls, the second is not obeyed, the third ends everything.

    What the first one stops has a record to bring home and a profile to write, and people press twice. Once
    ``held`` is set, the first one waits for the end of the block as well. Outside the main thread, and where
    Ctrl-C is not heard at all, this does nothing.
    """
    presses = Presses()
    if threading.current_thread() is not threading.main_thread() or signal.getsignal(signal.SIGINT) is signal.SIG_IGN:
        yield presses
        return
    before = signal.signal(signal.SIGINT, presses.press)
    try:
        yield presses
    finally:
        signal.signal(signal.SIGINT, before)
    if presses.owed:
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

"""The few numbers of a machine that a replay needs. Knows no files and no names of machines."""

from __future__ import annotations

from dataclasses import dataclass

PICOSECONDS = 1000  # a nanosecond has this many


@dataclass(frozen=True)
class MachineModel:
    """A machine as the replay engines see it: all times are whole nanoseconds.

    Parameters
    ----------
    workers, threads : int
        Workers, and threads in each of them. Threads of one worker share memory.
    overhead_ns : int
        Time of the dispatch on the task's own thread, before each step task [ns].
    alpha_ns : int
        Latency of a message from worker to worker [ns] (Hockney's alpha).
    ps_per_byte : int
        Inverse bandwidth [ps/byte]: 1000 is 1 GB/s, 80 is 12.5 GB/s (Hockney's beta).
    contention : bool
        Whether messages to one worker share its link, one at a time, or each has a link of its own.
    hop_ns : int
        Time of one level of a reduction's or barrier's tree, one way [ns].
    arity : int
        Children of a node in these trees.
    memory_bytes : int
        Memory of one worker [bytes]; 0 when nothing is known.
    """

    workers: int
    threads: int = 1
    overhead_ns: int = 0
    alpha_ns: int = 0
    ps_per_byte: int = 0
    contention: bool = False
    hop_ns: int = 0
    arity: int = 8
    memory_bytes: int = 0

    @property
    def slots(self) -> int:
        """Threads of all workers; thread ``t`` of worker ``w`` is slot ``w * threads + t``."""
        return self.workers * self.threads

    @property
    def tree_depth(self) -> int:
        """Levels of a tree over all workers."""
        depth, reached = 0, 1
        while reached < self.workers:
            depth, reached = depth + 1, reached * self.arity
        return depth

    @property
    def tree_ns(self) -> int:
        """Time from the last arrival at a reduction or barrier to its release: up and down the tree [ns]."""
        return 2 * self.hop_ns * self.tree_depth

    def transfer_ns(self, size: int) -> int:
        """Time of a message of ``size`` bytes on an idle link [ns]."""
        return self.alpha_ns + size * self.ps_per_byte // PICOSECONDS

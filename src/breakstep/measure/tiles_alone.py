"""One replay of tiles by rule in a process of its own: ``python -m`` this module, SIDE CYCLES WORKERS.

Prints tasks, seconds and the process's highest memory as JSON. The memory holds the interpreter and its libraries too.
"""

from __future__ import annotations

import json
import resource
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np

from breakstep.forecast.implicit import replay_tiles
from breakstep.forecast.laws import Cost, Law
from breakstep.forecast.model import MachineModel
from breakstep.forecast.tiles import TiledSplitting, TileStage, along


def measured(side: int, cycles: int, workers: int) -> dict[str, float]:
    """Play side x side tiles, exponential times, five-point coupling."""
    tiles = side * side
    cost = Cost.even(tiles, 1_000_000, Law.exponential())
    splitting = TiledSplitting((side, side), cycles, (TileStage(cost, along(0, 1)),))
    owner = (np.arange(tiles) * workers // tiles).astype(np.int32)
    machine = MachineModel(workers)
    replay_tiles(replace(splitting, cycles=1), machine, owner)
    started = time.perf_counter()
    replay_tiles(splitting, machine, owner)
    seconds = time.perf_counter() - started
    return {"tasks": splitting.tasks, "seconds": seconds, "memory_mib": highest_memory_mib()}


def highest_memory_mib() -> float:
    """Most memory that this program had resident [MiB].

    On Linux from the kernel's status file: what ``getrusage`` says there survives the start of a new program, so that
    it is at least what the parent process had.
    """
    status = Path("/proc/self/status")
    if status.exists():
        for line in status.read_text().splitlines():
            if line.startswith("VmHWM:"):
                return int(line.split()[1]) / 1024
    unit = 1 if sys.platform == "darwin" else 1024  # bytes there, kibibytes elsewhere
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * unit / 2**20


if __name__ == "__main__":
    print(json.dumps(measured(*(int(value) for value in sys.argv[1:4]))))

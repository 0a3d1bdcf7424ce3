"""Timer records and scenarios made of them, for tests."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from breakstep.scenario.invent_timers import Invention, invent, write
from breakstep.scenario.load import Scenario, scenario_from

STEPS = ("sweep", "burn", "solve")


def table(ranks: int, cycles: int, steps: tuple[str, ...] = ("burn",), first: int = 0) -> pd.DataFrame:
    """Sound records in which every number tells its place."""
    rows = [
        (rank, step, cycle + first, 0.001 * (1 + rank) + 0.1 * number + cycle)
        for cycle in range(cycles)
        for number, step in enumerate(steps)
        for rank in range(ranks)
    ]
    return pd.DataFrame(rows, columns=["rank", "step", "cycle", "seconds"])


def saved(frame: pd.DataFrame, path: Path) -> Path:
    """Write records and give the path back."""
    write(frame, path)
    return path


def tables(path: Path, ranks: tuple[int, ...], cycles: int, **timers: Any) -> dict[str, Any]:
    """A scenario by timers alone: a sweep that exchanges, burning, a solve that exchanges."""
    steps = [{"name": "sweep", "halo": 1}, {"name": "burn"}, {"name": "solve", "halo": 1, "corners": True}]
    return {
        "name": "rehearsed",
        "run": {"cycles": cycles},
        "time_step": {"lag": 1},
        "timers": {"file": str(path), "ranks": list(ranks), "steps": steps, **timers},
    }


def invented(folder: Path, what: Invention, **timers: Any) -> Scenario:
    """A scenario of invented records."""
    path = saved(invent(what), folder / "records.parquet")
    return scenario_from(tables(path, what.ranks, what.cycles, **timers), source="test")


def by_step(frame: pd.DataFrame, step: str) -> NDArray[np.float64]:
    """Seconds of one step, shape (cycles, ranks), summed over iterations."""
    sums = frame[frame["step"] == step].groupby(["cycle", "rank"])["seconds"].sum()
    return np.asarray(sums.unstack().to_numpy(), dtype=np.float64)

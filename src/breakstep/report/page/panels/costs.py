"""What each tile costs, step by step and cycle by cycle, and how uneven that makes the workers' loads.

Costs are processor time inside kernels, so that a core that other programs slow down does not look like a costly
tile. Iterations of one cycle are added up.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from breakstep.profile.frames import integers, positions, words_of
from breakstep.profile.run import Profile
from breakstep.report.page.cells import Cells
from breakstep.report.page.numbers import seconds, significant

MOST_CYCLES = 48
MOST_STEPS = 6


def costs_panel(profile: Profile, cells: Cells) -> dict[str, Any]:
    """Costs over space and time.

    Returns
    -------
    dict
        ``steps``: names, costliest first. ``cycles``: first cycle of each bin, with ``cycles_per_bin``.
        ``relative``: for each step, bin and cell, its cost as a multiple of the mean cell's. ``cpu_s``: processor
        time of each step in each bin [s]. ``busiest_over_mean``: for each step and bin, the busiest worker's
        cost over the mean worker's.
    """
    kernels, names = _kernels(profile)
    cycles = int(kernels["cycle"].max()) + 1 if len(kernels) else 0
    width = max(1, -(-cycles // MOST_CYCLES))
    kernels["bin"] = kernels["cycle"] // width
    bins = -(-cycles // width)
    workers = int(profile.manifest["workers"])
    cell = cells.of_tile[kernels["tile"].to_numpy()]
    by_cell = _sums(kernels, cell, (len(names), bins, cells.count))
    by_worker = _sums(kernels, kernels["worker"].to_numpy(), (len(names), bins, workers))
    order = np.argsort(-by_cell.sum(axis=(1, 2)), kind="stable")[:MOST_STEPS]
    return {
        "steps": [names[step] for step in order],
        "cycles": [width * number for number in range(bins)],
        "cycles_per_bin": width,
        "relative": [[_over_mean(row) for row in by_cell[step]] for step in order],
        "cpu_s": [[seconds(row.sum()) for row in by_cell[step]] for step in order],
        "busiest_over_mean": [[_busiest(row) for row in by_worker[step]] for step in order],
    }


def _kernels(profile: Profile) -> tuple[pd.DataFrame, list[str]]:
    """Kernel intervals on tiles within cycles: step, cycle, tile, worker, processor time."""
    intervals, tasks = profile.intervals, profile.tasks
    chosen = intervals[(intervals["what"] == "kernel").to_numpy()]
    at = positions(integers(tasks, "task"), integers(chosen, "task"))
    codes, names = words_of(chosen, "step")
    frame = pd.DataFrame({"step": codes, "cpu_ns": integers(chosen, "cpu_ns")})
    for column in ("cycle", "tile", "worker"):
        frame[column] = integers(tasks, column)[at]
    return frame[(frame["cycle"] >= 0) & (frame["tile"] >= 0)].reset_index(drop=True), names


def _sums(kernels: pd.DataFrame, place: NDArray[np.int64], shape: tuple[int, int, int]) -> NDArray[np.float64]:
    flat = np.ravel_multi_index((kernels["step"].to_numpy(), kernels["bin"].to_numpy(), place), shape)
    sums = np.bincount(flat, weights=kernels["cpu_ns"].to_numpy(dtype=np.float64), minlength=int(np.prod(shape)))
    table: NDArray[np.float64] = sums.reshape(shape).astype(np.float64)
    return table


def _over_mean(row: NDArray[np.float64]) -> list[float | None]:
    mean = row.mean()
    return [significant(value / mean, 3) if mean else 0.0 for value in row]


def _busiest(row: NDArray[np.float64]) -> float | None:
    """None where a step did not run in these cycles."""
    return significant(row.max() / row.mean()) if row.any() else None

"""Where kernel time went: by step, and how unevenly over workers, tiles and phases.

Work is time inside kernels. It says nothing of waiting; that is the ledger's part.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from breakstep.profile.frames import Frames, integers, positions, summed, words_of

_PHASE = ["step", "stage", "cycle", "iteration"]


def work_by_step(frames: Frames) -> pd.DataFrame:
    """Time inside kernels by step.

    Returns
    -------
    DataFrame, index step
        ``compute_ns`` wall time of threads in the step's kernel [ns], ``cpu_ns`` their processor time [ns],
        ``compute_seconds`` and ``cpu_seconds`` the same [s], ``kernels`` how many calls.
    """
    kernels = _kernels(frames)
    grouped = kernels.groupby("step", observed=True, sort=True)
    work = grouped[["compute_ns", "cpu_ns"]].sum()
    work["compute_seconds"] = work["compute_ns"] * 1e-9
    work["cpu_seconds"] = work["cpu_ns"] * 1e-9
    work["kernels"] = grouped.size()
    return work


def imbalance_by_step(frames: Frames, tiles: int) -> pd.DataFrame:
    """How unevenly each step's processor time is spread: largest over mean, 1 when even.

    Processor time, not wall time: a core that other programs slow down does not make the work uneven.

    Parameters
    ----------
    tiles : int
        Tiles of the mesh; one without a kernel call counts as zero in the mean, as does a worker.

    Returns
    -------
    DataFrame, index step
        ``workers`` and ``tiles``: the largest sum over the run, over the mean. ``phases``: the largest
        worker's sum within a phase (one stage in one cycle and iteration) over the mean worker's, averaged
        over phases; what moves from worker to worker shows here and not in ``workers``. ``phases_weighted``:
        the same with each phase weighted by its work, which is the sum of the phases' largest over the sum of
        their means: the factor by which barriers behind every phase would stretch the step.
    """
    kernels = _kernels(frames)
    workers = len(np.unique(integers(frames["threads"], "worker")))
    on_tiles = kernels[kernels["tile"] >= 0]
    spread = pd.DataFrame(
        {
            "workers": _largest_over_mean(kernels, "worker", workers),
            "tiles": _largest_over_mean(on_tiles, "tile", tiles),
        }
    )
    largest, mean = _phase_sums(kernels, workers)
    ratio = (largest / mean)[mean > 0]
    by_step = {"phases": ratio.groupby("step").mean()}
    totals = largest.groupby("step").sum(), mean.groupby("step").sum()
    by_step["phases_weighted"] = (totals[0] / totals[1])[totals[1] > 0]
    return spread.assign(**by_step).rename_axis("step")


def counters_by_step(frames: Frames) -> pd.DataFrame:
    """What kernels counted, summed over the run: columns ``step``, ``counter``, ``value``."""
    totals = summed(frames["counters"], ["step", "counter"], "value")
    rows = [(step, counter, value) for (step, counter), value in totals.items()]
    return pd.DataFrame(rows, columns=["step", "counter", "value"])


def _kernels(frames: Frames) -> pd.DataFrame:
    """Kernel intervals with the place and phase of their tasks."""
    intervals, tasks = frames["intervals"], frames["tasks"]
    chosen = intervals[(intervals["what"] == "kernel").to_numpy()]
    at = positions(integers(tasks, "task"), integers(chosen, "task"))
    codes, stages = words_of(tasks, "stage")
    step, steps = words_of(chosen, "step")
    columns = {column: integers(tasks, column)[at] for column in ("worker", "tile", "cycle", "iteration")}
    return pd.DataFrame(
        {
            "step": pd.Categorical.from_codes(step, pd.Index(steps)),
            "stage": pd.Categorical.from_codes(codes[at], pd.Index(stages)),
            **columns,
            "compute_ns": integers(chosen, "end_ns") - integers(chosen, "start_ns"),
            "cpu_ns": integers(chosen, "cpu_ns"),
        }
    )


def _largest_over_mean(kernels: pd.DataFrame, by: str, members: int) -> pd.Series[float]:
    sums = kernels.groupby(["step", by], observed=True)["cpu_ns"].sum().groupby("step", observed=True)
    total = sums.sum()
    return (sums.max() * members / total)[total > 0]


def _phase_sums(kernels: pd.DataFrame, workers: int) -> tuple[pd.Series[float], pd.Series[float]]:
    """Largest and mean of the workers' sums, for each phase [ns]."""
    sums = kernels.groupby([*_PHASE, "worker"], observed=True)["cpu_ns"].sum()
    phases = sums.groupby(_PHASE, observed=True)
    return phases.max().astype(float), phases.sum() / workers

"""Live memory over time: the highest value in each of as many bins as a screen has room for."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from breakstep.profile.run import Profile
from breakstep.report.page.numbers import seconds
from breakstep.report.page.runs import Runs

MOST_KINDS = 5  # kinds of data with a line of their own
SMALL = 0.02  # of the high-water mark: lines below it lie on the axis
BINS = 360  # a bin is then three pixels on a screen 1200 wide


def memory_panel(runs: Runs) -> dict[str, Any]:
    """For each run ``edges_s`` (begin of each bin, and the end) and ``bytes`` (highest in each), ``peak_bytes``,
    and ``bytes_by_data``."""
    return {side: _of(profile) for side, profile in runs.sides.items()}


def _of(profile: Profile) -> dict[str, Any]:
    ledger, live = profile.ledger, profile.live
    edges = np.linspace(0, ledger.span_ns, BINS + 1)
    total = binned_highest(live.total, ledger.first_ns, edges)
    return {
        "edges_s": [seconds(edge) for edge in edges],
        "bytes": total,
        "peak_bytes": live.peak_bytes,
        "peak_s": seconds(_moment_of_peak(live.total) - ledger.first_ns) if len(live.total) else 0.0,
        "bytes_by_data": _by_data(profile, edges),
        "peak_by_data": {str(data): peak for data, peak in live.peak_by_data.items()},
        "peak_by_worker": {str(worker): count for worker, count in live.peak_by_worker.items()},
    }


def _by_data(profile: Profile, edges: np.ndarray[Any, Any]) -> dict[str, list[int]]:
    """Highest live bytes of the largest kinds of data in each bin, the largest first; nothing where all is one kind."""
    peaks = sorted(profile.live.peak_by_data.items(), key=lambda item: -item[1])
    large = [data for data, peak in peaks if peak >= SMALL * profile.live.peak_bytes][:MOST_KINDS]
    if len(large) < 2:
        return {}
    return {data: binned_highest(profile.live.by_data[data], profile.ledger.first_ns, edges) for data in large}


def _moment_of_peak(series: pd.Series[int]) -> int:
    return int(series.index.to_numpy()[int(series.to_numpy().argmax())])


def binned_highest(series: pd.Series[int], origin_ns: int, edges: np.ndarray[Any, Any]) -> list[int]:
    """Highest value of a step function within each bin, the value that it enters the bin with among them."""
    highest = np.zeros(len(edges) - 1, dtype=np.int64)
    if len(series) == 0:
        return [0] * len(highest)
    moments = series.index.to_numpy(dtype=np.int64) - origin_ns
    values = series.to_numpy(dtype=np.int64)
    bins = np.clip(np.searchsorted(edges, moments, side="right") - 1, 0, len(highest) - 1)
    np.maximum.at(highest, bins, values)
    before = np.searchsorted(moments, edges[:-1], side="right") - 1
    entering = np.where(before >= 0, values[np.maximum(before, 0)], 0)
    return [int(value) for value in np.maximum(highest, entering)]

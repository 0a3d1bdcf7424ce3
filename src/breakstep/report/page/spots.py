"""Where the costly tiles of the most uneven step are, and whether they stay there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from breakstep.profile.frames import integers, positions
from breakstep.profile.run import Profile
from breakstep.profile.words import tile_names

NAMED = 3


@dataclass(frozen=True)
class HotSpot:
    """The tiles that make a step uneven.

    Attributes
    ----------
    step : str
    tiles, tiles_for_half : int
        Tiles of the mesh, and how many of them, costliest first, make up half of the step's cost.
    named : list of str
        The costliest tiles.
    stays : float
        Part of the cycles in which the tile that is costliest over the whole run is also the costliest.
    """

    step: str
    tiles: int
    tiles_for_half: int
    named: list[str]
    stays: float


def hot_spot(profile: Profile) -> HotSpot | None:
    """The hot spot of the step whose unevenness over tiles costs most; None for a mesh of one tile."""
    step = _most_uneven(profile)
    if step is None or profile.tile_count < 2:
        return None
    cost = _cost(profile, step)
    by_tile = cost.groupby("tile")["cpu_ns"].sum().sort_values(ascending=False, kind="stable")
    half = int(np.searchsorted(by_tile.cumsum().to_numpy(), by_tile.sum() / 2)) + 1
    hottest = cost.groupby(["cycle", "tile"])["cpu_ns"].sum().reset_index()
    hottest = hottest.loc[hottest.groupby("cycle")["cpu_ns"].idxmax()]
    labels = tile_names(profile.manifest["mesh"]["tiles"])
    return HotSpot(
        step=step,
        tiles=profile.tile_count,
        tiles_for_half=half,
        named=[labels[int(tile)] for tile in by_tile.index[: min(half, NAMED)]],
        stays=float((hottest["tile"] == by_tile.index[0]).mean()),
    )


def _most_uneven(profile: Profile) -> str | None:
    """The step with the most work above its mean over tiles."""
    excess = (profile.imbalance["tiles"] - 1.0) * profile.work["cpu_ns"]
    excess = excess[excess > 0].dropna()
    return str(excess.idxmax()) if len(excess) else None


def _cost(profile: Profile, step: str) -> pd.DataFrame:
    intervals, tasks = profile.intervals, profile.tasks
    chosen = intervals[((intervals["what"] == "kernel") & (intervals["step"] == step)).to_numpy()]
    at = positions(integers(tasks, "task"), integers(chosen, "task"))
    frame = pd.DataFrame({"tile": integers(tasks, "tile")[at], "cycle": integers(tasks, "cycle")[at]})
    frame["cpu_ns"] = integers(chosen, "cpu_ns")
    return frame[(frame["tile"] >= 0) & (frame["cycle"] >= 0)]

"""Placement: which worker owns which tile."""

from __future__ import annotations

from collections.abc import Sequence

from breakstep.engine.program import Program
from breakstep.errors import DeclarationError
from breakstep.graph.tasks import ANYWHERE
from breakstep.profile.curve import curve_order

MOST_STARTS = 256  # of a run along the order that are tried: each costs a pass over all tiles
PLACEMENTS = ("blocks", "curve", "cyclic", "balanced", "shared", "dask")


def owners(placement: str, program: Program, workers: int, costs: Sequence[float] | None = None) -> list[int]:
    """Owner of each tile.

    Parameters
    ----------
    placement : str
        ``"blocks"``: contiguous runs of tiles by number; ``"curve"``: contiguous runs along a space-filling
        curve, so that each worker's tiles form a compact patch; ``"balanced"``: the same, cut where measured
        costs are equal rather than numbers of tiles; ``"shared"``: begins like ``"curve"``, and
        tiles change owner between windows of cycles (resident dispatch); ``"cyclic"``: dealt out one by one, so that
        neighbours are on different workers (the worst case for bytes); ``"dask"``: anywhere.
    costs : sequence of float, optional
        Measured cost of each tile, for ``"balanced"``; equal if not given.

    Raises
    ------
    DeclarationError
        An unknown placement.
    """
    tiles = len(program.tiling)
    equal = [1.0] * tiles
    if placement == "blocks":
        return runs(range(tiles), equal, workers)
    if placement == "cyclic":
        return [tile % workers for tile in range(tiles)]
    if placement in ("curve", "balanced", "shared"):
        order = curve_order([tile.place for tile in program.tiling.tiles])
        return (
            balanced_runs(order, costs, workers)
            if costs is not None and placement == "balanced"
            else runs(order, equal, workers)
        )
    if placement == "dask":
        return [ANYWHERE] * tiles
    raise DeclarationError(f"placement must be one of {', '.join(PLACEMENTS)}, not {placement!r}")


def runs(order: Sequence[int], costs: Sequence[float], workers: int) -> list[int]:
    """Cut an order of tiles into one contiguous run a worker, of equal cost as nearly as tiles allow.

    A tile goes to the worker in whose share of the total cost its middle lies.
    """
    if sum(costs) <= 0:
        costs = [1.0] * len(costs)
    total = sum(costs)
    owned = [0] * len(costs)
    before = 0.0
    for tile in order:
        middle = before + 0.5 * costs[tile]
        owned[tile] = min(int(middle * workers / total), workers - 1)
        before += costs[tile]
    return owned


def balanced_runs(order: Sequence[int], costs: Sequence[float], workers: int) -> list[int]:
    """Contiguous runs whose busiest worker has least to do, over where along the order the first run begins.

    A costly tile in the middle of the order could otherwise not be left alone with a worker.
    """
    tiles = len(order)
    starts = range(0, tiles, -(-tiles // MOST_STARTS))
    found = [runs([*order[start:], *order[:start]], costs, workers) for start in starts]
    return min(found, key=lambda owned: busiest(owned, costs))


def busiest(owned: Sequence[int], costs: Sequence[float]) -> float:
    """The cost of the worker that has most to do."""
    loads: dict[int, float] = {}
    for cost, owner in zip(costs, owned, strict=True):
        loads[owner] = loads.get(owner, 0.0) + cost
    return max(loads.values())

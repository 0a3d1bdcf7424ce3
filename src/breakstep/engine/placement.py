"""Placement: which worker owns which tile."""

from __future__ import annotations

from collections.abc import Sequence

from breakstep.engine.program import Program
from breakstep.errors import DeclarationError
from breakstep.graph.tasks import ANYWHERE
from breakstep.partition import ORDERS, divided

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
    places = [tile.place for tile in program.tiling.tiles]
    if placement in ORDERS:
        return divided(placement, places, workers, costs)
    if placement == "shared":
        return divided("curve", places, workers)
    if placement == "dask":
        return [ANYWHERE] * len(places)
    raise DeclarationError(f"placement must be one of {', '.join(PLACEMENTS)}, not {placement!r}")

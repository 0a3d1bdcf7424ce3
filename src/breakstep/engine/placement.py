"""Placement: which worker owns which tile."""

from __future__ import annotations

from breakstep.errors import DeclarationError
from breakstep.graph.tasks import ANYWHERE

PLACEMENTS = ("blocks", "dask")


def owners(placement: str, tiles: int, workers: int) -> list[int]:
    """Owner of each tile.

    Parameters
    ----------
    placement : str
        ``"blocks"``: contiguous runs of tiles, equal to within one; ``"dask"``: anywhere.

    Raises
    ------
    DeclarationError
        An unknown placement.
    """
    if placement == "blocks":
        return [tile * workers // tiles for tile in range(tiles)] if tiles >= workers else list(range(tiles))
    if placement == "dask":
        return [ANYWHERE] * tiles
    raise DeclarationError(f"placement must be one of {', '.join(PLACEMENTS)}, not {placement!r}")

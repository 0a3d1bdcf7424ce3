"""Dividing tiles among workers: orders of tiles, and runs of equal cost along them.

It knows numbers and places of tiles alone, so that what runs and what only forecasts can both use it.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TypeAlias

Triple: TypeAlias = tuple[int, int, int]

MOST_STARTS = 256  # of a run along the order that are tried: each costs a pass over all tiles
ORDERS = ("blocks", "curve", "cyclic", "balanced")


def divided(order: str, places: Sequence[Triple], workers: int, costs: Sequence[float] | None = None) -> list[int]:
    """Owner of each tile.

    Parameters
    ----------
    order : str
        ``"blocks"``: contiguous runs of tiles by number; ``"curve"``: contiguous runs along a space-filling
        curve; ``"balanced"``: the same, cut where costs are equal; ``"cyclic"``: dealt out one by one.
    places : sequence of (int, int, int)
        Position of each tile in the grid of tiles.
    costs : sequence of float, optional
        Cost of each tile, for ``"balanced"``; equal if not given.
    """
    equal = [1.0] * len(places)
    if order == "cyclic":
        return [tile % workers for tile in range(len(places))]
    if order == "blocks":
        return runs(range(len(places)), equal, workers)
    along = curve_order(places)
    if order == "balanced" and costs is not None:
        return balanced_runs(along, costs, workers)
    return runs(along, equal, workers)


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


def curve_order(places: Sequence[Triple]) -> list[int]:
    """Tiles in the order of a Hilbert curve through their places in the grid.

    Source: J. Skilling, Programming the Hilbert curve, AIP Conf. Proc. 707 (2004) 381: transposed index from
    coordinates by undoing excess work bit by bit.
    """
    axes = [axis for axis in range(3) if any(place[axis] for place in places)] or [0]
    bits = max(1, max(max(place) for place in places).bit_length())
    return sorted(range(len(places)), key=lambda t: hilbert_index([places[t][axis] for axis in axes], bits))


def hilbert_index(coordinates: Sequence[int], bits: int) -> int:
    """Position along the Hilbert curve that fills a cube of 2**bits places along each axis."""
    x, n = list(coordinates), len(coordinates)
    q = 1 << (bits - 1)
    while q > 1:
        for i in range(n):
            if x[i] & q:
                x[0] ^= q - 1
            else:
                swapped = (x[0] ^ x[i]) & (q - 1)
                x[0] ^= swapped
                x[i] ^= swapped
        q >>= 1
    for i in range(1, n):
        x[i] ^= x[i - 1]
    flip, q = 0, 1 << (bits - 1)
    while q > 1:
        if x[n - 1] & q:
            flip ^= q - 1
        q >>= 1
    x = [value ^ flip for value in x]
    index = 0
    for bit in range(bits - 1, -1, -1):
        for value in x:
            index = (index << 1) | ((value >> bit) & 1)
    return index

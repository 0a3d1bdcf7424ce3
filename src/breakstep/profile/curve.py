"""The order of tiles along a space-filling curve: near on the curve is near in space."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TypeAlias

Place: TypeAlias = tuple[int, int, int]


def curve_order(places: Sequence[Place]) -> list[int]:
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

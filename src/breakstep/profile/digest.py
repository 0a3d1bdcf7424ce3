"""Digests of fields: equal digests mean arrays that are equal to the last bit.

A digest covers the field's name, the array's shape, and the bytes of its numbers as little-endian
float64 in C order, so that it is the same on every machine. It distinguishes -0.0 from 0.0 and one NaN
from another, as "to the last bit" demands.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray


def array_digest(name: str, array: NDArray[np.float64]) -> str:
    """SHA-256 of one field on one tile.

    Parameters
    ----------
    name : str
        The field's name.
    array : ndarray of float64, any shape and memory order
        The tile's own zones, without ghost zones, in the field's units.

    Returns
    -------
    str
        64 hexadecimal digits.

    Raises
    ------
    TypeError
        Numbers that are not float64: a silent conversion could make different bits equal.
    """
    if array.dtype.kind != "f" or array.dtype.itemsize != 8:
        raise TypeError(f"field {name}: a digest covers float64 numbers, not {array.dtype}")
    hashed = hashlib.sha256(f"{name} {array.shape}\n".encode())
    hashed.update(np.ascontiguousarray(array, dtype="<f8").data)
    return hashed.hexdigest()


def tile_digests(name: str, array: NDArray[np.float64], tiles: Sequence[Mapping[str, Any]]) -> list[str]:
    """Digest of one field on every tile.

    Parameters
    ----------
    array : ndarray, shape (components, nx, ny, nz)
        The field on the whole mesh, in its own units.
    tiles : sequence of mappings with ``origin`` and ``shape``
        First zone and extent of each tile, three entries each, as in a manifest.
    """
    return [array_digest(name, array[(slice(None), *_box(tile))]) for tile in tiles]


def _box(tile: Mapping[str, Any]) -> tuple[slice, ...]:
    return tuple(slice(o, o + n) for o, n in zip(tile["origin"], tile["shape"], strict=True))


def overall_digest(digests: Mapping[str, Sequence[str]]) -> str:
    """SHA-256 over the digests of all fields and tiles; the order of the mapping does not matter."""
    hashed = hashlib.sha256()
    for name in sorted(digests):
        hashed.update(f"{name} {' '.join(digests[name])}\n".encode())
    return hashed.hexdigest()

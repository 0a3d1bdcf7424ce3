"""How long a task takes: a pattern in space and time, times a random factor.

The random factor is a function of an exponential variate, tabulated: ``factor(v)`` with ``v = -ln u``, u uniform
on (0, 1). In v even steps resolve the upper tail, where the slowest of a million tasks is drawn from. A law
measured from samples ends at the largest sample.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from breakstep.forecast.graph import Int32s, Int64s

Floats = NDArray[np.float64]

CONSTANT, EXPONENTIAL, TABLE = 0, 1, 2
TABLE_STEPS = 256  # entries per unit of v: linear between them, a smooth law errs by some 2e-6
_LARGEST = 38  # -ln of the smallest u there is, 2^-54, is 37.4


@dataclass(frozen=True)
class Law:
    """A random factor; ``code`` says how it is drawn, ``table`` its values at v = 0, 1/256, 2/256, ..."""

    code: int
    table: Floats

    @classmethod
    def constant(cls) -> Law:
        """Always 1."""
        return cls(CONSTANT, np.zeros(2))

    @classmethod
    def exponential(cls) -> Law:
        """Mean 1, standard deviation 1."""
        return cls(EXPONENTIAL, np.zeros(2))

    @classmethod
    def of(cls, quantile: Callable[[Floats], Floats]) -> Law:
        """The law with a given quantile function of u in (0, 1), which must be finite at both ends."""
        v = np.arange(_LARGEST * TABLE_STEPS + 2) / TABLE_STEPS
        return cls(TABLE, np.asarray(quantile(-np.expm1(-v)), dtype=np.float64))

    @classmethod
    def measured(cls, factors: Floats) -> Law:
        """The law of samples, linear between them."""
        found = np.sort(np.asarray(factors, dtype=np.float64))
        if len(found) == 0 or found[0] == found[-1] == 1:
            return cls.constant()
        levels = (np.arange(len(found)) + 0.5) / len(found)
        return cls.of(lambda u: np.interp(u, levels, found))


@dataclass(frozen=True)
class Cost:
    """Durations of one stage's tasks.

    Parameters
    ----------
    pattern_ns : ndarray of int64, shape (frames, cells)
        Mean duration in each cell of a map, in each frame of a film of such maps [ns]. Cycle c shows frame
        ``c % frames``: what moved through the map when it was recorded, moves again.
    cell : ndarray of int32, shape (tiles,)
        Cell of each tile: a map of few tiles can be laid over many, whole or side by side.
    law : Law
        Random factor, drawn anew for each task from its stage, tile and cycle alone.
    """

    pattern_ns: Int64s
    cell: Int32s
    law: Law

    @classmethod
    def even(cls, tiles: int, mean_ns: int, law: Law | None = None) -> Cost:
        """The same mean everywhere."""
        return cls(np.array([[mean_ns]], dtype=np.int64), np.zeros(tiles, dtype=np.int32), law or Law.constant())

    @classmethod
    def mapped(cls, pattern_ns: Int64s, law: Law | None = None) -> Cost:
        """A pattern with one cell a tile, shape (frames, tiles)."""
        pattern = np.ascontiguousarray(np.atleast_2d(pattern_ns), dtype=np.int64)
        return cls(pattern, np.arange(pattern.shape[1], dtype=np.int32), law or Law.constant())


def laid_over(recorded: tuple[int, ...], shape: tuple[int, ...], repeat: bool = False) -> Int32s:
    """Cell of each tile when a map of ``recorded`` tiles is laid over ``shape`` tiles; shape (tiles,).

    ``repeat`` False stretches the map (the same problem, cut finer); True sets copies side by side,
    every other one mirrored so that no seam is seen (a larger problem of the same kind).
    """
    axes = []
    for cells, tiles in zip(recorded, shape, strict=True):
        at = np.arange(tiles)
        if repeat:
            turn = at % (2 * cells)
            axes.append(np.minimum(turn, 2 * cells - 1 - turn))
        else:
            axes.append(at * cells // tiles)
    grid = np.ravel_multi_index(np.meshgrid(*axes, indexing="ij"), recorded)
    return grid.ravel().astype(np.int32)

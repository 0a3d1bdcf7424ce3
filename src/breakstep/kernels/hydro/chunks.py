"""How a padded tile is cut into chunks, and how chunks are read and written.

This module knows places in memory and refuses to know physics. A chunk fits into a scratch row
(``rows``) and is either some whole lines of zones or some columns of them, so that reading and writing
run over contiguous pieces.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from breakstep.kernels.compiled import inlined
from breakstep.kernels.hydro.rows import HALO, ROW, SPEED, part

Array = npt.NDArray[np.float64]
Plan = npt.NDArray[Any]

NONE = 2**62
"""Stands for no zone where the first of several is looked for."""

# A chunk is read and written in equal pieces of contiguous memory: ``pieces`` times ``load`` numbers with
# their halo, or ``store`` numbers of interior. Places count from the start of one component.
_CHUNK = np.dtype(
    [
        ("step", np.int64),  # distance of neighbours along the sweep axis
        ("load_pieces", np.int64),
        ("load_length", np.int64),
        ("store_pieces", np.int64),
        ("store_length", np.int64),
        ("padded_start", np.int64),  # in the padded array: where loading starts,
        ("interior_start", np.int64),  # where the interior starts,
        ("padded_stride", np.int64),  # from piece to piece
        ("result_start", np.int64),  # in the new array
        ("result_stride", np.int64),
        ("row_start", np.int64),  # of the interior in a scratch row
        ("row_stride", np.int64),
    ]
)


def _shares(total: int, most: int) -> list[tuple[int, int]]:
    """Cut ``total`` into the fewest (start, length) of at most ``most``."""
    return [(start, min(most, total - start)) for start in range(0, total, most)]


def _line_chunks(blocks: int, lines: int, columns: int) -> list[tuple[int, ...]]:
    """Chunks of whole blocks, each ``lines + 2 HALO`` lines of ``columns`` contiguous zones."""
    padded = (lines + 2 * HALO) * columns
    return [
        (
            columns, many, padded, many, lines * columns,
            start * padded, start * padded + HALO * columns, padded,
            start * lines * columns, lines * columns,
            HALO * columns, padded,
        )
        for start, many in _shares(blocks, ROW // padded)
    ]  # fmt: skip


def _column_chunks(blocks: int, lines: int, columns: int) -> list[tuple[int, ...]]:
    """Chunks of some columns and some lines of one block, for blocks that do not fit into a row."""
    width = min(columns, max(16, ROW // (lines + 2 * HALO) // 16 * 16))  # whole cache lines
    return [
        (
            width_here, many + 2 * HALO, width_here, many, width_here,
            (block * (lines + 2 * HALO) + line) * columns + column,
            (block * (lines + 2 * HALO) + line + HALO) * columns + column, columns,
            (block * lines + line) * columns + column, columns,
            HALO * width_here, width_here,
        )
        for block in range(blocks)
        for column, width_here in _shares(columns, width)
        for line, many in _shares(lines, ROW // width - 2 * HALO)
    ]  # fmt: skip


@lru_cache(maxsize=512)
def chunk_plan(blocks: int, lines: int, columns: int) -> Plan:
    """How a padded array of shape (blocks, lines + 2 HALO, columns) is cut into chunks.

    Returns
    -------
    ndarray, shape (n_chunks,)
        One record a chunk; read-only. Together their interiors cover every zone once.
    """
    fits = (lines + 2 * HALO) * columns <= ROW
    plan = np.array((_line_chunks if fits else _column_chunks)(blocks, lines, columns), dtype=_CHUNK)
    plan.flags.writeable = False
    return plan


@inlined
def load(source: Array, s: Array, row: int, chunk: Any) -> None:
    for piece in range(chunk.load_pieces):
        start = chunk.padded_start + piece * chunk.padded_stride
        there = part(s, row, piece * chunk.load_length, chunk.load_length)
        here = source[start : start + chunk.load_length]
        for i in range(chunk.load_length):
            there[i] = here[i]


@inlined
def store(s: Array, row: int, target: Array, chunk: Any) -> None:
    for piece in range(chunk.store_pieces):
        start = chunk.result_start + piece * chunk.result_stride
        here = part(s, row, chunk.row_start + piece * chunk.row_stride, chunk.store_length)
        there = target[start : start + chunk.store_length]
        for i in range(chunk.store_length):
            there[i] = here[i]


@inlined
def add(source: Array, s: Array, row: int, target: Array, chunk: Any) -> None:
    """Store a row of changes added to what they change."""
    for piece in range(chunk.store_pieces):
        start = chunk.result_start + piece * chunk.result_stride
        change = part(s, row, chunk.row_start + piece * chunk.row_stride, chunk.store_length)
        first = chunk.interior_start + piece * chunk.padded_stride
        here = source[first : first + chunk.store_length]
        there = target[start : start + chunk.store_length]
        for i in range(chunk.store_length):
            there[i] = here[i] + change[i]


@inlined
def largest_of(values: Array) -> float:
    """Largest of non-negative numbers. Four at a time: one chain of comparisons would cost 1 ns each."""
    a = b = c = d = 0.0
    fours = values.size // 4 * 4
    for i in range(0, fours, 4):
        a = max(a, values[i])
        b = max(b, values[i + 1])
        c = max(c, values[i + 2])
        d = max(d, values[i + 3])
    for i in range(fours, values.size):
        a = max(a, values[i])
    return max(max(a, b), max(c, d))


@inlined
def largest_speed(s: Array, chunk: Any) -> float:
    """Largest |u| + c of the chunk's interior."""
    largest = 0.0
    for piece in range(chunk.store_pieces):
        speeds = part(s, SPEED, chunk.row_start + piece * chunk.row_stride, chunk.store_length)
        largest = max(largest, largest_of(speeds))
    return largest


@inlined
def first_unsound(sound: Array) -> int:
    """Index of the first number that is not 1, or ``NONE``. Counting first is what vectorises."""
    count = 0
    for i in range(sound.size):
        count += 1 if sound[i] != 1.0 else 0
    first = NONE
    if count > 0:
        for i in range(sound.size):
            if sound[i] != 1.0:
                first = min(first, i)
    return first


@inlined
def first_bad(s: Array, row: int, chunk: Any) -> int:
    """Flat index in the new array of the chunk's first zone that ``row`` calls unsound, or ``NONE``."""
    first = NONE
    for piece in range(chunk.store_pieces):
        sound = part(s, row, chunk.row_start + piece * chunk.row_stride, chunk.store_length)
        bad = first_unsound(sound)
        if bad < NONE:
            first = min(first, chunk.result_start + piece * chunk.result_stride + bad)
    return first

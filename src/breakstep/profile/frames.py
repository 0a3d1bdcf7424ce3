"""Tables as pandas frames, and looking things up in them by number.

It knows the layouts; it does not ask whether what the rows say makes sense.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, TypeAlias

import numpy as np
import pandas as pd
import pyarrow as pa
from numpy.typing import NDArray

Frames: TypeAlias = Mapping[str, pd.DataFrame]
Integers: TypeAlias = NDArray[np.int64]


def frames_of(tables: Mapping[str, pa.Table]) -> dict[str, pd.DataFrame]:
    """Each table as a frame; words become categories, tasks are sorted by number."""
    frames = {name: table.replace_schema_metadata(None).to_pandas() for name, table in tables.items()}
    tasks = frames["tasks"]
    if not tasks["task"].is_monotonic_increasing:
        frames["tasks"] = tasks.sort_values("task", kind="stable", ignore_index=True)
    return frames


def integers(frame: pd.DataFrame, column: str) -> Integers:
    """A column as int64."""
    return frame[column].to_numpy(dtype=np.int64)


def codes_of(frame: pd.DataFrame, column: str, words: Sequence[str]) -> Integers:
    """For each row, the place of its word in ``words``; -1 for a word that is not among them."""
    codes, categories = words_of(frame, column)
    table = np.array([words.index(w) if w in words else -1 for w in categories], dtype=np.int64)
    return table[codes] if len(table) else codes


def words_of(frame: pd.DataFrame, column: str) -> tuple[Integers, list[str]]:
    """Codes of a column of words, and the words that the codes stand for."""
    codes: Integers = frame[column].cat.codes.to_numpy().astype(np.int64)
    return codes, list(frame[column].cat.categories)


def positions(numbers: Integers, wanted: Integers) -> Integers:
    """Where each wanted number stands in ascending ``numbers``; -1 where it is not among them."""
    if len(numbers) == 0:
        return np.full(len(wanted), -1, dtype=np.int64)
    if numbers[-1] - numbers[0] == len(numbers) - 1:  # consecutive: no search needed
        outside = (wanted < numbers[0]) | (wanted > numbers[-1])
        return np.where(outside, -1, wanted - numbers[0])
    found: Integers = np.searchsorted(numbers, wanted).astype(np.int64)
    found[found == len(numbers)] = 0
    found[numbers[found] != wanted] = -1
    return found


def thread_keys(frame: pd.DataFrame) -> Integers:
    """One number per (worker, thread), in the order of workers, then threads."""
    keys: Integers = integers(frame, "worker") * 2**32 + integers(frame, "thread")
    return keys


def sums_by(groups: Integers, values: Integers, size: int) -> Integers:
    """Sum of ``values`` for each group number below ``size``, exact."""
    sums = np.zeros(size, dtype=np.int64)
    np.add.at(sums, groups, values)
    return sums


def summed(frame: pd.DataFrame, by: str | list[str], value: str) -> dict[Any, int]:
    """Sums of an integer column by the groups that occur, in their sorted order."""
    series = frame.groupby(by, observed=True, sort=True)[value].sum()
    return {key: int(total) for key, total in series.items()}

"""Reading timer records: a Parquet or CSV file with one row for each rank, step and cycle.

Knows what makes records usable and says everything that is wrong with a file at once, with row numbers. Refuses to
know what a run does with them.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet
from numpy.typing import NDArray

from breakstep.scenario.faults import did_you_mean

PLACES = ("tile", "rank")
NEEDED = ("step", "cycle", "seconds")
WHOLE = ("place", "cycle", "iteration")
LISTED = 3  # rows that a sentence names; the rest are counted
MOST_SLOTS = 20  # for each row: a table of records with more empty places than that is not one run's
LONGEST = 1e6  # seconds of one record; a longer one is in other units

Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Records:
    """Sound records.

    Attributes
    ----------
    seconds : mapping of str to ndarray, shape (cycles, iterations, ranks)
        By step [s]; NaN in iterations that a cycle did not need.
    sent : mapping of str to float
        By step, bytes that a rank sent in a call, on average; empty if the file does not say.
    """

    seconds: Mapping[str, NDArray[np.float64]]
    sent: Mapping[str, float]

    @property
    def cycles(self) -> int:
        """Recorded cycles."""
        return len(next(iter(self.seconds.values())))


def read_records(path: Path, steps: Sequence[str], ranks: int | None) -> tuple[Records | None, tuple[str, ...]]:
    """Read and check a file of timer records.

    Parameters
    ----------
    path : Path
        ``.parquet`` or ``.csv`` with the columns ``tile`` (or ``rank``, from 0), ``step``, ``cycle``, ``seconds``,
        and if wanted ``iteration`` and ``bytes`` (sent by the rank in this call); others are left alone. Cycles and
        iterations may be counted from any number.
    steps : sequence of str
        The steps that there must be.
    ranks : int or None
        How many ranks; None if that is not known.

    Returns
    -------
    Records or None, tuple of str
        All that is wrong, one sentence each; then there are no records.
    """
    try:
        state = path.stat()
    except OSError as error:
        return None, (f"{path} cannot be read ({error.strerror or error}); expected a file of timer records",)
    return _read(path, tuple(steps), ranks, (state.st_mtime_ns, state.st_size))


@lru_cache(maxsize=2)  # a scenario is checked, then built
def _read(
    path: Path, steps: tuple[str, ...], ranks: int | None, state: tuple[int, int]
) -> tuple[Records | None, tuple[str, ...]]:
    try:
        table = _table(path)
    except (pa.ArrowException, OSError, UnicodeDecodeError) as error:
        first = str(error).splitlines()[0]
        return None, (f"{path.name} is no file of timer records: {first}",)
    found = _missing(table)
    if found:
        return None, tuple(f"{path.name}: {fault}" for fault in found)
    check = _Check(table, steps, ranks, header=path.suffix != ".parquet")
    records = check.records()
    return records, tuple(f"{path.name}: {fault}" for fault in check.faults)


def _table(path: Path) -> dict[str, Any]:
    """The columns in use, and the names of all."""
    wanted = (*PLACES, *NEEDED, "iteration", "bytes")
    if path.suffix == ".parquet":
        names = pa.parquet.read_schema(path).names
        table = pa.parquet.read_table(path, columns=[name for name in wanted if names.count(name) == 1])
    else:
        table = pa.csv.read_csv(path)
        names = table.column_names
    columns = {name: table.column(name).to_pandas() for name in wanted if list(table.column_names).count(name) == 1}
    return {"names": names, "rows": table.num_rows, "columns": columns}


def _missing(table: Mapping[str, Any]) -> list[str]:
    """Faults of the file as a whole."""
    names, faults = table["names"], []
    used = (*PLACES, *NEEDED, "iteration", "bytes")
    faults += [f"there are {names.count(name)} columns {name}" for name in used if names.count(name) > 1]
    places = [name for name in PLACES if name in names]
    if len(places) == 2:
        faults.append("expected a column tile or a column rank, came both")
    absent = [name for name in NEEDED if name not in names] + ([] if places else ["tile or rank"])
    came = ", ".join(names) or "none"
    faults += [f"the column {name} is missing{_hint(name, names)}; the columns are {came}" for name in absent]
    if not faults and table["rows"] == 0:
        faults.append("there are no records in it")
    return faults


def _hint(name: str, names: Sequence[str]) -> str:
    hint = did_you_mean(name.split(" ")[0], names)
    return hint.rstrip("?") if hint.startswith("; did") else ""


class _Check:
    """One file's records on their way through the checks; keeps every fault."""

    def __init__(self, table: Mapping[str, Any], steps: tuple[str, ...], ranks: int | None, header: bool) -> None:
        columns = table["columns"]
        self.steps, self.ranks = steps, ranks
        self.place = next(name for name in PLACES if name in columns)
        self.first_line = 2 if header else 1  # a CSV file's first line has the names; a Parquet file's rows from 1
        self.line = "line" if header else "row"
        self.faults: list[str] = []
        self.sound = np.ones(table["rows"], dtype=bool)
        self.words = columns["step"].astype("category")
        self.place_number = self._whole(self.place, columns[self.place])
        self.cycle = self._whole("cycle", columns["cycle"])
        self.iteration = self._whole("iteration", columns["iteration"]) if "iteration" in columns else None
        self.seconds = self._amount("seconds", columns["seconds"], LONGEST)
        self.bytes = self._amount("bytes", columns["bytes"], 1e15) if "bytes" in columns else None
        self.step = self._step_numbers()
        self._ranks_in_range()

    def records(self) -> Records | None:
        """The records, or None if there is anything wrong with them."""
        shape = self._shape()
        if shape is None:
            return None
        slot = self._slots(shape)
        self._no_duplicates(slot, int(np.prod(shape)))
        there = np.zeros(int(np.prod(shape)), dtype=bool)
        there[slot] = True
        self._no_gaps(there.reshape(shape))
        if self.faults:
            return None
        seconds = np.full(len(there), np.nan)
        seconds[slot] = self.seconds[self.sound]
        by_step = dict(zip(self.steps, seconds.reshape(shape), strict=True))
        return Records({name: _without_empty(part) for name, part in by_step.items()}, self._sent())

    # ---- single columns --------------------------------------------------------------------------

    def _blame(self, bad: Mask, sentence: str, values: pd.Series[Any], has_place: bool = False) -> None:
        """Note a fault of some rows; unless their places are known, leave them out of what follows."""
        rows = np.flatnonzero(bad)
        if len(rows):
            named = ", ".join(f"{values.iloc[row]} in {self._where(row)}" for row in rows[:LISTED])
            more = f" and {len(rows) - LISTED} more" if len(rows) > LISTED else ""
            self.faults.append(f"{sentence}, came {named}{more}")
            self.sound &= ~bad | has_place

    def _where(self, row: int) -> str:
        return f"{self.line} {row + self.first_line}"

    def _whole(self, name: str, values: pd.Series[Any]) -> NDArray[np.int64]:
        if pd.api.types.is_integer_dtype(values.dtype):
            numbers = values.to_numpy()
            bad = (numbers < 0) | (numbers > np.iinfo(np.int64).max)
        else:
            numbers = _numbers(values)
            with np.errstate(invalid="ignore"):
                bad = ~((numbers >= 0) & (numbers < 2**53) & (numbers == np.floor(numbers)))
        self._blame(bad, f"{name}: expected whole numbers from 0", values)
        return np.where(bad, 0, numbers).astype(np.int64)

    def _amount(self, name: str, values: pd.Series[Any], most: float) -> NDArray[np.float64]:
        numbers = _numbers(values)
        with np.errstate(invalid="ignore"):
            bad = ~((numbers >= 0.0) & (numbers <= most))
        self._blame(bad, f"{name}: expected numbers from 0 to {most:g}", values, has_place=True)
        return numbers

    def _step_numbers(self) -> NDArray[np.int64]:
        """Place of each row's step among those that there must be; -1 for another."""
        names = [str(name) for name in self.words.cat.categories]
        place = np.array([self.steps.index(n) if n in self.steps else -1 for n in names] or [-1], dtype=np.int64)
        codes = self.words.cat.codes.to_numpy()
        numbers = np.where(codes < 0, -1, place[codes])
        unknown = [name for name in names if name not in self.steps]
        hint = did_you_mean(unknown[0], self.steps) if unknown else ""
        bad = numbers < 0
        self._blame(bad, f"step: expected {_or(self.steps)}", self.words)
        if bad.any():
            self.faults[-1] += hint if hint.startswith("; did") else "; list every step in timers.steps"
        return np.asarray(numbers, dtype=np.int64)

    def _ranks_in_range(self) -> None:
        if self.ranks is not None:
            bad = self.sound & (self.place_number >= self.ranks)
            expected = f"{self.place}: expected 0 to {self.ranks - 1}, one for each tile of the mesh"
            self._blame(bad, expected, pd.Series(self.place_number))

    # ---- all together ----------------------------------------------------------------------------

    def _shape(self) -> tuple[int, int, int, int] | None:
        """Steps, cycles, iterations and ranks; None where nothing can be said about gaps."""
        if not self.sound.any():
            return None
        self.first_cycle = int(self.cycle[self.sound].min())
        cycles = int(self.cycle[self.sound].max()) - self.first_cycle + 1
        self.first_iteration, iterations = 0, 1
        if self.iteration is not None:
            self.first_iteration = int(self.iteration[self.sound].min())
            iterations = int(self.iteration[self.sound].max()) - self.first_iteration + 1
        ranks = self.ranks if self.ranks is not None else int(self.place_number[self.sound].max()) + 1
        if len(self.steps) * cycles * iterations * ranks > MOST_SLOTS * (len(self.sound) + 1000):
            self.faults.append(
                f"there are gaps: {len(self.sound)} records cannot fill {len(self.steps)} steps, {cycles} cycles"
                f" from {self.first_cycle}, {iterations} iterations and {ranks} ranks"
            )
            return None
        return len(self.steps), cycles, iterations, ranks

    def _slots(self, shape: tuple[int, int, int, int]) -> NDArray[np.int64]:
        """The place of each sound row in an array of that shape, flat."""
        _, cycles, iterations, ranks = shape
        at = self.step[self.sound] * cycles + self.cycle[self.sound] - self.first_cycle
        iteration = 0 if self.iteration is None else self.iteration[self.sound] - self.first_iteration
        return np.asarray((at * iterations + iteration) * ranks + self.place_number[self.sound], dtype=np.int64)

    def _no_duplicates(self, slot: NDArray[np.int64], size: int) -> None:
        first = np.full(size, -1, dtype=np.int64)
        rows = np.flatnonzero(self.sound)
        first[slot[::-1]] = rows[::-1]  # the lowest row is written last
        again = rows[first[slot] != rows]
        if len(again):
            named = ", ".join(
                f"{self._where(row)} repeats {self._where(int(first[slot[np.searchsorted(rows, row)]]))}"
                for row in again[:LISTED]
            )
            more = f" and {len(again) - LISTED} more do so" if len(again) > LISTED else ""
            self.faults.append(f"expected one record for each {self._key()}, but {named}{more}")

    def _key(self) -> str:
        return f"{self.place}, step" + (" and cycle" if self.iteration is None else ", cycle and iteration")

    def _no_gaps(self, there: NDArray[np.bool_]) -> None:
        """Every rank has every cycle, and in each as many iterations as the others, without a hole."""
        needed = there.any(axis=3, keepdims=True)
        needed = np.flip(np.logical_or.accumulate(np.flip(needed, axis=2), axis=2), axis=2)
        needed[:, :, 0] = True
        absent = np.argwhere(needed & ~there)
        if len(absent):
            named = "; ".join(self._absent(*map(int, place)) for place in absent[:LISTED])
            more = f"; and {len(absent) - LISTED} more" if len(absent) > LISTED else ""
            self.faults.append(f"there is no record of {named}{more}")

    def _absent(self, step: int, cycle: int, iteration: int, rank: int) -> str:
        last = "" if self.iteration is None else f", iteration {iteration + self.first_iteration}"
        return f"{self.place} {rank}, step {self.steps[step]}, cycle {cycle + self.first_cycle}{last}"

    def _sent(self) -> dict[str, float]:
        """Mean bytes of a call by step."""
        if self.bytes is None:
            return {}
        sums = np.bincount(self.step, weights=self.bytes, minlength=len(self.steps))
        calls = np.bincount(self.step, minlength=len(self.steps))
        return {name: float(total / count) for name, total, count in zip(self.steps, sums, calls, strict=True)}


def _numbers(values: pd.Series[Any]) -> NDArray[np.float64]:
    """What can be read as numbers; NaN for the rest, times and truth values included, which pandas would convert."""
    kind = values.dtype
    if pd.api.types.is_bool_dtype(kind) or pd.api.types.is_datetime64_any_dtype(kind) or kind.kind == "m":
        return np.full(len(values), np.nan)
    return np.asarray(pd.to_numeric(values, errors="coerce").to_numpy(dtype=np.float64))


def _without_empty(seconds: NDArray[np.float64]) -> NDArray[np.float64]:
    """Without the iterations that other steps needed and this one never."""
    return seconds[:, np.isfinite(seconds).any(axis=(0, 2))]


def _or(names: Sequence[str]) -> str:
    return " or ".join(part for part in (", ".join(names[:-1]), *names[-1:]) if part)

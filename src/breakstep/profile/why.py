"""Why a thread stood idle: one wait, and the chain of causes behind it, with parts that add up to the wait.

It picks a gap of the ledger and puts into words what :mod:`breakstep.profile.causes` found there. It explains idle
threads; a task that had to wait while its thread was busy with others cost nobody a core-second, and is no wait here.
"""

from __future__ import annotations

import html
import textwrap
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from breakstep.errors import ChoiceError
from breakstep.profile.frames import Frames, Integers, integers, positions, words_of
from breakstep.profile.ledger import Ledger
from breakstep.profile.rounding import Scale
from breakstep.profile.words import LABELS, moment_name, task_name, tile_grid, tile_names

WIDTH = 80
SHOWN = 10  # parts told one by one, so that a chain fits a terminal of 25 lines; the others are summed up
_ATTRIBUTES = ["kind", "worker", "thread", "stage", "tile", "cycle", "iteration"]
_LABEL = 22  # columns for an account's label


@dataclass(frozen=True)
class Why:
    """One wait of one thread.

    Attributes
    ----------
    wait_ns : int
        How long the thread stood idle [ns]; 0 if no thread did.
    start_ns, end_ns : int
        When [ns].
    thread : tuple of (int, int)
        Worker and thread; (-1, -1) if none.
    task : mapping of str to object
        The task that ended the wait, as in the task table (``task``, ``kind``, ``stage``, ``tile``, ...); empty if
        there was none.
    parts : DataFrame
        The wait's parts, the latest first: ``account``, ``reason``, ``task`` (number of the one at fault), ``kind``,
        ``worker``, ``thread``, ``stage``, ``tile``, ``cycle``, ``iteration``, ``start_ns``, ``end_ns``, ``ns``. The
        last column sums to ``wait_ns``.
    title : str
        Name and mode of the run.
    asked : str
        What was asked for, in words.
    """

    wait_ns: int
    start_ns: int
    end_ns: int
    thread: tuple[int, int]
    task: Mapping[str, Any]
    parts: pd.DataFrame
    title: str
    asked: str
    _tiles: Sequence[str] = field(repr=False)
    _others: Sequence[str] = field(repr=False)

    @property
    def accounts_ns(self) -> dict[str, int]:
        """The wait by account [ns], the largest first."""
        sums = self.parts.groupby("account", sort=False)["ns"].sum().sort_values(ascending=False, kind="stable")
        return {str(account): int(ns) for account, ns in sums.items()}

    def sentences(self) -> list[str]:
        """What was going on in each part, in words."""
        rows = _records(self.parts)
        return [_sentence(row, self._tiles, other) for row, other in zip(rows, self._others, strict=True)]

    def head(self) -> str:
        """The wait itself in a sentence or two."""
        if not self.task:
            return f"{self.title}: no thread stood idle before {self.asked}; there is no wait to explain."
        worker, thread = self.thread
        when = Scale.of(self.end_ns)
        return (
            f"{self.title}: {self.asked} is {Scale.of(self.wait_ns).text(self.wait_ns)}. Thread {thread} of worker"
            f" {worker} stood idle until {when.text(self.end_ns)} after the first task's start, when it took up"
            f" {task_name(self.task, self._tiles)}."
        )

    def told(self) -> tuple[list[tuple[str, str, str]], Scale]:
        """Time, account and sentence of the parts worth telling, the latest first, and the rest in one; the scale.

        The times are rounded so that they add up to the wait as it is printed.
        """
        chosen = np.zeros(len(self.parts), dtype=bool)
        chosen[np.argsort(-integers(self.parts, "ns"), kind="stable")[:SHOWN]] = True
        amounts, names, sentences = integers(self.parts, "ns"), list(self.parts["account"]), self.sentences()
        rows = [(int(amounts[i]), LABELS[names[i]], sentences[i]) for i in np.flatnonzero(chosen)]
        if not chosen.all():
            count, rest = int((~chosen).sum()), int(amounts[~chosen].sum())
            rows.append((rest, "all the rest", f"{count} shorter part{'s' if count > 1 else ''}"))
        scale = Scale.of(self.wait_ns)
        times = scale.rounded([ns for ns, _, _ in rows])
        return [(time, label, text) for time, (_, label, text) in zip(times, rows, strict=True)], scale

    def lines(self) -> list[str]:
        """The wait and its chain of causes as text of at most 80 columns."""
        head = textwrap.wrap(self.head(), WIDTH)
        if not self.task:
            return head
        rows, scale = self.told()
        width = max(len(scale.unit), *(len(time) for time, _, _ in rows), len(scale.number(self.wait_ns))) + 1
        lines = [*head, "", f"{scale.unit:>{width}}  {'account':<{_LABEL}}what was going on, the latest first"]
        for time, label, text in rows:
            lines += _row(f"{time:>{width}}  {label:<{_LABEL}}", text)
        return [*lines, f"{scale.number(self.wait_ns):>{width}}  = the wait"]

    def as_json(self) -> dict[str, Any]:
        """The figures, in whole nanoseconds."""
        worker, thread = self.thread
        place = {"worker": worker, "thread": thread, "start_ns": self.start_ns, "end_ns": self.end_ns}
        parts = [
            {**row, "tile_name": _tile_of(row, self._tiles), "text": text}
            for row, text in zip(_records(self.parts), self.sentences(), strict=True)
        ]
        task = {**self.task, "tile_name": _tile_of(self.task, self._tiles)} if self.task else None
        return {"wait_ns": self.wait_ns, **place, "task": task, "accounts_ns": self.accounts_ns, "parts": parts}

    def _repr_html_(self) -> str:
        head = f"<p>{html.escape(self.head())}</p>"
        if not self.task:
            return head
        rows, scale = self.told()
        total = (scale.number(self.wait_ns), "= the wait", "")
        cells = "".join(
            f"<tr><td style='text-align:right'>{html.escape(time)}</td><td style='text-align:left'>{html.escape(label)}"
            f"</td><td style='text-align:left'>{html.escape(text)}</td></tr>"
            for time, label, text in [*rows, total]
        )
        titles = "".join(f"<th scope='col'>{title}</th>" for title in (scale.unit, "account", "what was going on"))
        return f"{head}<table><thead><tr>{titles}</tr></thead><tbody>{cells}</tbody></table>"


def _records(parts: pd.DataFrame) -> list[dict[str, Any]]:
    return [{str(key): value for key, value in row.items()} for row in parts.to_dict("records")]


def _row(left: str, text: str) -> Iterator[str]:
    for line in textwrap.wrap(text, WIDTH - len(left)) or [""]:
        yield left + line
        left = " " * len(left)


def _tile_of(task: Mapping[str, Any], tiles: Sequence[str]) -> str | None:
    return tiles[task["tile"]] if 0 <= task["tile"] < len(tiles) else None


def _sentence(part: Mapping[str, Any], tiles: Sequence[str], other: str) -> str:
    """One part in words."""
    name, worker = task_name(part, tiles), f"worker {part['worker']}"
    if part["reason"] == "ready":
        return f"{name} had all it needed; {worker} had not yet begun it"
    if part["reason"] == "queued":
        return f"{name} had all it needed, but {worker} was busy with {other or 'something else'}"
    if part["reason"] == "under way":
        what = f"what came of {name}" if part["kind"] == "step" else name
        return f"{what} was on its way from {worker}"
    if part["kind"] == "pack":
        return f"{worker} was cutting {name}"
    if part["kind"] != "step":
        return f"{worker} was working on {name}"
    return f"{worker} was running {name}"


def why(
    ledger: Ledger,
    frames: Frames,
    tiles: Sequence[Mapping[str, Any]],
    title: str,
    *,
    tile: int | Sequence[int] | None = None,
    cycle: int | None = None,
    step: str | None = None,
) -> Why:
    """The longest wait of a run, or the longest before the tasks named.

    Parameters
    ----------
    tiles : sequence of mappings
        Of the run's manifest.
    title : str
        What to call the run.
    tile : int or sequence of int, optional
        Its number, or its place in the grid of tiles.
    cycle : int, optional
    step : str, optional
        A step, or what else the task table calls a stage.

    Raises
    ------
    ChoiceError
        The run has no such tile, cycle, step or task.
    """
    names = tile_names(tiles)
    number = None if tile is None else tile_number(tile, tiles)
    meant = _meant(frames, number, cycle, step, names)
    asked = _asked(number, cycle, step, names)
    gaps = ledger.gaps
    at = positions(integers(frames["tasks"], "task"), integers(gaps, "task"))
    length = np.where(meant[at], integers(gaps, "end_ns") - integers(gaps, "start_ns"), 0)
    if not length.any():
        parts = ledger.explain(-1)  # of no task: no rows
        return Why(0, 0, 0, (-1, -1), {}, _with_attributes(parts, frames), title, asked, names, [])
    row = int(np.argmax(length))
    gap = gaps.iloc[row]
    task = int(gap["task"])
    origin = ledger.first_ns
    parts = _with_attributes(ledger.explain(task), frames)
    return Why(
        int(length[row]),
        int(gap["start_ns"]) - origin,
        int(gap["end_ns"]) - origin,
        (int(gap["worker"]), int(gap["thread"])),
        _plain(frames["tasks"].iloc[int(at[row])]),
        parts.assign(start_ns=parts["start_ns"] - origin, end_ns=parts["end_ns"] - origin),
        title,
        "the longest wait" + ("" if asked == "any task" else f" before {asked}"),
        names,
        _busy_with(parts, frames, names),
    )


def tile_number(tile: int | Sequence[int], tiles: Sequence[Mapping[str, Any]]) -> int:
    """The number of a tile named by its number, or by its place in the grid.

    Raises
    ------
    ChoiceError
        There is no such tile.
    """
    grid = tile_grid(tiles)
    place = (tile,) if isinstance(tile, int) else tuple(tile)
    found = tile if isinstance(tile, int) else _at(place, grid)
    if found is None or not 0 <= found < len(tiles):
        extent = [1 + max(at[axis] for at in grid) for axis in range(3)]
        raise ChoiceError(
            f"tile {','.join(map(str, place))}: expected a tile of the run, which has"
            f" {' x '.join(map(str, extent))} of them along x, y and z, counted from 0; name one of those"
        )
    return found


def _at(place: tuple[int, ...], grid: Mapping[tuple[int, int, int], int]) -> int | None:
    """The tile at a place of the grid, of which axes with a single tile may be left out at its end."""
    if not 1 <= len(place) <= 3:
        return None
    i, j, k = (*place, 0, 0)[:3]
    return grid.get((i, j, k))


def _meant(
    frames: Frames, tile: int | None, cycle: int | None, step: str | None, names: Sequence[str]
) -> NDArray[np.bool_]:
    """Which tasks are asked about."""
    tasks = frames["tasks"]
    chosen = np.ones(len(tasks), dtype=bool)
    if step is not None:
        chosen &= _has_step(tasks, step)
    if cycle is not None:
        cycles = integers(tasks, "cycle")
        if not (cycles == cycle).any():
            last = int(cycles.max(initial=-1))
            there = f"which has the cycles 0 to {last}" if last >= 0 else "which has none"
            raise ChoiceError(f"cycle {cycle}: expected a cycle of the run, {there}; name one of those")
        chosen &= cycles == cycle
    if tile is not None:
        chosen &= integers(tasks, "tile") == tile
    if len(tasks) and not chosen.any():
        raise ChoiceError(f"the run has no task for {_asked(tile, cycle, step, names)}; ask for less at once")
    return chosen


def _has_step(tasks: pd.DataFrame, step: str) -> NDArray[np.bool_]:
    codes, stages = words_of(tasks, "stage")
    fits = np.array([step == stage or step in stage.split("+") for stage in stages], dtype=bool)
    if not fits.any():
        steps = sorted({name for stage in stages if ":" not in stage for name in stage.split("+")})
        raise ChoiceError(f"step {step}: expected a step of the run, which has {', '.join(steps)}; name one of those")
    found: NDArray[np.bool_] = fits[codes]
    return found


def _asked(tile: int | None, cycle: int | None, step: str | None, names: Sequence[str]) -> str:
    words = [
        "any task" if step is None and tile is None and cycle is None else step or "a task",
        f"on tile {names[tile]}" if tile is not None else "",
        moment_name({"cycle": cycle, "iteration": -1}) if cycle is not None else "",
    ]
    return " ".join(filter(None, words))


def _with_attributes(parts: pd.DataFrame, frames: Frames) -> pd.DataFrame:
    """The parts with the place and phase of the tasks at fault."""
    tasks = frames["tasks"]
    rows = tasks[_ATTRIBUTES].iloc[positions(integers(tasks, "task"), integers(parts, "task"))].reset_index(drop=True)
    rows = rows.assign(kind=rows["kind"].astype(str), stage=rows["stage"].astype(str))
    whole = pd.concat([parts[["account", "reason", "task"]], rows, parts[["start_ns", "end_ns", "ns"]]], axis=1)
    return whole.reset_index(drop=True)


def _plain(row: pd.Series[Any]) -> dict[str, Any]:
    """A row of the task table in plain values."""
    return {str(key): value.item() if isinstance(value, np.generic) else value for key, value in row.items()}


def _busy_with(parts: pd.DataFrame, frames: Frames, names: Sequence[str]) -> list[str]:
    """For each part in which a thread was busy with other tasks, the one that took longest; else nothing."""
    tasks = frames["tasks"]
    columns = {name: integers(tasks, name) for name in ("worker", "thread", "start_ns", "end_ns")}
    return [
        _longest_between(row, tasks, columns, names) if row["reason"] == "queued" else "" for row in _records(parts)
    ]


def _longest_between(
    part: Mapping[str, Any], tasks: pd.DataFrame, columns: Mapping[str, Integers], names: Sequence[str]
) -> str:
    own = np.flatnonzero((columns["worker"] == part["worker"]) & (columns["thread"] == part["thread"]))
    low = np.maximum(columns["start_ns"][own], part["start_ns"])
    spent = np.minimum(columns["end_ns"][own], part["end_ns"]) - low
    task = tasks.iloc[own[int(np.argmax(spent))]]
    count = int((spent > 0).sum())
    others = f" and {count - 1} more" if count > 1 else ""
    return task_name(_plain(task), names) + others

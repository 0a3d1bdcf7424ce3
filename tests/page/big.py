"""A recorded run of a million tasks, made up in seconds: one worker a thread, tiles in a square, a hot spot that moves.

Times follow from the graph: a task starts when its worker is free and its inputs are there, so the ledger closes, and
whoever reads the page of it sees fronts that bend.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from breakstep.profile.schema import LAYOUTS
from tests.unit.profile.sketch import manifest, with_fields

STEPS = ("sweep_x", "sweep_y", "solve", "burn")
HALO = (True, True, False, False)  # steps that read their four neighbours
MEAN_NS = np.array([200_000, 200_000, 400_000, 300_000])
FLIGHT_NS = 60_000  # of a rim between workers
RIM_BYTES = 4096

Numbers = NDArray[np.int64]


@dataclass
class _Rows:
    """Columns of a table, phase by phase."""

    columns: dict[str, list[Any]] = field(default_factory=dict)

    def add(self, **columns: Any) -> None:
        for name, values in columns.items():
            self.columns.setdefault(name, []).append(values)

    def table(self, name: str) -> pa.Table:
        """The Arrow table of a layout; words are given as (code, words)."""
        layout = LAYOUTS[name]
        return pa.table([self._column(column) for column in layout.columns], schema=layout.arrow)

    def _column(self, column: Any) -> pa.Array:
        parts = self.columns.get(column.name, [])
        if not pa.types.is_dictionary(column.type):
            return pa.array(np.concatenate(parts) if parts else np.empty(0), type=column.type)
        words = parts[0][1] if parts else ("",)
        codes = np.concatenate([codes for codes, _ in parts]).astype(np.int32) if parts else np.empty(0, np.int32)
        return pa.DictionaryArray.from_arrays(pa.array(codes), pa.array(list(words)))


def big_profile(edge: int = 32, cycles: int = 244, workers: int = 16) -> Profile:
    """A run of ``edge**2 * 4 * cycles`` tasks."""
    record = RunRecord()
    made = _march(edge, cycles, workers)
    record.add_tables({name: rows.table(name) for name, rows in made.items()})
    record.manifest = _manifest(edge, cycles, workers)
    return Profile.from_record(with_fields(record))


def _manifest(edge: int, cycles: int, workers: int) -> dict[str, Any]:
    tiles = [{"origin": [i, j, 0], "shape": [1, 1, 1]} for i in range(edge) for j in range(edge)]
    placement = [int(worker) for worker in _owners(edge, workers)]
    mesh = {"shape": [edge, edge, 1], "tile_shape": [1, 1, 1], "tiles": tiles}
    return manifest(workers, workers, edge**2, cycles=cycles, placement=placement, mesh=mesh)


def _owners(edge: int, workers: int) -> Numbers:
    return np.arange(edge**2) * workers // edge**2


def _march(edge: int, cycles: int, workers: int) -> dict[str, _Rows]:
    tiles, numbers = edge**2, np.random.default_rng(7)
    owner, made = _owners(edge, workers), {name: _Rows() for name in LAYOUTS}
    made["threads"].add(worker=np.arange(workers), thread=np.zeros(workers, np.int64))
    place = np.arange(tiles).reshape(edge, edge)
    near = [np.roll(place, shift, axis).ravel() for axis in (0, 1) for shift in (1, -1)]
    free, end = np.zeros(workers, np.int64), np.zeros(tiles, np.int64)
    for phase in range(len(STEPS) * cycles):
        step, first = phase % len(STEPS), phase * tiles
        ready = end.copy()
        if HALO[step] and phase:
            for other in near:
                ready = np.maximum(ready, end[other] + np.where(owner[other] == owner, 0, FLIGHT_NS))
        cost = _costs(step, phase // len(STEPS), edge, numbers)
        start, end_now, free = _scheduled(ready, cost, free, workers)
        _add_tasks(made, first, phase, step, owner, start, end_now)
        if phase:
            _add_inputs(made, first, tiles, near if HALO[step] else [], owner, end)
        end = end_now
    return made


def _costs(step: int, cycle: int, edge: int, numbers: np.random.Generator) -> Numbers:
    cost = MEAN_NS[step] * numbers.uniform(0.9, 1.1, edge**2)
    if STEPS[step] == "burn":
        x, y = np.divmod(np.arange(edge**2), edge)
        centre = edge / 2 + edge / 4 * np.array([np.cos(cycle / 20), np.sin(cycle / 20)])
        cost *= 0.3 + 6.0 * np.exp(-((x - centre[0]) ** 2 + (y - centre[1]) ** 2) / (edge / 8) ** 2)
    return cost.astype(np.int64)


def _scheduled(ready: Numbers, cost: Numbers, free: Numbers, workers: int) -> tuple[Numbers, Numbers, Numbers]:
    """Each worker takes its tiles in the order in which they become ready: start and end, and when it is free."""
    by_worker, costs = ready.reshape(workers, -1), cost.reshape(workers, -1)
    order = np.argsort(by_worker, axis=1, kind="stable")
    sorted_ready, sorted_cost = np.take_along_axis(by_worker, order, 1), np.take_along_axis(costs, order, 1)
    sorted_ready = np.maximum(sorted_ready, free[:, None])
    before = np.cumsum(sorted_cost, axis=1) - sorted_cost
    begin = np.maximum.accumulate(sorted_ready - before, axis=1) + before
    start = np.empty_like(begin)
    np.put_along_axis(start, order, begin, 1)
    end = start + costs
    return start.ravel(), end.ravel(), end.max(axis=1)


def _add_tasks(
    made: dict[str, _Rows], first: int, phase: int, step: int, owner: Numbers, start: Numbers, end: Numbers
) -> None:
    tiles = len(owner)
    task, zero = np.arange(first, first + tiles), np.zeros(tiles, np.int64)
    made["tasks"].add(
        task=task, kind=(zero, ("step",)), stage=(zero + step, STEPS), tile=np.arange(tiles),
        cycle=zero + phase // len(STEPS), iteration=zero - 1, worker=owner, thread=zero, start_ns=start, end_ns=end,
        output_bytes=zero + 65536, skipped=zero.astype(bool),
    )  # fmt: skip
    made["intervals"].add(
        task=task, what=(zero, ("kernel",)), step=(zero + step, STEPS), start_ns=start + 2000, end_ns=end,
        cpu_ns=end - start - 2000,
    )  # fmt: skip


def _add_inputs(
    made: dict[str, _Rows], first: int, tiles: int, near: list[Numbers], owner: Numbers, end: Numbers
) -> None:
    own = np.arange(tiles)
    for other in [own, *near]:
        made["edges"].add(
            producer=first - tiles + other, consumer=first + own, kind=(np.zeros(tiles, np.int64), ("data",))
        )
    for other in near:
        across = np.flatnonzero(owner[other] != owner)
        sent = end[other[across]]
        made["transfers"].add(
            producer=first - tiles + other[across], field=(np.zeros(len(across), np.int64), ("gas",)),
            from_worker=owner[other[across]], to_worker=owner[across], bytes=np.full(len(across), RIM_BYTES),
            packed_ns=np.full(len(across), 5000), unpacked_ns=np.full(len(across), 5000),
            sent_ns=sent, arrived_ns=sent + FLIGHT_NS,
        )  # fmt: skip

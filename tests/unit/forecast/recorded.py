"""Recorded runs made by hand: a ring of tiles marching in phases, with every duration known.

A run is laid out as its own rules say: in lockstep all workers start a phase ``TURN`` and a ``GAP`` after its
predecessor's last task, and each takes its tiles in order, ``GAP`` apart. All times are whole nanoseconds, far larger
than what rounding loses.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from tests.unit.profile.sketch import manifest

GAP, TURN, HALO, REST, MESSAGE = 100_000, 900_000, 50_000, 30_000, 400_000


@dataclass(frozen=True)
class Stage:
    """One phase: name, kernel time of each tile [ns], whether it reads neighbours, and reductions.

    ``makes`` names a reduction that it feeds; ``uses`` lists (reduction, index of the phase that makes the result).
    """

    name: str
    costs: Sequence[int]
    cycle: int = 0
    iteration: int = -1
    neighbours: bool = True
    makes: str = ""
    uses: tuple[tuple[str, int], ...] = ()
    skipped: bool = False


@dataclass
class Ring:
    """Phases on a ring of tiles, run by workers that own blocks of them, in lockstep."""

    phases: Sequence[Stage]
    workers: int = 2
    lags: dict[str, int] = field(default_factory=dict)
    lockstep: bool = True
    packed: bool = False

    @property
    def tiles(self) -> int:
        """How many tiles."""
        return len(self.phases[0].costs)

    def owner(self, tile: int) -> int:
        """Worker of a tile."""
        return tile * self.workers // self.tiles

    def record(self) -> RunRecord:
        """Tasks, edges, intervals and transfers of the run."""
        self._record, self._next, self._clock = RunRecord(), 0, 0
        self._steps: list[list[int]] = []
        self._roots: dict[tuple[str, int], int] = {}
        self._ends: dict[int, int] = {}
        self._sent: set[tuple[int, int]] = set()
        self._release = -1
        self._record.threads.extend([(worker, 0) for worker in range(self.workers)])
        for number, phase in enumerate(self.phases):
            self._phase(number, phase)
        stages = list(dict.fromkeys(phase.name for phase in self.phases))
        self._record.manifest = manifest(
            self.workers,
            self.workers,
            self.tiles,
            mode="lockstep" if self.lockstep else "tasked",
            barriers=sorted({part for stage in stages for part in stage.split("+")}) if self.lockstep else [],
            placement=[self.owner(tile) for tile in range(self.tiles)],
            notes={"lags": self.lags, "stages": stages, "window": 9, "placement": "blocks"},
        )
        return self._record

    def profile(self) -> Profile:
        """The run as a profile."""
        return Profile.from_record(self.record())

    def _take(self) -> int:
        self._next += 1
        return self._next - 1

    def _phase(self, number: int, phase: Stage) -> None:
        packs = self._packs(number, phase) if self.packed and number and phase.neighbours else {}
        begin = self._clock + (TURN + GAP if number else 0)
        free = dict.fromkeys(range(self.workers), begin)
        steps = [self._take() for _ in range(self.tiles)]
        for tile, task in enumerate(steps):
            worker = self.owner(tile)
            start = free[worker]
            kernel = start + HALO
            end = kernel + phase.costs[tile] + REST
            name, place = phase.name, (tile, phase.cycle, phase.iteration, worker, 0)
            self._record.tasks.append((task, "step", name, *place, start, end, 800, phase.skipped))
            self._record.intervals.append((task, "halo", name, start, kernel, HALO))
            if not phase.skipped:
                self._record.intervals.append((task, "kernel", name, kernel, end - REST, phase.costs[tile]))
            free[worker], self._ends[task] = end + GAP, end
            self._inputs(number, phase, tile, task, packs)
        self._steps.append(steps)
        self._clock = max(free.values()) - GAP
        self._make(number, phase, steps)
        if self.lockstep:
            self._barrier(phase, steps)

    def _inputs(self, number: int, phase: Stage, tile: int, task: int, packs: dict[int, int]) -> None:
        if number:
            around = {(tile - 1) % self.tiles, tile, (tile + 1) % self.tiles} if phase.neighbours else {tile}
            for other in sorted(around):
                crosses = self.owner(other) != self.owner(tile)
                source = packs[other] if crosses and packs else self._steps[number - 1][other]
                self._record.edges.append((source, task, "data"))
                if crosses:
                    self._rim(number, other, tile)
        for name, made_by in phase.uses:
            self._record.edges.append((self._roots[name, made_by], task, "reduction"))
        if self._release >= 0:
            self._record.edges.append((self._release, task, "barrier"))

    def _rim(self, number: int, source: int, tile: int) -> None:
        """A rim goes once to each other worker."""
        key = (self._steps[number - 1][source], self.owner(tile))
        if key not in self._sent:
            self._sent.add(key)
            ended = self._ends[key[0]]
            self._record.transfers.append(
                (key[0], "rho", self.owner(source), key[1], 80, 0, 0, ended, ended + MESSAGE)
            )  # fmt: skip

    def _packs(self, number: int, phase: Stage) -> dict[int, int]:
        """Tasks that cut rims, each right after the task that made them."""
        packs = {}
        for tile in range(self.tiles):
            if any(self.owner((tile + step) % self.tiles) != self.owner(tile) for step in (-1, 1)):
                packs[tile] = task = self._take()
                place = (tile, phase.cycle, phase.iteration, self.owner(tile), 0, self._clock, self._clock)
                self._record.tasks.append((task, "pack", self.phases[number - 1].name, *place, 0, False))
                self._record.edges.append((self._steps[number - 1][tile], task, "data"))
        return packs

    def _make(self, number: int, phase: Stage, steps: list[int]) -> None:
        if not phase.makes:
            return
        root = self._take()
        place = (-1, phase.cycle, phase.iteration, 0, 0, self._clock, self._clock)
        self._record.tasks.append((root, "combine", phase.makes, *place, 0, False))
        self._record.edges.extend([(task, root, "reduction") for task in steps])
        earlier = [node for (name, _), node in self._roots.items() if name == phase.makes]
        self._record.edges.extend([(node, root, "reduction") for node in earlier[-1:]])
        self._roots[phase.makes, number] = root

    def _barrier(self, phase: Stage, steps: list[int]) -> None:
        counts = [self._take() for _ in range(self.workers)]
        release, label = self._take(), f"barrier:{phase.name}"
        for worker, count in enumerate(counts):
            place = (-1, phase.cycle, phase.iteration, worker, 0, self._clock, self._clock)
            self._record.tasks.append((count, "count", label, *place, 0, False))
            mine = [task for tile, task in enumerate(steps) if self.owner(tile) == worker]
            self._record.edges.extend([(task, count, "barrier") for task in mine])
            self._record.edges.append((count, release, "barrier"))
            self._record.transfers.append(
                (count, "control", worker, 0, 0, 0, 0, self._clock, self._clock + MESSAGE)
            )  # fmt: skip
        self._record.tasks.append(
            (release, "release", label, -1, phase.cycle, phase.iteration, 0, 0, self._clock, self._clock, 0, False)
        )
        self._release = release


MS = 1_000_000


def even(count: int = 4, tiles: int = 8, cost: int = 5 * MS) -> list[Stage]:
    """Phases of even work."""
    return [Stage(f"s{number}", [cost] * tiles) for number in range(count)]


def hot(count: int = 6, tiles: int = 8) -> list[Stage]:
    """One tile costs eight times as much in every phase, and it moves round the ring."""
    return [
        Stage(
            f"s{number % 3}", [(40 if tile == (number * 3) % tiles else 5) * MS for tile in range(tiles)], number // 3
        )
        for number in range(count)
    ]

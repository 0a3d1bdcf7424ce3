"""Tasks: a phase spelled out tile by tile, with every edge named.

Given who owns which tile, each phase becomes one step task a tile; the trees that make its reductions;
the pack tasks that cut rims bound for another worker, so that rims travel rather than tiles; and, where a
barrier stands, one counter a worker and one release, which carry control and no tile data.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from enum import StrEnum
from typing import TypeAlias

from breakstep.graph.unroll import INITIAL, Making, Phase, ValueRef
from breakstep.mesh.halo import HaloPlan, Rim, plan_halo
from breakstep.mesh.mesh import Triple
from breakstep.mesh.tiling import Tiling
from breakstep.steps.step import Read

TREE_ARITY = 8  # children of a reduction node; any fixed number gives fixed bits
ANYWHERE = -1  # owner of a tile that Dask may place


class Kind(StrEnum):
    """What a task is for."""

    STEP = "step"
    COMBINE = "combine"
    COUNT = "count"
    RELEASE = "release"
    PACK = "pack"


class EdgeKind(StrEnum):
    """What an edge carries."""

    DATA = "data"
    REDUCTION = "reduction"
    BARRIER = "barrier"


@dataclass(frozen=True)
class RimInput:
    """A rim that a step task reads: from a task that holds the neighbour, or from a pack task."""

    field: str
    rim: Rim
    producer: int
    packed: bool


@dataclass
class Task:
    """One node of the graph.

    A pack task with a ``making`` cuts out a contribution to that reduction, else the rims in ``cuts``.

    ``own`` maps each field to the task of the same tile that wrote it; a number below 0 stands for the
    initial state of tile ``-1 - number``. ``values`` and ``gate`` name the root of a reduction and a row.
    """

    number: int
    kind: Kind
    phase: Phase
    tile: int
    worker: int
    own: dict[str, int] = field(default_factory=dict)
    rims: list[RimInput] = field(default_factory=list)
    values: dict[str, tuple[int, int]] = field(default_factory=dict)
    gate: tuple[int, int] | None = None
    release: int | None = None
    children: tuple[int, ...] = ()
    making: Making | None = None
    previous: int | None = None
    cuts: tuple[tuple[str, Rim, int], ...] = ()  # pack: (field, rim, consumer tile)

    def edges(self) -> Iterator[tuple[int, EdgeKind]]:
        """Producers of this task's inputs, each with what the edge carries."""
        data = {*self.own.values(), *(rim.producer for rim in self.rims)}
        if self.kind is Kind.PACK:
            data |= set(self.children)
        yield from ((number, EdgeKind.DATA) for number in sorted(data))
        values = {root for root, _ in self.values.values()}
        if self.gate is not None:
            values.add(self.gate[0])
        if self.kind is Kind.COMBINE:
            values |= set(self.children) | ({self.previous} if self.previous is not None else set())
        yield from ((number, EdgeKind.REDUCTION) for number in sorted(values))
        if self.kind in (Kind.COUNT, Kind.RELEASE):
            yield from ((number, EdgeKind.BARRIER) for number in self.children)
        if self.release is not None:
            yield self.release, EdgeKind.BARRIER

    @property
    def label(self) -> str:
        """What the profile calls it: the stage, the reduction, or the barrier's stage."""
        if self.kind is Kind.COMBINE and self.making is not None:
            return self.making.reduction.name
        if self.kind in (Kind.COUNT, Kind.RELEASE):
            return f"barrier:{self.phase.stage.name}"
        return self.phase.stage.name


HaloKey: TypeAlias = tuple[int, Triple, bool]


class HaloPlans:
    """Halo plans of a tiling, worked out once each."""

    def __init__(self, tiling: Tiling) -> None:
        self.tiling = tiling
        self._plans: dict[HaloKey, HaloPlan] = {}

    def plan(self, tile: int, read: Read) -> HaloPlan:
        """The plan by which ``tile`` assembles ``read``."""
        key = (tile, read.halo, read.corners)
        if key not in self._plans:
            self._plans[key] = plan_halo(self.tiling, tile, read.halo, read.corners)
        return self._plans[key]


class TaskGraph:
    """Spells out phases in the order they are emitted, numbering tasks as it goes.

    Parameters
    ----------
    tiling : Tiling
    owners : sequence of int
        Worker that owns each tile; ``ANYWHERE`` throughout lets Dask place tasks.
    """

    def __init__(self, tiling: Tiling, owners: Sequence[int]) -> None:
        self.tiling = tiling
        self.owners = tuple(owners)
        self.plans = HaloPlans(tiling)
        self._count = 0
        self._step_tasks: dict[int, range] = {}  # phase -> numbers of its step tasks
        self._roots: dict[int, int] = {}  # reduction instance -> number of its root task
        self._releases: dict[int, int] = {}  # phase -> number of its barrier's release

    def expand(self, phase: Phase, *, barrier_after: bool) -> list[Task]:
        """All tasks of a phase, producers before consumers."""
        release = self._release_of(phase)
        packs, rims = self._rims(phase)
        steps = [self._step(phase, tile, rims[tile], release) for tile in range(len(self.tiling))]
        self._step_tasks[phase.number] = range(steps[0].number, steps[-1].number + 1)
        tasks = packs + steps
        for making in phase.makes:
            tasks += self._tree(phase, making, steps)
        if barrier_after:
            tasks += self._barrier(phase, steps)
        return tasks

    def root(self, instance: int) -> int:
        """Number of the task that makes a reduction instance's result."""
        return self._roots[instance]

    def step_tasks(self, phase: int) -> range:
        """Numbers of a phase's step tasks, in order of tile."""
        return self._step_tasks[phase]

    def forget(self, live: frozenset[int]) -> list[int]:
        """Drop phases that no later phase reads, and return their numbers."""
        dead = [number for number in self._step_tasks if number not in live]
        for number in dead:
            del self._step_tasks[number]
        return dead

    def forget_control(self, instances: frozenset[int], barred: int | None) -> list[int]:
        """Drop roots and releases that no later phase names; returns the numbers of the roots that are left.

        Parameters
        ----------
        instances : frozenset of int
            Results that may still be named.
        barred : int or None
            The one phase whose barrier may still be waited for.
        """
        self._roots = {instance: root for instance, root in self._roots.items() if instance in instances}
        self._releases = {phase: task for phase, task in self._releases.items() if phase == barred}
        return list(self._roots.values())

    def _next(self) -> int:
        self._count += 1
        return self._count - 1

    def _producer(self, phase: int, tile: int) -> int:
        return -1 - tile if phase == INITIAL else self._step_tasks[phase][tile]

    def _value(self, ref: ValueRef) -> tuple[int, int]:
        return self._roots[ref.instance], ref.row

    def _release_of(self, phase: Phase) -> int | None:
        return self._releases.get(phase.waits_for) if phase.waits_for is not None else None

    def _step(self, phase: Phase, tile: int, rims: list[RimInput], release: int | None) -> Task:
        return Task(
            number=self._next(),
            kind=Kind.STEP,
            phase=phase,
            tile=tile,
            worker=self.owners[tile],
            own={name: self._producer(source, tile) for name, source in phase.sources.items()},
            rims=rims,
            values={name: self._value(ref) for name, ref in phase.values.items()},
            gate=self._value(phase.gate) if phase.gate is not None else None,
            release=release,
        )

    def _rims(self, phase: Phase) -> tuple[list[Task], list[list[RimInput]]]:
        """Rims that each tile reads, and the pack tasks that cut those crossing workers."""
        packs: dict[tuple[int, int, int], Task] = {}
        cuts: dict[tuple[int, int, int], list[tuple[str, Rim, int]]] = {}
        rims: list[list[RimInput]] = [[] for _ in range(len(self.tiling))]
        for read in phase.stage.reads:
            if read.is_local:
                continue
            source = phase.sources[read.field]
            for tile in range(len(self.tiling)):
                for rim in self.plans.plan(tile, read).rims:
                    producer = self._producer(source, rim.neighbour)
                    if not self._crosses(rim.neighbour, tile):
                        rims[tile].append(RimInput(read.field, rim, producer, packed=False))
                        continue
                    key = (source, rim.neighbour, self.owners[tile])
                    if key not in packs:
                        packs[key] = Task(
                            self._next(), Kind.PACK, phase, rim.neighbour, self.owners[rim.neighbour],
                            children=(producer,),
                        )  # fmt: skip
                    cuts.setdefault(key, []).append((read.field, rim, tile))
                    rims[tile].append(RimInput(read.field, rim, packs[key].number, packed=True))
        for key, pack in packs.items():
            pack.cuts = tuple(cuts[key])
        return list(packs.values()), rims

    def _crosses(self, producer: int, consumer: int) -> bool:
        theirs, ours = self.owners[producer], self.owners[consumer]
        return theirs != ours or (ours == ANYWHERE and producer != consumer)

    def _tree(self, phase: Phase, making: Making, steps: list[Task]) -> list[Task]:
        """Nodes of arity TREE_ARITY over tile numbers; each lies with its first child's owner.

        A contribution from another worker is cut out there first: the tile's arrays stay where they are.
        """
        level = [(task.number, task.worker) for task in steps]
        nodes: list[Task] = []
        is_leaf_level = True
        while is_leaf_level or len(level) > 1:
            above = []
            for i in range(0, len(level), TREE_ARITY):
                group = level[i : i + TREE_ARITY]
                home = group[0][1]
                children = []
                for number, worker in group:
                    if is_leaf_level and (worker != home or worker == ANYWHERE):
                        tile = number - steps[0].number
                        pick = Task(self._next(), Kind.PACK, phase, tile, worker, children=(number,), making=making)
                        nodes.append(pick)
                        number = pick.number
                    children.append(number)
                node = Task(self._next(), Kind.COMBINE, phase, -1, home, children=tuple(children), making=making)
                nodes.append(node)
                above.append((node.number, home))
            level, is_leaf_level = above, False
        root = nodes[-1]
        root.previous = self._roots[making.previous] if making.previous is not None else None
        self._roots[making.instance] = root.number
        return nodes

    def _barrier(self, phase: Phase, steps: list[Task]) -> list[Task]:
        """One counter for each worker, and the release; without owners, one counter for each tile."""
        by_worker: dict[int, list[int]] = {}
        for task in steps:
            by_worker.setdefault(task.worker if task.worker != ANYWHERE else -2 - task.tile, []).append(task.number)
        counts = [
            Task(self._next(), Kind.COUNT, phase, -1, max(worker, ANYWHERE), children=tuple(numbers))
            for worker, numbers in by_worker.items()
        ]
        release = Task(
            self._next(),
            Kind.RELEASE,
            phase,
            -1,
            counts[0].worker,
            children=tuple(task.number for task in counts),
        )
        self._releases[phase.number] = release.number
        return [*counts, release]


def conflicts(first: Phase, second: Phase) -> dict[str, set[str]]:
    """Fields for which two phases meet one of Bernstein's conditions on fields updated in place.

    The graph itself needs only ``"flow"`` (second reads what first wrote): versions are renamed, so the
    others bind an in-place code but not this one.

    Source: A. J. Bernstein, IEEE Trans. Electronic Computers EC-15 (1966) 757.
    """
    reads_1, reads_2 = ({read.field for read in phase.stage.reads} for phase in (first, second))
    writes_1, writes_2 = set(first.stage.writes), set(second.stage.writes)
    return {"flow": writes_1 & reads_2, "anti": reads_1 & writes_2, "output": writes_1 & writes_2}
